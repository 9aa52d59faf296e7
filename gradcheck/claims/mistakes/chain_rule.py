"""Entries by another variable than the model's: its logarithm, its square, its logit, or the reverse."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.explanation import Explanation
from gradcheck.claims.mistakes.where import in_words
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import number

COST = 8.0
#: So many values of variables are shown.
SHOWN = 3


@dataclass(frozen=True, slots=True)
class Transform:
    """What the claim is times the derivative, with `{}` for the variable; and which derivative that would be."""

    factor: str
    of: Callable[[Array], Array]
    meaning: str


def _logistic(x: Array) -> Array:
    return np.asarray(0.5 * (1.0 + np.tanh(0.5 * x)))


_LN10 = float(np.log(10.0))
TRANSFORMS = (
    Transform("{}", lambda x: x, "the derivative by log {} where that by {} is due"),
    Transform("1/{}", lambda x: 1 / x, "a factor {} of the chain rule is missing, as for a logarithm"),
    Transform("exp({})", np.exp, "as if {} were the logarithm of the model's own variable: a factor too much"),
    Transform("exp(−{})", lambda x: np.exp(-x), "the factor exp({}) is missing: {} is the logarithm of what is used"),
    Transform("2·{}", lambda x: 2 * x, "a factor of the chain rule as for a square"),
    Transform("1/(2·{})", lambda x: 0.5 / x, "the factor 2·{} is missing, as where {} is squared"),
    Transform("2·√{}", lambda x: 2 * np.sqrt(x), "the derivative by the square root of {} where that by {} is due"),
    Transform("1/(2·√{})", lambda x: 0.5 / np.sqrt(x), "a factor of the chain rule as for a square root"),
    Transform("{0}·(1 − {0})", lambda x: x * (1 - x), "the derivative by the logit of {} where that by {} is due"),
    Transform("1/({0}·(1 − {0}))", lambda x: 1 / (x * (1 - x)), "the factor {0}·(1 − {0}) is missing, as for a logit"),
    Transform(
        "s·(1 − s), s = 1/(1 + exp(−{}))",
        lambda x: _logistic(x) * _logistic(-x),
        "as if {} were a share: a factor too much",
    ),
    Transform(
        "1/(s·(1 − s)), s = 1/(1 + exp(−{}))",
        lambda x: 1 / (_logistic(x) * _logistic(-x)),
        "the factor s·(1 − s) is missing: {} is the logit of what is used",
    ),
    Transform("(1 − {}²)", lambda x: 1 - x**2, "a factor of the chain rule as for tanh"),
    Transform("1/(1 − {}²)", lambda x: 1 / (1 - x**2), "the factor 1 − {}² is missing, as for tanh"),
    Transform("−{}²", lambda x: -(x**2), "the derivative by 1/{} where that by {} is due"),
    Transform("−1/{}²", lambda x: -1 / x**2, "a factor of the chain rule as for the reciprocal"),
    Transform("ln 10·{}", lambda x: _LN10 * x, "the derivative by log10 {} where that by {} is due"),
    Transform("1/(ln 10·{})", lambda x: 1 / (_LN10 * x), "a factor of the chain rule as for log10"),
)


def missing_chain_rule(case: Case) -> Iterator[Explanation]:
    """The ratio of claim and derivative is a simple function of the entry's own variable."""
    if not np.isfinite(case.x).any():
        return
    for transform in TRANSFORMS:
        with np.errstate(all="ignore"):
            factor = np.broadcast_to(transform.of(case.x), case.claim.shape)
            predicted, doubt = factor * case.value, np.abs(factor) * case.doubt
        able = case.refuted & np.isfinite(factor) & (case.claim != 0)
        where = able & case.met(predicted, doubt)
        if where.any():
            yield Explanation(
                code=DiagnosisCode.MISSING_CHAIN_RULE,
                where=where,
                bits=case.bits(predicted, doubt),
                cost=COST,
                tell=partial(_sentence, case, transform=transform),
                brief=transform.factor.format("x"),
            )


def _sentence(case: Case, left: BoolArray, transform: Transform) -> str:
    columns = np.flatnonzero(left.any(axis=0))
    names = [case.variable(int(j)) for j in columns]
    sizes = ", ".join(f"{name} = {number(case.x[j], 4)}" for name, j in zip(names, columns[:SHOWN], strict=False))
    if len(names) == 1:
        factor, meaning = (_filled(text, names[0]) for text in (transform.factor, transform.meaning))
    else:
        factor, meaning = (_filled(text, "x") for text in (transform.factor, transform.meaning))
        factor += " (x the variable of the entry)"
    more = ", ..." if len(names) > SHOWN else ""
    start = f"{in_words(case, left)}: the claim is {factor} times the derivative ({sizes}{more})"
    return f"{start}; {meaning}."


def _filled(text: str, name: str) -> str:
    return text.replace("{0}", name).replace("{}", name)
