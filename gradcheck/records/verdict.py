"""The words for a judgement: verdicts, and the likely mistakes behind a refuted claim."""

from enum import StrEnum


class Verdict(StrEnum):
    """What a comparison of a claim with its witnesses came to."""

    CONFIRMED = "confirmed"
    REFUTED = "refuted"
    UNDECIDED = "undecided"

    @staticmethod
    def overall(verdicts: "list[Verdict]") -> "Verdict":
        """Refuted if any is; else undecided if any is; confirmed only if all are.

        Raises
        ------
        ValueError
            If the list is empty: nothing checked is never a confirmation.
        """
        if not verdicts:
            raise ValueError("nothing was checked, so there is no verdict")
        for worst in (Verdict.REFUTED, Verdict.UNDECIDED):
            if worst in verdicts:
                return worst
        return Verdict.CONFIRMED


class DiagnosisCode(StrEnum):
    """The likely mistake behind a refuted claim."""

    SIGN_FLIPPED = "sign-flipped"
    CONSTANT_FACTOR = "constant-factor"
    ZERO_ENTRY = "zero-entry"
    SWAPPED_ENTRIES = "swapped-entries"
    SHIFTED_ENTRIES = "shifted-entries"
    TRANSPOSED = "transposed"
    REORDERED = "reordered"
    DEGREES_FOR_RADIANS = "degrees-for-radians"
    UNIT_FACTOR = "unit-factor"
    MEAN_FOR_SUM = "mean-for-sum"
    MISSING_CHAIN_RULE = "missing-chain-rule"
    MISSING_PATH = "missing-path"
    IGNORES_COTANGENT = "ignores-cotangent"
    STALE_POINT = "stale-point"
    SINGLE_PRECISION = "single-precision"
    REGION_ONLY = "region-only"
    UNKNOWN = "unknown"
