"""To how many digits a claim is judged: by what was asked for, and by the precision that the numbers come in."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from gradcheck.claims.identities import Slack
from gradcheck.claims.policy import DEFAULT_REL_TOL, REL_TOL, Rules
from gradcheck.evaluation.pipeline import Session


@dataclass(frozen=True, slots=True, kw_only=True)
class Measure:
    """To how many digits a claim is judged.

    Attributes
    ----------
    precision : str
        The dtype that values or claim come in.
    unit_roundoff, rel_tol : float
    abs_tol : float, or ndarray broadcastable to the claim
    """

    precision: str
    unit_roundoff: float
    rel_tol: float
    abs_tol: Any

    @property
    def slack(self) -> Slack:
        """The same for identities."""
        return Slack(rel_tol=self.rel_tol, abs_tol=self.abs_tol, unit_roundoff=self.unit_roundoff)


def measure_of(session: Session, function: str, kind: str, rules: Rules) -> Measure:
    """By the precision that the model and the claim turned out to have; the claim has been asked."""
    kinds = session.ledger.output_kinds.get(function, "float64"), session.ledger.claim_kinds.get((function, kind), "")
    precision = next((word for word in kinds if word in REL_TOL), "float64")
    return Measure(
        precision=precision,
        unit_roundoff=float(np.finfo(precision).eps / 2),
        rel_tol=REL_TOL.get(precision, DEFAULT_REL_TOL) if rules.rel_tol is None else rules.rel_tol,
        abs_tol=rules.abs_tol,
    )
