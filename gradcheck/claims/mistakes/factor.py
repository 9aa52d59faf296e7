"""Entries that are off by one constant factor."""

import math

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.records.arrays import BoolArray
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed, number

#: Factors that have a name of their own, with what they suggest.
ANGLES = {math.pi / 180: "π/180", 180 / math.pi: "180/π"}
KNOWN = {
    2.0: "2",
    0.5: "1/2",
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
    math.pi: "π",
    2 * math.pi: "2π",
}
#: Powers of ten: prefixes, per cent (2), centimetres (2), bar (5) and decibar (4) for pascal, and the like.
UNITS = {10.0**k: f"1e{k}" for k in range(-9, 10) if abs(k) > 2} | {
    10.0: "10",
    0.1: "1/10",
    100.0: "100",
    0.01: "1/100",
    60.0: "60",
    1 / 60: "1/60",
    3600.0: "3600",
    1 / 3600: "1/3600",
}


def constant_factor(case: Case) -> Diagnosis | None:
    """One factor explains several refuted entries, or a well-known factor explains one."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = case.claim / case.value
    usable = case.refuted & np.isfinite(ratio) & (ratio != 0) & (np.abs(ratio + 1) > 1e-6)
    best: tuple[int, float, BoolArray] | None = None
    for candidate in _candidates(ratio[usable]):
        where = usable & case.explains(candidate * case.value)
        count = int(where.sum())
        if count and (count > 1 or _named(candidate)) and (best is None or count > best[0]):
            best = count, candidate, where
    if best is None:
        return None
    _, factor, where = best
    return _diagnosis(case, factor, where)


def _candidates(ratios: np.ndarray[tuple[int, ...], np.dtype[np.float64]]) -> list[float]:
    """Well-known factors first: where one fits, it is the better story; then the ratios themselves."""
    known = [*ANGLES, *UNITS, *KNOWN]
    return [*known, *(-f for f in known), *(float(r) for r in np.unique(ratios)[:50])]


def _named(factor: float) -> str:
    return {**ANGLES, **UNITS, **KNOWN}.get(abs(factor), "")


def _diagnosis(case: Case, factor: float, where: BoolArray) -> Diagnosis:
    names = case.names(where)
    sign = "−" if factor < 0 else ""
    shown = sign + (_named(factor) or number(abs(factor), digits=6))
    start = f"{listed(names)}: the claim is {shown} times the derivative"
    if abs(factor) in ANGLES:
        return Diagnosis(
            code=DiagnosisCode.DEGREES_FOR_RADIANS,
            text=f"{start}; an angle in degrees where radians are due, or the reverse.",
            entries=names,
        )
    n = case.claim.shape[1]
    everything = bool((where == case.refuted).all()) and where.sum() > max(1, n // 2)
    if n > 2 and everything and any(abs(abs(factor) - f) <= 1e-9 * f for f in (n, 1 / n)):
        return Diagnosis(
            code=DiagnosisCode.MEAN_FOR_SUM,
            text=f"{start}, and there are {n} variables; a mean was differentiated as a sum, or the reverse.",
            entries=names,
        )
    if abs(factor) in UNITS:
        return Diagnosis(
            code=DiagnosisCode.UNIT_FACTOR, text=f"{start}; look for a conversion between units.", entries=names
        )
    mend = "look for a factor lost or doubled in these terms, such as an inner derivative."
    return Diagnosis(code=DiagnosisCode.CONSTANT_FACTOR, text=f"{start}; {mend}", entries=names)
