"""Entries that are off by one constant factor: a plain one, an angle's, a unit's, or the number of observations."""

import math
from collections.abc import Iterable, Iterator
from functools import partial

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.explanation import FITTED, Explanation
from gradcheck.claims.mistakes.where import in_words
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import number

#: Factors that have a name of their own, and what it takes to say which.
ANGLES = {math.pi / 180: "π/180", 180 / math.pi: "180/π"}
ANGLE_COST = 5.0
SIMPLE = {2.0: "2", 0.5: "1/2"}
SIMPLE_COST = 4.0
KNOWN = {
    4.0: "4",
    0.25: "1/4",
    3.0: "3",
    1 / 3: "1/3",
    2 / 3: "2/3",
    3 / 2: "3/2",
    3 / 4: "3/4",
    4 / 3: "4/3",
    math.log(10): "ln 10",
    1 / math.log(10): "1/ln 10",
    math.log(2): "ln 2",
    1 / math.log(2): "1/ln 2",
    math.pi: "π",
    1 / math.pi: "1/π",
    2 * math.pi: "2π",
    1 / (2 * math.pi): "1/(2π)",
    math.sqrt(2): "√2",
    1 / math.sqrt(2): "1/√2",
}
KNOWN_COST = 7.0
#: Powers of ten: prefixes, per cent (2), centimetres (2), bar (5) and decibar (4) for pascal, and the like.
TENS = {10.0**k: f"1e{k}" for k in range(-12, 13) if abs(k) > 2} | {
    10.0: "10",
    0.1: "1/10",
    100.0: "100",
    0.01: "1/100",
}
#: Conversions that are exact by definition, or as the source gives them: NIST Special Publication 811 (2008), appendix
#: B, and the constants of the SI as of 2019; from memory.
CONVERSIONS = {
    60.0: "minutes and seconds",
    3600.0: "hours and seconds",
    86400.0: "days and seconds",
    3.6: "km/h and m/s",
    24.0: "days and hours",
    365.25: "years and days",
    0.3048: "feet and metres",
    0.0254: "inches and metres",
    25.4: "inches and millimetres",
    2.54: "inches and centimetres",
    1609.344: "miles and metres",
    1852.0: "nautical miles and metres",
    0.514444444444444: "knots and m/s",
    0.45359237: "pounds and kilograms",
    4.4482216152605: "pounds-force and newtons",
    6894.757293168361: "psi and pascals",
    101325.0: "atmospheres and pascals",
    133.322387415: "millimetres of mercury and pascals",
    9.80665: "kilograms-force and newtons, standard gravity",
    4.1868: "calories and joules",
    4.184: "thermochemical calories and joules",
    1055.05585262: "BTU and joules",
    745.6998715822702: "horsepower and watts",
    735.49875: "metric horsepower and watts",
    1.8: "degrees Fahrenheit and kelvins",
    3.785411784: "gallons and litres",
    1.602176634e-19: "electronvolts and joules",
    8.31446261815324: "the gas constant",
    96.4853321233: "electronvolts and kJ/mol",
    30 / math.pi: "revolutions per minute and rad/s",
}
UNIT_COST = 9.0
#: A whole number, or one over it, up to this size in all entries may be a number of observations.
OBSERVATIONS_MOST = 100_000
#: Margin of the quick look at factors, over the doubt about a ratio.
NEAR = 4.0


def unit_of(factor: float) -> tuple[str, str]:
    """How a conversion is written, and between what; empty for no conversion."""
    for known, label in TENS.items():
        if math.isclose(factor, known, rel_tol=1e-12):
            return label, ""
    for known, words in CONVERSIONS.items():
        for value, over in ((known, ""), (1 / known, "1/")):
            if math.isclose(factor, value, rel_tol=1e-12):
                return f"{over}{number(known, 9)}", words
    return "", ""


def constant_factor(case: Case) -> Iterator[Explanation]:
    """A factor with a name, or one that several entries share."""
    near = _Near(case)
    for factor in near.only(SIMPLE | KNOWN):
        code, cost = DiagnosisCode.CONSTANT_FACTOR, SIMPLE_COST if factor in SIMPLE else KNOWN_COST
        yield from _story(case, factor, code, cost, (SIMPLE | KNOWN)[factor], _PLAIN)
    for factor in _shared(case):
        yield from _story(case, factor, DiagnosisCode.CONSTANT_FACTOR, FITTED, _written(factor), _PLAIN)


def degrees_for_radians(case: Case) -> Iterator[Explanation]:
    """The factor between degrees and radians."""
    for factor in _Near(case).only(ANGLES):
        yield from _story(case, factor, DiagnosisCode.DEGREES_FOR_RADIANS, ANGLE_COST, ANGLES[factor], _ANGLE)


