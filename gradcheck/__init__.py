"""Can the derivatives of a numerical model be trusted, before an optimizer runs on it?

Use the plain import: ``import gradcheck``, then ``gradcheck.check(...)``, ``gradcheck.audit(...)``.

Each public name is loaded on first use (PEP 562), so that a program or a pytest run that only has the package
installed never pays for numpy.

PYTEST_DONT_REWRITE: the plugin is an entry point of this package; a program that imports the package before it starts
pytest must not be warned about it.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from gradcheck.auditing import audit
    from gradcheck.checking import check
    from gradcheck.errors import (
        DerivativeMismatch,
        DerivativeShapeError,
        GradcheckError,
        ModelFailure,
        ModelNotFound,
        UndecidedWarning,
        UsageError,
    )
    from gradcheck.estimating import estimate
    from gradcheck.problem.layout import args, points
    from gradcheck.problem.problem import Function, Output, Problem, Variable, model
    from gradcheck.records.advice import Advice, Family
    from gradcheck.records.estimate import Estimate, Scan
    from gradcheck.records.finding import Finding, FindingCode, Severity
    from gradcheck.records.noise import NoiseKind
    from gradcheck.records.report import AuditReport, CheckReport
    from gradcheck.records.verdict import DiagnosisCode, Verdict
    from gradcheck.scanning import scan

__version__ = "0.1.0"

_HOME = {
    "Advice": "gradcheck.records.advice",
    "AuditReport": "gradcheck.records.report",
    "CheckReport": "gradcheck.records.report",
    "DerivativeMismatch": "gradcheck.errors",
    "DerivativeShapeError": "gradcheck.errors",
    "DiagnosisCode": "gradcheck.records.verdict",
    "Estimate": "gradcheck.records.estimate",
    "Family": "gradcheck.records.advice",
    "Finding": "gradcheck.records.finding",
    "FindingCode": "gradcheck.records.finding",
    "Function": "gradcheck.problem.problem",
    "GradcheckError": "gradcheck.errors",
    "ModelFailure": "gradcheck.errors",
    "ModelNotFound": "gradcheck.errors",
    "NoiseKind": "gradcheck.records.noise",
    "Output": "gradcheck.problem.problem",
    "Problem": "gradcheck.problem.problem",
    "Scan": "gradcheck.records.estimate",
    "Severity": "gradcheck.records.finding",
    "UndecidedWarning": "gradcheck.errors",
    "UsageError": "gradcheck.errors",
    "Variable": "gradcheck.problem.problem",
    "Verdict": "gradcheck.records.verdict",
    "args": "gradcheck.problem.layout",
    "audit": "gradcheck.auditing",
    "check": "gradcheck.checking",
    "estimate": "gradcheck.estimating",
    "model": "gradcheck.problem.problem",
    "points": "gradcheck.problem.layout",
    "scan": "gradcheck.scanning",
}

__all__ = [
    "Advice",
    "AuditReport",
    "CheckReport",
    "DerivativeMismatch",
    "DerivativeShapeError",
    "DiagnosisCode",
    "Estimate",
    "Family",
    "Finding",
    "FindingCode",
    "Function",
    "GradcheckError",
    "ModelFailure",
    "ModelNotFound",
    "NoiseKind",
    "Output",
    "Problem",
    "Scan",
    "Severity",
    "UndecidedWarning",
    "UsageError",
    "Variable",
    "Verdict",
    "args",
    "audit",
    "check",
    "estimate",
    "model",
    "points",
    "scan",
]


def __getattr__(name: str) -> Any:
    """Load a public name from its home and keep it, so that the next use costs nothing."""
    if name not in _HOME:
        raise AttributeError(f"module 'gradcheck' has no attribute {name!r}")
    value = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*_HOME, *(name for name in globals() if name.startswith("__"))])
