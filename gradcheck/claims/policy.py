"""How a claim is judged, and what a verdict does: the options of a check, validated."""

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np

from gradcheck.claims.examination import WITNESSES
from gradcheck.errors import DerivativeMismatch, UndecidedWarning, UsageError
from gradcheck.records.report import CheckReport
from gradcheck.records.verdict import Verdict
from gradcheck.wording import shortened

#: Relative tolerance by the precision of the values, where it is not the ordinary one.
REL_TOL = {"float32": 1e-3, "float16": 1e-1}
DEFAULT_REL_TOL = 1e-8


@dataclass(frozen=True, slots=True, kw_only=True)
class Rules:
    """How a claim is judged: tolerances, witnesses, and along what; validated.

    `directions` is ``"all"`` (entry by entry), a number of random directions, or None: by size. `trials` is whether
    claims that name an AD library are also tried with other cotangents and under transformations.
    """

    rel_tol: float | None = None
    abs_tol: float = 0.0
    witnesses: tuple[str, ...] = WITNESSES
    directions: int | str | None = None
    seed: int = 0
    trials: bool = True

    @staticmethod
    def of(
        rel_tol: float | None,
        abs_tol: float,
        witnesses: Any,
        *,
        directions: int | str | None = None,
        seed: int = 0,
    ) -> "Rules":
        """Rules from what the caller gave.

        Raises
        ------
        UsageError
            If a tolerance is negative or NaN, a witness is unknown, or directions are no number.
        """
        for name, value in (("rel_tol", rel_tol), ("abs_tol", abs_tol)):
            if value is not None and not _is_tolerance(value):
                raise UsageError(f"{name} is {value!r}; give a finite number >= 0")
        _refuse_no_directions(directions)
        if witnesses is None:
            return Rules(rel_tol=rel_tol, abs_tol=abs_tol, directions=directions, seed=seed)
        chosen = (witnesses,) if isinstance(witnesses, str) else tuple(witnesses)
        unknown = [name for name in chosen if name not in WITNESSES]
        if unknown or not chosen:
            raise UsageError(f"witnesses is {witnesses!r}; choose among {', '.join(map(repr, WITNESSES))}")
        return Rules(rel_tol=rel_tol, abs_tol=abs_tol, witnesses=chosen, directions=directions, seed=seed)


def _refuse_no_directions(directions: Any) -> None:
    if directions is None or directions == "all":
        return
    if isinstance(directions, bool | str) or not isinstance(directions, int | np.integer) or directions < 1:
        raise UsageError(
            f"directions is {directions!r}; give 'all' to check entry by entry, or a number of random directions >= 1"
        )


def _is_tolerance(value: Any) -> bool:
    return isinstance(value, int | float | np.number) and bool(0 <= value < np.inf)


@dataclass(frozen=True, slots=True, kw_only=True)
class Policy:
    """What a verdict does: raise, warn, or only be returned; validated."""

    on_refuted: str = "raise"
    on_undecided: str = "warn"

    @staticmethod
    def of(on_refuted: str = "raise", on_undecided: str = "warn") -> "Policy":
        """The policy in these words.

        Raises
        ------
        UsageError
            If a word is unknown.
        """
        _one_of("on_refuted", on_refuted, ("raise", "return"))
        _one_of("on_undecided", on_undecided, ("warn", "raise", "pass"))
        return Policy(on_refuted=on_refuted, on_undecided=on_undecided)

    def carry_out(self, report: CheckReport, *, stacklevel: int = 2, cause: BaseException | None = None) -> CheckReport:
        """The report, unless its verdict raises; where every entry is undecided that raises too, unless it may pass.

        `cause` is what the claim itself raised.
        """
        if report.verdict == Verdict.REFUTED and self.on_refuted == "raise":
            raise DerivativeMismatch(report) from cause
        if report.verdict == Verdict.UNDECIDED and self.on_undecided != "pass":
            everything = all(verdict == Verdict.UNDECIDED for verdict in report.verdicts)
            if self.on_undecided == "raise" or everything:
                raise DerivativeMismatch(report, _why_undecided_raises(report, everything)) from cause
            warnings.warn(str(report), UndecidedWarning, stacklevel=stacklevel + 1)
        return report


def _why_undecided_raises(report: CheckReport, everything: bool) -> str:
    """The first line of what is raised where nothing is refuted."""
    open_ones = sum(verdict == Verdict.UNDECIDED for verdict in report.verdicts)
    told = "nothing could be confirmed" if everything else f"{open_ones:,} of {len(report.verdicts):,} undecided"
    option = "on_undecided='pass' returns it" if everything else "raised by on_undecided='raise'"
    return f"{report.kind} of {shortened(report.function, 20)}: {told} ({option})"


def _one_of(name: str, value: str, choices: tuple[str, ...]) -> None:
    if value not in choices:
        raise UsageError(f"{name} is {value!r}; choose {' or '.join(map(repr, choices))}")
