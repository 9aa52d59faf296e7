"""What is found on a line: data and evidence, no sentences."""

from dataclasses import dataclass, field, replace

import numpy as np

from gradcheck.records.arrays import Array, frozen
from gradcheck.records.finding import FindingCode

IN_UNITS = ("noise", "quantum")  # evidence in the units of the output
DOMAIN_KINDS = (FindingCode.NON_FINITE, FindingCode.CRASH, FindingCode.TIMEOUT)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Irregularity:
    """Something that keeps one output from being a smooth, exact function of t along a line.

    Attributes
    ----------
    kind : str
        A smoothness, precision or domain code, such as ``"kink"``.
    output : int
        Which output of the model.
    lower, upper : float
        Bracket in t. A located break lies between them; a stretch without finite values reaches from `lower` to
        `upper`; what concerns the whole line (noise, precision) has 0 and 1.
    size : float
        Jump: height. Kink: change of slope per unit of t; infinite for a cusp. Curvature break: change of the second
        derivative. Staircase: height of the riser in the bracket. Noise, low precision: standard deviation of the
        error of one evaluation. Coarse output: the quantum. Unrepeatable: largest difference seen. NaN for a stretch
        without finite values. Signed where a sign means something.
    left, right : float
        On either side of the break: slopes for a kink, second derivatives for a curvature break, values for a jump
        or staircase; NaN otherwise.
    relative : float
        ``|size|`` over what is typical of the line: its typical slope, curvature or variation.
    evidence : dict of str to float
        Further figures by name.
    """

    kind: FindingCode
    output: int
    lower: float
    upper: float
    size: float = float("nan")
    left: float = float("nan")
    right: float = float("nan")
    relative: float = float("nan")
    evidence: dict[str, float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name in ("lower", "upper", "size", "left", "right", "relative"):
            object.__setattr__(self, name, float(getattr(self, name)))
        object.__setattr__(self, "evidence", {name: float(value) for name, value in self.evidence.items()})

    def in_units(self, exponent: int) -> "Irregularity":
        """The same, of an output whose values were divided by ``2**exponent``."""
        if exponent == 0:
            return self
        evidence = {k: float(np.ldexp(v, exponent)) if k in IN_UNITS else v for k, v in self.evidence.items()}
        size, left, right = np.ldexp([self.size, self.left, self.right], exponent).tolist()
        return replace(self, size=size, left=left, right=right, evidence=evidence)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LineReport:
    """What the examination of one line saw.

    Attributes
    ----------
    irregularities : tuple of Irregularity
        By output, then along the line. Empty if nothing irregular was found.
    noise : ndarray, shape (m,)
        Standard deviation of the error of one evaluation, in units of each output; NaN where nothing could be measured.
    evaluations : int
        What the examination cost.
    unresolved : float
        Share of the line, in [0, 1], of which nothing can be said: cells on which the samples do not yet predict each
        other, or that were refused for want of budget. The worst output counts.
    repeatable : bool
        False if the same point gave two answers.
    complete : bool
        False if budget or time ended the examination early.
    """

    irregularities: tuple[Irregularity, ...]
    noise: Array
    evaluations: int
    unresolved: float
    repeatable: bool
    complete: bool

    def __post_init__(self) -> None:
        object.__setattr__(self, "noise", frozen(self.noise))

    @property
    def nonfinite(self) -> Array:
        """(k, 2): brackets in t of the stretches where some output is not finite, crashes or times out."""
        found = [(i.lower, i.upper) for i in self.irregularities if i.kind in DOMAIN_KINDS]
        return np.array(found, dtype=float).reshape(-1, 2)

    def of_kind(self, kind: str) -> tuple[Irregularity, ...]:
        """The irregularities of one kind."""
        return tuple(i for i in self.irregularities if i.kind == kind)