def unit_factor(case: Case) -> Iterator[Explanation]:
    """The factor of a conversion between units."""
    known = [*TENS, *CONVERSIONS, *(1 / factor for factor in CONVERSIONS)]
    for factor in _Near(case).only(known):
        label, words = unit_of(factor)
        mend = f"the conversion between {words}." if words else "look for a conversion between units, or per cent."
        yield from _story(case, factor, DiagnosisCode.UNIT_FACTOR, UNIT_COST, label, mend)


def mean_for_sum(case: Case) -> Iterator[Explanation]:
    """All entries are off by a whole number, or by one over it: the number of what is summed."""
    ratio = case.ratios()[case.refuted]
    if ratio.size < 2 or not case.all_wrong:
        return
    for inverse in (False, True):
        with np.errstate(divide="ignore", invalid="ignore"):
            size = float(np.median(1 / ratio if inverse else ratio))
        amount = round(size) if math.isfinite(size) else 0
        if 3 <= amount <= OBSERVATIONS_MOST:
            factor, label = (1 / amount, f"1/{amount:,}") if inverse else (float(amount), f"{amount:,}")
            known = _sizes(case).get(amount, "")
            cost = 3.0 if known else 7.0 + math.log2(amount)
            mend = (
                f"the derivative of a mean over {amount:,} terms where the model sums them"
                if inverse
                else f"the derivative of a sum over {amount:,} terms where the model takes their mean"
            )
            mend += f" (there are {known})." if known else "."
            yield from _story(case, factor, DiagnosisCode.MEAN_FOR_SUM, cost, label, mend, signed=False)


class _Near:
    """Says which factors any entry comes near, at little cost: most cases come near none of a hundred."""

    def __init__(self, case: Case) -> None:
        ratio, exact = np.abs(case.ratios())[case.refuted], _exactness(case)[case.refuted]
        usable = np.isfinite(ratio) & (ratio > 0)
        self.logs, self.room = np.log(ratio[usable]), NEAR * exact[usable]

    def only(self, factors: Iterable[float]) -> list[float]:
        return [factor for factor in factors if np.any(np.abs(self.logs - math.log(factor)) <= self.room)]


_PLAIN = "look for a factor lost or doubled in these terms, such as an inner derivative."
_ANGLE = "an angle in degrees where radians are due, or the reverse."


def _sizes(case: Case) -> dict[int, str]:
    """Numbers of things that a mean might be taken over, and what they count."""
    m, n = case.claim.shape
    return {n: f"{n} variables"} | ({m: f"{m} outputs"} if m > 1 else {})


def _story(
    case: Case, factor: float, code: DiagnosisCode, cost: float, label: str, mend: str, *, signed: bool = True
) -> Iterator[Explanation]:
    for sign in (1.0, -1.0) if signed else (1.0,):
        predicted, doubt = sign * factor * case.value, factor * case.doubt
        where = case.refuted & (case.claim != 0) & case.met(predicted, doubt)
        if where.any():
            shown = label if sign > 0 else f"−{label}"
            yield Explanation(
                code=code,
                where=where,
                bits=case.bits(predicted, doubt),
                cost=cost + (0.0 if sign > 0 else 1.0),
                tell=partial(_sentence, case, shown=shown, mend=mend),
                brief=f"a factor of {shown}",
            )


def _sentence(case: Case, left: BoolArray, shown: str, mend: str) -> str:
    return f"{in_words(case, left)}: the claim is {shown} times the derivative; {mend}"


def _shared(case: Case) -> list[float]:
    """Sizes of ratios that several entries have in common, each by its most exact entry; at most fifty."""
    ratio = case.ratios()
    usable = case.refuted & np.isfinite(ratio) & (ratio != 0)
    if usable.sum() < 2:
        return []
    ratios, exact = np.abs(ratio[usable]), _exactness(case)[usable]
    order = np.argsort(ratios)
    ratios, exact = ratios[order], exact[order]
    near = np.flatnonzero(np.diff(ratios) <= (exact[:-1] + exact[1:]) * ratios[1:])
    found: list[float] = []
    last = -np.inf
    for place in near[:50]:
        factor = float(ratios[place] if exact[place] <= exact[place + 1] else ratios[place + 1])
        if factor - last > 1e-6 * factor:
            found.append(factor)
            last = factor
    return found


def _written(factor: float) -> str:
    """A fitted factor; one over a whole number as such."""
    inverse = round(1 / factor) if factor > 1e-6 else 0
    plain = 2 <= inverse <= OBSERVATIONS_MOST and math.isclose(factor * inverse, 1.0, rel_tol=1e-9)
    return f"1/{inverse:,}" if plain else number(factor, 6)


def _exactness(case: Case) -> Array:
    """Relative doubt about each ratio."""
    with np.errstate(all="ignore"):
        relative = case.rel_tol + case.doubt / np.abs(case.value)
    return np.asarray(np.nan_to_num(relative, nan=np.inf))
