"""What kind of error the values of a model carry."""

from enum import StrEnum

from gradcheck.records.finding import FindingCode


class NoiseKind(StrEnum):
    """Where the error of a value comes from; each kind has its own cure."""

    ROUNDING = "rounding"  # of double precision, possibly amplified by cancellation: nothing to mend
    SINGLE_PRECISION = "single precision"  # somewhere inside, or in the output
    INNER_TOLERANCE = "inner tolerance"  # truncated iteration, adaptive solver or mesh: repeatable, of any size
    FEW_DIGITS = "few digits"  # printed, or rounded to few decimal digits
    UNREPEATABLE = "unrepeatable"  # the same x gives another value
    NOT_EXAMINED = "not examined"


#: The finding that each kind makes; rounding makes none.
FINDING_OF = {
    NoiseKind.SINGLE_PRECISION: FindingCode.LOW_PRECISION,
    NoiseKind.INNER_TOLERANCE: FindingCode.NOISE,
    NoiseKind.FEW_DIGITS: FindingCode.COARSE_OUTPUT,
    NoiseKind.UNREPEATABLE: FindingCode.UNREPEATABLE,
}
