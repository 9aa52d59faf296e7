"""Records built by hand, for tests of everything that shows them."""

from collections.abc import Sequence
from typing import Any

import numpy as np

from gradcheck.records.advice import Advice, Family
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.records.report import AuditReport, CheckReport, Entries
from gradcheck.records.verdict import Verdict

CONFIRMED, REFUTED, UNDECIDED = Verdict.CONFIRMED, Verdict.REFUTED, Verdict.UNDECIDED
NAN, INF = float("nan"), float("inf")


def row(
    name: str = "span",
    claim: float = 2.0,
    witness: float = 2.0,
    bound: float = 1e-12,
    digits: float = 12.0,
    verdict: Verdict = CONFIRMED,
    reason: str = "",
) -> tuple[Any, ...]:
    return name, claim, witness, bound, digits, verdict, reason


WRONG = row("chord", claim=4.2, witness=2.1, bound=3e-12, digits=0.0, verdict=REFUTED)
OPEN = row("sweep", claim=1.0, witness=1.1, bound=0.2, digits=1.0, verdict=UNDECIDED, reason="the noise is too large")


def entries(rows: Sequence[tuple[Any, ...]], source: str = "finite difference") -> Entries:
    name, claim, witness, bound, digits, verdict, reason = tuple(zip(*rows, strict=True)) if rows else ((),) * 7
    return Entries(
        index=np.arange(len(rows)),
        name=name,
        claim=claim,
        witness=witness,
        bound=bound,
        digits=digits,
        verdict=verdict,
        source=(source,) * len(rows),
        reason=reason,
    )


def check_report(*rows: tuple[Any, ...], **fields: Any) -> CheckReport:
    """A report on these rows; the verdict follows from them."""
    verdict = Verdict.overall([each[5] for each in rows]) if rows else CONFIRMED
    defaults: dict[str, Any] = {
        "verdict": verdict,
        "kind": "gradient",
        "function": "drag",
        "point": [0.3, 1.2],
        "entries": entries(rows),
        "evaluations": 18,
        "seconds": 0.0021,
    }
    return CheckReport(**(defaults | fields))


def finding(**fields: Any) -> Finding:
    defaults: dict[str, Any] = {
        "code": FindingCode.KINK,
        "severity": Severity.HAZARD,
        "function": "stress",
        "variable": "span",
        "where": Location(point=[1.2, 2.0], line="span", lower=1.2 - 1e-9, upper=1.2 + 1e-9),
        "text": "the slope jumps from 1 to 2",
        "remedy": "replace the table by a smooth spline",
        "evidence": {"left_slope": 1.0, "right_slope": 2.0},
    }
    return Finding(**(defaults | fields))


BLOCKER = {
    "code": FindingCode.JUMP,
    "severity": Severity.BLOCKER,
    "text": "the value jumps by 3",
    "remedy": "smooth the switch",
}


def audit_report(**fields: Any) -> AuditReport:
    defaults: dict[str, Any] = {
        "name": "wing",
        "ready": True,
        "claims": (),
        "witnesses": (),
        "findings": (),
        "steps": (),
        "scaling": None,
        "advice": Advice(
            family=Family.GRADIENT_BASED,
            derivatives=("the hand-written gradient",),
            solvers=("SQP", "interior point"),
            reasons=("smooth within the bounds",),
            tolerances={"gtol": 1e-7},
            snippet="steps = [1e-4, 2e-5]",
            caution="A verified derivative is not a verified model.",
        ),
        "environment": {"python": "3.11", "versions": {"numpy": "2.4"}, "seed": 0},
        "evaluations": 120,
        "seconds": 1.5,
        "complete": True,
    }
    return AuditReport(**(defaults | fields))
