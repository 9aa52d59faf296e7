"""No point is evaluated twice unless freshness is asked for."""

from collections.abc import Sequence
from typing import Any

import numpy as np

from gradcheck.evaluation.calls import Call, Engine, Outcome, Piece, assembled
from gradcheck.evaluation.moves import fingerprint
from gradcheck.evaluation.protocol import Status
from gradcheck.records.arrays import Array, BoolArray, IntArray

#: Bytes of outcomes kept; beyond it new ones are simply not remembered.
_MOST_BYTES = 256_000_000
#: What one point takes beside its values: key, place, dictionary.
_OVERHEAD = 200


class _Drawer:
    """Remembered points, numbered as they came, and the outcomes they stand in one after another."""

    __slots__ = ("firsts", "number", "outcomes", "size")

    def __init__(self) -> None:
        self.number: dict[bytes, int] = {}
        self.firsts: list[int] = []
        self.outcomes: list[Outcome] = []
        self.size = 0

    def reserve(self, size: int) -> int:
        """Numbers for `size` points whose outcome is awaited: which outcome it will be."""
        self.firsts.append(self.size)
        self.outcomes.append(Outcome())
        self.size += size
        return len(self.outcomes) - 1

    def pieces(self, numbers: IntArray) -> list[Piece]:
        """Where the points of these numbers are."""
        which = np.searchsorted(self.firsts, numbers, side="right") - 1
        found: list[Piece] = []
        for outcome in np.unique(which):
            mine = np.flatnonzero(which == outcome)
            found.append((self.outcomes[outcome], numbers[mine] - self.firsts[outcome], mine))
        return found


def cached(engine: Engine, start: Array) -> Engine:
    """`engine` with a memory of its outcomes; calls marked fresh are always made (and not remembered).

    Parameters
    ----------
    engine : Engine
    start : ndarray, shape (n,)
        Most points differ from it in one entry, which makes their keys short.
    """
    drawers: dict[tuple[Any, ...], _Drawer] = {}
    held = 0

    def drawer_of(call: Call) -> _Drawer:
        return _Drawer() if call.fresh else drawers.setdefault(_title(call), _Drawer())

    def recall(calls: Sequence[Call]) -> list[Outcome]:
        nonlocal held
        asked = [_Asked(call, drawer_of(call), start) for call in calls]
        new = [one for one in asked if one.new]
        try:
            for one, outcome in zip(new, engine([one.missing() for one in new]) if new else (), strict=True):
                one.learn(outcome)
        except BaseException:
            for one in new:
                one.forget(np.ones(len(one.new), bool))
            raise
        outcomes = [one.outcome() for one in asked]
        for one in new:
            held += one.settle(keep=held < _MOST_BYTES)
        return outcomes

    return recall


def _title(call: Call) -> tuple[Any, ...]:
    """What all points in one drawer have in common."""
    rows = None if call.rows is None else fingerprint(call.rows.tobytes())
    return call.run, call.function, call.arithmetic, call.source, call.level, rows


class _Asked:
    """One call: which of its points are new, and where the others are."""

    def __init__(self, call: Call, drawer: _Drawer, start: Array) -> None:
        self.call, self.drawer = call, drawer
        self.keys: list[bytes] = [] if call.fresh else call.moves.keys(start)
        self.numbers, self.new = _numbered(self.keys, drawer) if not call.fresh else ([], range(len(call)))
        self.place = drawer.reserve(len(self.new)) if self.new else -1

    def missing(self) -> Call:
        return self.call if len(self.new) == len(self.call) else self.call.at(np.array(self.new))

    def learn(self, outcome: Outcome) -> None:
        self.drawer.outcomes[self.place] = outcome

    def outcome(self) -> Outcome:
        made = self.drawer.outcomes[self.place] if self.new else Outcome()
        if len(self.new) == len(self.call):
            return made
        return assembled(self.drawer.pieces(np.array(self.numbers)), len(self.call), spent=made.spent)

    def settle(self, *, keep: bool) -> int:
        """Keep what came, if there is room; bytes taken. A refusal is no answer to be remembered."""
        if self.call.fresh:
            return 0
        outcome = self.drawer.outcomes[self.place]
        if not keep:
            self.forget(np.ones(len(self.new), bool))
            self.learn(Outcome())
            return 0
        if outcome.spent < len(self.new):
            self.forget(_refused(outcome, len(self.new)))
        return outcome.spent * _OVERHEAD + sum(values.nbytes for values in outcome.values.values())

    def forget(self, which: BoolArray) -> None:
        for position in np.flatnonzero(which).tolist() if self.keys else ():
            self.drawer.number.pop(self.keys[self.new[position]], None)


def _numbered(keys: list[bytes], drawer: _Drawer) -> tuple[Sequence[int], Sequence[int]]:
    """The number of each point in the drawer, and which points are new there: a point that stands twice is so once."""
    number, size = drawer.number, drawer.size
    if number.keys().isdisjoint(keys) and len(set(keys)) == len(keys):
        numbers = range(size, size + len(keys))
        number.update(zip(keys, numbers, strict=True))
        return numbers, range(len(keys))
    found: list[int] = []
    new: list[int] = []
    for i, key in enumerate(keys):
        if key not in number:
            number[key] = size + len(new)
            new.append(i)
        found.append(number[key])
    return found, new


def _refused(outcome: Outcome, size: int) -> BoolArray:
    refused = np.ones(size, bool)
    for states in outcome.status.values():
        refused &= states == Status.REFUSED
    return refused
