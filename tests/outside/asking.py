"""How the checks against published values ask the library."""

from collections.abc import Callable
from typing import Any

import numpy as np

import gradcheck
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.health.line_report import Irregularity, LineReport
from gradcheck.health.smoothness import examine_line
from gradcheck.records.report import CheckReport
from tests.gates import gate_of

CONFIRMED, REFUTED, UNDECIDED = gradcheck.Verdict.CONFIRMED, gradcheck.Verdict.REFUTED, gradcheck.Verdict.UNDECIDED


def report_on(function: Callable[..., Any], at: Any, **options: Any) -> CheckReport:
    """The report of a check, whatever it says."""
    return gradcheck.check(function, at=at, on_refuted="return", on_undecided="pass", **options)


def verdict_on(function: Callable[..., Any], at: float, slope: float, **options: Any) -> gradcheck.Verdict:
    """The verdict on a claimed derivative of a function of one number."""
    return report_on(function, at, gradient=np.array(slope), **options).verdict


def verdicts(report: CheckReport) -> np.ndarray:
    """Words, one an entry; for a matrix in its shape."""
    words = np.array([str(verdict) for verdict in report.entries.verdict])
    if report.entries.index.ndim == 1:
        return words
    return words.reshape(report.entries.index.max(axis=0) + 1)


def line_of(function: Callable[[np.ndarray], Any], start: Any, variable: int, upper: float) -> LineReport:
    """The examination of `function` from `start` to where `variable` reaches `upper`."""
    start = np.asarray(start, dtype=float)
    return conduct_one(examine_line(start, (variable, upper - start[variable])), gate_of(function))


def interval_of(function: Callable[[float], Any], lower: float, upper: float) -> LineReport:
    """The examination of a function of one number on an interval."""
    return line_of(lambda x: function(x[0]), [lower], 0, upper)


def places(found: tuple[Irregularity, ...], lower: float, upper: float) -> np.ndarray:
    """(k, 2): brackets of irregularities in units of the variable."""
    ends = np.array([(one.lower, one.upper) for one in found]).reshape(-1, 2)
    return lower + (upper - lower) * ends
