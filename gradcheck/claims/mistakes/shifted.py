"""Entries that are one place off, or several: an index that begins at the wrong number."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.mistakes.explanation import Explanation, places, said
from gradcheck.claims.mistakes.views import Columns, out_of_place
from gradcheck.records.arrays import BoolArray, IntArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import count

#: Every shift is tried for so many columns; for more only short ones, and those by a row of a matrix.
ALL_SHIFTS, SHORT = 64, 4
#: Fewer columns than this that moved are an exchange.
LEAST = 3
COST = 4.0


def _moved(columns: Columns) -> Iterator[Explanation]:
    case = columns.case
    n = case.claim.shape[1]
    wrong = columns.refuted()
    if wrong.size < LEAST:
        return
    yield from _round(columns)
    for shift in _shifts(columns):
        order = np.arange(n) - shift
        order[(order < 0) | (order >= n)] = -1
        reached = order >= 0
        met = columns.met(order) & reached
        for first, stop in _runs(met | (_neutral(columns, order) & reached), met):
            end = _end(columns, first, stop, shift)
            told = met.copy()
            told[:first], told[stop:] = False, False
            if end is not None:
                place, source = end
                order[place], told[place] = source, True
            if told.sum() >= LEAST:
                yield _story(columns, order.copy(), told, shift, end)


def _round(columns: Columns) -> Iterator[Explanation]:
    """All columns moved on by some places, the last ones to the front."""
    n = columns.case.claim.shape[1]
    for shift in range(2, n - 1 if n <= ALL_SHIFTS else 0):
        order = np.roll(np.arange(n), shift)
        if columns.wholly_met(order).all():
            far = count(min(shift, n - shift), "place")
            here, there = columns.label(0), columns.label(int(order[0]))
            text = (
                f"all {n} {_things(columns)} shifted round by {far}: the claim for {here} is that of {there}, and so on"
            )
            yield Explanation(
                code=DiagnosisCode.SHIFTED_ENTRIES,
                where=columns.marks(np.ones(n, bool)),
                bits=columns.case.bits(*columns.predicted(order)),
                cost=COST + places(n),
                tell=said(f"{text}; look for an index that is off."),
            )


def _things(columns: Columns) -> str:
    """What the columns of this view are to the reader."""
    if columns.noun == "row":
        return "rows"
    return "entries" if columns.case.claim.shape[0] == 1 else "columns"


def _shifts(columns: Columns) -> list[int]:
    n = columns.case.claim.shape[1]
    sizes = set(range(1, n if n <= ALL_SHIFTS else SHORT + 1))
    sizes |= {block.shape[-1] for block in columns.case.blocks if len(block.shape) > 1 and block.shape[-1] < n}
    return [sign * size for size in sorted(sizes) for sign in (1, -1)]


def _neutral(columns: Columns, order: IntArray) -> BoolArray:
    """Columns that are right as they are and would be so if they were shifted."""
    return columns.wholly_met(order) & ~np.asarray(columns.case.refuted.any(axis=0))


def _runs(able: BoolArray, met: BoolArray) -> Iterator[tuple[int, int]]:
    """Ends of the runs of able columns, cut to those that are met: (first, stop)."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], able, [False]]).astype(int)))
    for first, stop in zip(edges[::2], edges[1::2], strict=True):
        inside = np.flatnonzero(met[first:stop])
        if inside.size >= 2:
            yield int(first + inside[0]), int(first + inside[-1] + 1)


def _end(columns: Columns, first: int, stop: int, shift: int) -> tuple[int, int] | None:
    """The column that the shift left over, and where its claim came from: round from the other end, or -1 for zero."""
    if abs(shift) != 1:
        return None
    place, source = (first - 1, stop - 1) if shift > 0 else (stop, first)
    if not 0 <= place < columns.case.claim.shape[1]:
        return None
    for candidate in (source, -1):
        if columns.met(np.full(columns.case.claim.shape[1], candidate))[place]:
            return place, candidate
    return None


def _story(columns: Columns, order: IntArray, told: BoolArray, shift: int, end: tuple[int, int] | None) -> Explanation:
    n = order.size
    moved = np.flatnonzero(told)
    inner = moved if end is None else moved[moved != end[0]]
    some = [f"{columns.label(int(j))} is that of {columns.label(int(order[j]))}" for j in inner[:2]]
    far = count(abs(shift), "place")
    text = f"{told.sum()} {_things(columns)} shifted by {far}: the claim for {', for '.join(some)}"
    text += ", and so on" if inner.size > 2 else ""
    if end is not None:
        place, source = end
        text += f"; {columns.label(place)} holds " + ("zero" if source < 0 else f"that of {columns.label(source)}")
    whole = told.sum() >= n - 1
    return Explanation(
        code=DiagnosisCode.SHIFTED_ENTRIES,
        where=columns.marks(told),
        bits=columns.case.bits(*columns.predicted(order)),
        cost=COST + (0.0 if abs(shift) == 1 else places(n)) + (0.0 if whole else 2 * places(n)),
        tell=said(f"{text}; look for an index that is off."),
    )


shifted_entries = out_of_place(_moved)
