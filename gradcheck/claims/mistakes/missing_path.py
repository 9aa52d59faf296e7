"""Entries that lack a contribution: what is missing is simple, or the claim is the derivative of another function."""

from collections.abc import Iterator
from functools import partial

import numpy as np

from gradcheck.claims.mistakes.case import MOST_BITS, Case
from gradcheck.claims.mistakes.explanation import FITTED, Explanation
from gradcheck.claims.mistakes.where import in_words
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import number

COST = 10.0
#: Whole numbers up to this size are no accident.
WHOLE_MOST = 1000
#: Different constants that are tried.
CONSTANTS_MOST = 20
#: Places where such a constant may be found that are looked at.
PLACES_MOST = 500
#: So many entries must hold the same before they are said to hold nothing else.
LEAST_HELD = 3
#: Relative difference up to which all rows lack the same.
SAME = 1e-6


def missing_path(case: Case) -> Iterator[Explanation]:
    """Stories about the difference between derivative and claim."""
    yield from _whole_numbers(case)
    yield from _in_common(case)
    yield from _of_value(case)
    yield from _one_intermediate(case)
    yield from _nothing_but(case)


def _missing(case: Case) -> Array:
    with np.errstate(invalid="ignore"):
        return np.asarray(case.value - case.claim)


def _able(case: Case) -> BoolArray:
    """Refuted entries that were filled in."""
    able: BoolArray = case.refuted & np.isfinite(case.claim) & (case.claim != 0)
    return able


def _whole_numbers(case: Case) -> Iterator[Explanation]:
    """One entry lacks exactly 12, say: a term that is the variable itself times a number of observations."""
    # Whole numbers beside whole numbers are no surprise.
    fractional = np.abs(case.claim - np.round(case.claim)) > 1e-6
    missing = np.where(_able(case) & fractional, _missing(case), np.nan)
    nearest = np.round(missing)
    for amount in np.unique(nearest[np.isfinite(nearest)])[:CONSTANTS_MOST]:
        if 1 <= abs(amount) <= WHOLE_MOST:
            cost = COST + float(np.log2(2 * abs(amount)))
            yield from _story(
                case, np.where(nearest == amount, amount, np.nan), cost, f"lacks {number(amount)} exactly"
            )


def _in_common(case: Case) -> Iterator[Explanation]:
    """Several entries lack the same, or the same times their variable, or over it: a penalty or a barrier left out."""
    missing = np.where(_able(case), _missing(case), np.nan)
    doubt = case.doubt + case.rel_tol * np.abs(case.value)
    words = (
        "lacks the same {} in each",
        "lacks {} times the variable in each, as of a square left out",
        "lacks {} over the variable in each, as of a logarithm or a product left out",
    )
    for shape, told in zip(_shapes(case), words, strict=True):
        for amount in _repeated(missing, doubt, shape, least=2):
            yield from _story(case, amount * shape, FITTED, told.format(number(amount, 6)))


def _shapes(case: Case) -> tuple[Array, Array, Array]:
    """What simple terms have for derivatives: a constant, the variable, one over it."""
    x = np.broadcast_to(case.x, case.claim.shape)
    with np.errstate(all="ignore"):
        return np.ones(case.claim.shape), x, 1 / x


def _nothing_but(case: Case) -> Iterator[Explanation]:
    """What several entries do hold is simple: one term of the model alone, the others are not there."""
    held = np.where(_able(case), case.claim, np.nan)
    doubt = case.rel_tol * np.abs(case.claim)
    words = ("{} in each", "{} times the variable", "{} over the variable")
    for shape, told in zip(_shapes(case), words, strict=True):
        for amount in _repeated(held, doubt, shape, least=LEAST_HELD):
            predicted, what = amount * shape, told.format(number(amount, 6))
            where = _able(case) & case.met(predicted, np.zeros_like(predicted))
            yield Explanation(
                code=DiagnosisCode.MISSING_PATH,
                where=where,
                bits=case.bits(predicted, np.zeros_like(predicted)),
                cost=FITTED,
                tell=partial(_holding, case, what=what),
            )


def _holding(case: Case, left: BoolArray, what: str) -> str:
    return (
        f"{in_words(case, left)}: the claim holds nothing but {what}; the other terms of the model are not "
        "differentiated there."
    )


