"""A diagonal scaling of the variables, and the finding that one is needed."""

import numpy as np

from gradcheck.health.sensitivity import spread
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.records.report import Scaling
from gradcheck.wording import number

#: A spread beyond this is told: common practice wants variables within a few powers of ten of each other.
WIDE_SPREAD = 1e4


def suggested_scaling(subject: Subject, gradient: Array) -> Scaling:
    """Divide each variable by its size, rounded to one digit so that it can be typed.

    Parameters
    ----------
    subject : Subject
    gradient : ndarray, shape (n,)
        Derivative of the objective.
    """
    sizes = _one_digit(subject.domain.scale)
    return Scaling(names=subject.names, variables=sizes, spread=spread(gradient, sizes))


def scale_spread(subject: Subject, function: str, gradient: Array) -> list[Finding]:
    """A finding where the raw derivatives of the variables lie far apart."""
    raw = spread(gradient, np.ones_like(gradient))
    scaled = spread(gradient, subject.domain.scale)
    if raw < WIDE_SPREAD:
        return []
    strong, weak = int(np.nanargmax(np.abs(gradient))), _weakest(gradient)
    return [
        Finding(
            code=FindingCode.SCALE_SPREAD,
            severity=Severity.HAZARD if scaled < raw / 10 else Severity.REMARK,
            function=function,
            variable=subject.layout.name(weak),
            where=Location(point=subject.start),
            evidence={"spread": raw, "spread_after_scaling": scaled},
            text=(
                f"the derivatives of {function} lie a factor {number(raw, digits=2)} apart: "
                f"{subject.layout.name(strong)} pulls most, {subject.layout.name(weak)} least."
            ),
            remedy=(
                f"Divide each variable by its size (see Scaling); that leaves a factor {number(scaled, digits=2)}."
                if scaled < raw / 10
                else "Sizes of the variables do not explain it; check units, and scale by curvature if the solver can."
            ),
        )
    ]


def _weakest(gradient: Array) -> int:
    size = np.where(np.isfinite(gradient) & (gradient != 0), np.abs(gradient), np.inf)
    return int(np.argmin(size))


def _one_digit(sizes: Array) -> Array:
    power = 10.0 ** np.floor(np.log10(sizes))
    return np.maximum(np.round(sizes / power), 1.0) * power
