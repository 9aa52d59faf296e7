"""No point is evaluated twice unless freshness is asked for."""

from collections.abc import Hashable, Sequence
from typing import Any, TypeAlias

import numpy as np

from gradcheck.evaluation.calls import Call, Engine, Outcome, Piece, assembled
from gradcheck.evaluation.moves import fingerprint
from gradcheck.evaluation.protocol import Status
from gradcheck.records.arrays import Array, BoolArray

#: Bytes of outcomes kept; beyond it new ones are simply not remembered.
_MOST_BYTES = 256_000_000
#: What one point takes beside its values: key, place, dictionary.
_OVERHEAD = 400


class _Found:
    """An outcome, or one that is awaited."""

    __slots__ = ("outcome",)

    def __init__(self) -> None:
        self.outcome = Outcome()


#: Where the values of a point are: in which outcome, and as which of its points.
Place: TypeAlias = tuple[_Found, int]
Drawer: TypeAlias = dict[Hashable, Place]


def cached(engine: Engine, start: Array) -> Engine:
    """`engine` with a memory of its outcomes; calls marked fresh are always made (and not remembered).

    Parameters
    ----------
    engine : Engine
    start : ndarray, shape (n,)
        Most points differ from it in one entry, which makes their keys short.
    """
    drawers: dict[tuple[Any, ...], Drawer] = {}
    held = 0

    def recall(calls: Sequence[Call]) -> list[Outcome]:
        nonlocal held
        asked = [_Asked(call, {} if call.fresh else drawers.setdefault(_title(call), {}), start) for call in calls]
        new = [one for one in asked if one.new]
        try:
            for one, outcome in zip(new, engine([one.missing() for one in new]) if new else (), strict=True):
                one.found.outcome = outcome
        except BaseException:
            for one in new:
                one.forget(np.ones(len(one.new), bool))
            raise
        for one in new:
            held += one.settle(keep=held < _MOST_BYTES)
        return [one.outcome() for one in asked]

    return recall


def _title(call: Call) -> tuple[Any, ...]:
    """What all points in one drawer have in common."""
    rows = None if call.rows is None else fingerprint(call.rows.tobytes())
    return call.run, call.function, call.arithmetic, call.source, call.level, rows


class _Asked:
    """One call: which of its points are new, and where the others are."""

    def __init__(self, call: Call, drawer: Drawer, start: Array) -> None:
        self.call, self.drawer, self.found = call, drawer, _Found()
        self.new: list[int] = list(range(len(call))) if call.fresh else []
        self.keys: list[Hashable] = [] if call.fresh else call.moves.keys(start)
        self.places: list[Place] = []
        # A point that stands twice in a batch is new once only.
        for i, key in enumerate(self.keys):
            place = drawer.get(key)
            if place is None:
                place = drawer[key] = self.found, len(self.new)
                self.new.append(i)
            self.places.append(place)

    def missing(self) -> Call:
        return self.call if len(self.new) == len(self.call) else self.call.at(np.array(self.new))

    def settle(self, *, keep: bool) -> int:
        """Keep what came, if there is room; bytes taken. A refusal is no answer to be remembered."""
        if self.call.fresh:
            return 0
        if not keep:
            self.forget(np.ones(len(self.new), bool))
            return 0
        if self.found.outcome.spent < len(self.new):
            self.forget(_refused(self.found.outcome, len(self.new)))
        held = sum(values.nbytes for values in self.found.outcome.values.values())
        return self.found.outcome.spent * _OVERHEAD + held

    def forget(self, which: BoolArray) -> None:
        for position in np.flatnonzero(which):
            if self.keys:
                self.drawer.pop(self.keys[self.new[position]], None)

    def outcome(self) -> Outcome:
        if len(self.new) == len(self.call):
            return self.found.outcome
        places: dict[_Found, tuple[list[int], list[int]]] = {}
        for i, (found, position) in enumerate(self.places):
            theirs, mine = places.setdefault(found, ([], []))
            theirs.append(position)
            mine.append(i)
        pieces: list[Piece] = [(found.outcome, np.array(t), np.array(m)) for found, (t, m) in places.items()]
        return assembled(pieces, len(self.call), spent=self.found.outcome.spent)


def _refused(outcome: Outcome, size: int) -> BoolArray:
    refused = np.ones(size, bool)
    for states in outcome.status.values():
        refused &= states == Status.REFUSED
    return refused