def _repeated(amounts: Array, doubt: Array, shape: Array, least: int) -> list[float]:
    """Factors of `shape` that so many entries have in common, as far as can be seen."""
    with np.errstate(all="ignore"):
        factors, doubts = (amounts / shape).ravel(), np.abs(doubt / shape).ravel()
    usable = np.isfinite(factors) & (np.abs(factors) > doubts)
    order = np.argsort(factors[usable])
    factors, doubts = factors[usable][order], doubts[usable][order]
    found: list[float] = []
    ends = slice(least - 1, None), slice(None, factors.size - least + 1)
    near = np.abs(factors[ends[0]] - factors[ends[1]]) <= doubts[ends[0]] + doubts[ends[1]]
    for place in np.flatnonzero(near)[:PLACES_MOST].tolist():
        together = slice(place, place + least)
        amount = float(factors[together][np.argmin(doubts[together])])
        seen = found and abs(amount - found[-1]) <= 1e-6 * abs(amount)
        if not seen and np.all(np.abs(factors[together] - amount) <= doubts[together] + doubts[together].min()):
            found.append(amount)
    return found[:CONSTANTS_MOST]


def _of_value(case: Case) -> Iterator[Explanation]:
    """What is missing is the value over the variable: one half of a product rule."""
    if case.values.size != case.claim.shape[0]:
        return
    with np.errstate(all="ignore"):
        amount = case.values[:, None] / case.x[None, :]
    yield from _story(case, amount, COST, "lacks the value over the variable, as one half of a product rule")


def _story(case: Case, missing: Array, cost: float, words: str) -> Iterator[Explanation]:
    with np.errstate(all="ignore"):
        predicted = case.value - missing
    where = (
        _able(case)
        & np.isfinite(predicted)
        & np.isfinite(missing)
        & case.met(predicted, case.doubt + case.rel_tol * np.abs(case.value))
    )
    if where.any():
        yield Explanation(
            code=DiagnosisCode.MISSING_PATH,
            where=where,
            bits=case.bits(predicted, case.doubt + case.rel_tol * np.abs(case.value)),
            cost=cost,
            tell=lambda left: f"{in_words(case, left)}: the claim {words}; look for a term that is not differentiated.",
        )


def _one_intermediate(case: Case) -> Iterator[Explanation]:
    """What a Jacobian lacks is a column times a row: a path through one quantity in between."""
    missing = np.where(case.refuted, _missing(case), 0.0)
    if min(case.claim.shape) < 2 or not np.isfinite(missing).all():
        return
    with np.errstate(all="ignore"):
        weight = np.where(case.refuted, np.abs(missing) / (case.doubt + case.rel_tol * np.abs(case.value)), 0.0)
        i, j = np.unravel_index(int(np.argmax(np.nan_to_num(weight))), weight.shape)
        column, row = missing[:, j], missing[i] / missing[i, j]
        predicted = case.value - np.outer(column, row)
        margin = case.doubt + case.rel_tol * np.abs(case.value)
        doubt = margin + np.outer(margin[:, j], np.abs(row)) + np.outer(np.abs(column / missing[i, j]), margin[i])
    where = case.refuted & case.met(predicted, doubt)
    bits = case.bits(predicted, doubt)
    # The row and the column that were fitted are no evidence.
    bits[i], bits[:, j] = 0.0, 0.0
    rows, columns = where.any(axis=1).sum(), where.any(axis=0).sum()
    if not (where == case.refuted).all() or rows < 2 or columns < 2:
        return
    yield Explanation(
        code=DiagnosisCode.MISSING_PATH,
        where=where,
        bits=bits,
        cost=COST,
        tell=partial(_intermediate, case, same=bool(np.ptp(column / missing[i, j]) <= SAME)),
    )


def _intermediate(case: Case, left: BoolArray, same: bool) -> str:
    if same:
        what, path = "the same in every row", "a term that all these outputs share"
    else:
        what, path = (
            "one column times one row",
            "the path through one intermediate quantity, on which all of them depend,",
        )
    return (
        f"{in_words(case, left)}: what the claim lacks is {what}, in all {left.sum()} entries; {path} is left out (or "
        "counted twice)."
    )


def of_another_function(case: Case, where: BoolArray) -> Explanation:
    """The story of refuted entries that are known to be a derivative, though not of the model."""
    return Explanation(
        code=DiagnosisCode.MISSING_PATH,
        where=where,
        bits=np.full(case.claim.shape, MOST_BITS),
        cost=COST,
        tell=lambda left: (
            f"{in_words(case, left)}: in these entries the claim is the exact derivative of some other function (its "
            "own derivatives are symmetric); a term of the model is left out or is one too many, or a constant differs."
        ),
    )
