"""What the user claims, asked for through the gate."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.counsel.claim_findings import failing_claim
from gradcheck.errors import UsageError
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.protocol import Reply, Request, Status
from gradcheck.problem.sparse_claim import dense_of, is_stored
from gradcheck.records.arrays import Array
from gradcheck.records.finding import Finding
from gradcheck.witnesses.difference_reasons import SPENT

_MODES = {"vjp": "reverse mode", "jvp": "forward mode"}
AD_SOURCES = ("jax", "autograd")


def claimed_matrix(session: Session, function: str, kind: str, centre: Array) -> tuple[Array, Finding | None]:
    """The claim as a matrix (m, n); NaN with a finding where the user's derivative raised.

    Raises
    ------
    UsageError
        If the claim names an AD source that is not available, or that cannot differentiate the model.
    """
    subject = session.subject
    claim = subject.targets[function].claims[kind]
    if isinstance(claim, str):
        return _automatic_claim(session, function, kind, claim, centre), None
    reply = _asked_for(session, function, kind)
    if int(reply.status[0, 0]) == Status.CRASH:
        words = session.ledger.last_words[function, f"claim:{kind}"]
        return np.full((centre.size, subject.layout.size), np.nan), failing_claim(subject, function, kind, words)
    return in_full(reply, centre.size, subject.layout.size), None


def in_full(reply: Reply, m: int, n: int) -> Array:
    """The claim (m, n) that a reply holds, sparse or not."""
    return dense_of(reply.values[0, 0], m, n) if is_stored(reply.values) else np.asarray(reply.values[0])


def sparse_claim(session: Session, function: str, kind: str) -> NDArray[Any] | None:
    """The stored entries of a sparse claim; None if it is dense, an AD source, or raised.

    The gate remembers what the user's derivative returned: to ask again costs nothing.
    """
    if isinstance(session.subject.targets[function].claims[kind], str):
        return None
    values = _asked_for(session, function, kind).values
    return values[0, 0] if is_stored(values) else None


def _asked_for(session: Session, function: str, kind: str) -> Reply:
    request = Request(
        base=session.subject.start,
        directions=np.zeros(1, dtype=np.intp),
        offsets=np.zeros((1, 1)),
        source=f"claim:{kind}",
        function=function,
    )
    return session.gate([request])[0]


def _automatic_claim(session: Session, function: str, kind: str, source: str, centre: Array) -> Array:
    """What AD says, in the mode that needs fewer sweeps, or the other one where that fails."""
    subject = session.subject
    if source not in AD_SOURCES:
        raise UsageError(
            f"{kind}={source!r} names no derivative source; use {' or '.join(map(repr, AD_SOURCES))}, a function, "
            "or an array"
        )
    if kind == "gradient" and centre.size != 1:
        raise UsageError(f"gradient={source!r}: the model returns {centre.size} outputs; use jacobian={source!r}")
    n, m = subject.layout.size, centre.size
    words: dict[str, str] = {}
    for arithmetic in ("vjp", "jvp") if m <= n else ("jvp", "vjp"):
        size = m if arithmetic == "vjp" else n
        request = Request(
            base=subject.start,
            directions=np.eye(size),
            offsets=np.zeros((size, 1)),
            arithmetic=arithmetic,
            source=source,
            function=function,
        )
        reply = session.gate([request])[0]
        if reply.status[0, 0] in (Status.OK, Status.NONFINITE):
            swept = reply.values[:, 0]
            return swept if arithmetic == "vjp" else swept.T
        words[_MODES[arithmetic]] = session.ledger.last_words.get((function, source), SPENT)
    # a mistake in a rule may show in one mode only, while the other has no rule at all
    told = set(words.values())
    each = told if len(told) == 1 else [f"in {mode}, {text}" for mode, text in words.items()]
    raise UsageError(f"{kind}={source!r}: {source} cannot differentiate {function}: {'; '.join(each)}")
