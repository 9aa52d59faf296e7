"""Entries that stand in each other's place: pairs, or a few that went round."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.mistakes.explanation import Explanation, places, said
from gradcheck.claims.mistakes.views import Columns, out_of_place
from gradcheck.records.arrays import BoolArray, IntArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed

#: More wrong columns than this are no simple exchange.
MOST = 64
#: So many that went round are still told one by one.
ROUND_MOST = 8
COST = 3.0


def _exchanged(columns: Columns) -> Iterator[Explanation]:
    wrong = columns.refuted()
    if not 2 <= wrong.size <= MOST:
        return
    fits = _fits(columns, wrong)
    n = columns.case.claim.shape[1]
    for a, b in np.argwhere(np.triu(fits & fits.T, 1)):
        i, j = int(wrong[a]), int(wrong[b])
        order = np.arange(n)
        order[[i, j]] = j, i
        yield _story(columns, order, _exchange(columns, i, j), COST + 2 * places(n))
    yield from _rounds(columns, wrong, fits)


def _fits(columns: Columns, wrong: IntArray) -> BoolArray:
    """(k, k): whether the claim in one column is the derivative of another, in every row."""
    case, n = columns.case, columns.case.claim.shape[1]
    fits = np.zeros((wrong.size, wrong.size), bool)
    for b, j in enumerate(wrong):
        fits[:, b] = columns.met(np.full(n, j))[wrong]
    # A column that is zero as claimed tells nothing of where it belongs.
    fits &= (case.claim[:, wrong] != 0).any(axis=0)[:, None] | (case.value[:, wrong] != 0).any(axis=0)[:, None]
    np.fill_diagonal(fits, False)
    return fits


def _rounds(columns: Columns, wrong: IntArray, fits: BoolArray) -> Iterator[Explanation]:
    """Three or more columns, each of which holds what is due in the next one."""
    n = columns.case.claim.shape[1]
    unique = (fits.sum(axis=1) == 1) & (fits.sum(axis=0) == 1)
    following = {int(a): int(np.flatnonzero(fits[a])[0]) for a in np.flatnonzero(unique)}
    seen: set[int] = set()
    for start in following:
        way, place = [], start
        while place in following and place not in seen:
            seen.add(place)
            way.append(place)
            place = following[place]
        if place == start and 3 <= len(way) <= ROUND_MOST:
            here = wrong[way]
            order = np.arange(n)
            order[here] = np.roll(here, -1)
            shown = listed([columns.label(int(j)) for j in here], limit=ROUND_MOST)
            due = listed([columns.label(int(j)) for j in np.roll(here, -1)], limit=ROUND_MOST)
            text = f"{shown}: the claim holds what is due in {due}; check the order of the {_of(columns)}."
            yield _story(columns, order, text, COST + 3.0 + len(way) * places(n))


def _exchange(columns: Columns, i: int, j: int) -> str:
    a, b = columns.label(i), columns.label(j)
    return (
        f"the claims for {a} and {b} stand in each other's place (each is the derivative that is due in the other); "
        f"check the order of the {_of(columns)}."
    )


def _of(columns: Columns) -> str:
    return "outputs" if columns.noun == "row" else "variables"


def _story(columns: Columns, order: IntArray, text: str, cost: float) -> Explanation:
    moved = order != np.arange(order.size)
    return Explanation(
        code=DiagnosisCode.SWAPPED_ENTRIES,
        where=columns.marks(moved),
        bits=columns.case.bits(*columns.predicted(order)),
        cost=cost,
        tell=said(text),
    )


swapped_entries = out_of_place(_exchanged)
