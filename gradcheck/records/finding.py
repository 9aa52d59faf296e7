"""A fact about the model that matters to an optimizer."""

from dataclasses import dataclass, field
from enum import StrEnum

from gradcheck.records.arrays import Array, frozen


class Severity(StrEnum):
    """What a finding means for an optimizer."""

    BLOCKER = "blocker"  # optimizing now wastes the run
    HAZARD = "hazard"  # works, but badly or only in places
    REMARK = "remark"


class FindingCode(StrEnum):
    """The kinds of findings."""

    CLAIM_REFUTED = "claim-refuted"
    CLAIM_UNDECIDED = "claim-undecided"
    WITNESS_CONFLICT = "witness-conflict"
    KINK = "kink"
    JUMP = "jump"
    STAIRCASE = "staircase"
    CURVATURE_BREAK = "curvature-break"
    NOISE = "noise"
    LOW_PRECISION = "low-precision"
    COARSE_OUTPUT = "coarse-output"
    TOLERANCE_DRIFT = "tolerance-drift"
    UNREPEATABLE = "unrepeatable"
    NON_FINITE = "non-finite"
    CRASH = "crash"
    TIMEOUT = "timeout"
    BOUND_CROSSED = "bound-crossed"
    DEAD_VARIABLE = "dead-variable"
    SCALE_SPREAD = "scale-spread"
    ILL_CONDITIONED = "ill-conditioned"
    DEPENDENT_CONSTRAINTS = "dependent-constraints"
    MANY_BASINS = "many-basins"
    INTEGER_VARIABLE = "integer-variable"
    MUTATES_INPUT = "mutates-input"
    COMPLEX_UNSAFE = "complex-unsafe"
    INTEGER_ARITHMETIC = "integer-arithmetic"
    SLOW_DERIVATIVE = "slow-derivative"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Location:
    """A place: a point, or a bracket along a named line.

    Attributes
    ----------
    point : ndarray, shape (n,)
        The point, or the middle of the bracket.
    line : str
        Empty for a point; else the name of the line, such as a variable's name.
    lower, upper : float
        Ends of the bracket in units of the line's variable; NaN for a point.
    """

    point: Array
    line: str = ""
    lower: float = float("nan")
    upper: float = float("nan")

    def __post_init__(self) -> None:
        object.__setattr__(self, "point", frozen(self.point))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Finding:
    """One fact: what kind, how bad, where, the numbers, one sentence what and one sentence what to do."""

    code: FindingCode
    severity: Severity
    function: str
    variable: str | None
    where: Location
    text: str
    remedy: str
    evidence: dict[str, float | int | str] = field(default_factory=dict)
