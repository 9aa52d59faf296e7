"""A claimed product, asked for through the gate for many vectors at once."""

from dataclasses import dataclass

import numpy as np

from gradcheck.checks.claimed import AD_SOURCES
from gradcheck.checks.vectors import Vectors
from gradcheck.counsel.claim_findings import failing_claim
from gradcheck.errors import UsageError
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.protocol import Reply, Request, Status
from gradcheck.records.arrays import Array
from gradcheck.records.finding import Finding
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.wording import count


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Claimed:
    """What a claim gave for each vector.

    Attributes
    ----------
    kind : str
    vectors : Vectors
    products : ndarray, shape (v, q)
        One row a vector, those of the identities last; NaN where the claim raised.
    finding : Finding or None
        Where it raised.
    refused : bool
        Whether the budget or the time ended before it was asked; it has said nothing then.
    """

    kind: str
    vectors: Vectors
    products: Array
    finding: Finding | None
    refused: bool = False

    @property
    def judged(self) -> Array:
        """The rows that are compared with a witness."""
        return self.products[: self.vectors.judged]

    @property
    def units(self) -> Array:
        """The rows of unit vectors."""
        return self.products[: self.vectors.units.size]

    @property
    def random(self) -> Array:
        """The rows of random vectors."""
        return self.products[self.vectors.units.size : self.vectors.judged]

    @property
    def probed(self) -> Array:
        """The rows of what the identities are made of."""
        return self.products[self.vectors.judged :]


def claimed_products(session: Session, function: str, kind: str, vectors: Vectors) -> Claimed:
    """The claim for all vectors.

    Raises
    ------
    UsageError
        If the claim is an array where a function is due, names no AD source, or cannot be had from it.
    """
    subject = session.subject
    claim = subject.targets[function].claims[kind]
    rows = vectors.rows()
    if isinstance(claim, str):
        products = _automatic(session, function, kind, claim, rows)
        return Claimed(kind=kind, vectors=vectors, products=products, finding=None)
    if kind != "hessian" and not callable(claim):
        given = {"jvp": "jvp(x, v)", "vjp": "vjp(x, w)", "hvp": "hvp(x, v)"}[kind]
        raise UsageError(
            f"{kind} is {claim!r:.60} ({type(claim).__name__}); give a function {given}, or 'jax' or 'autograd'"
        )
    reply = _asked(session, function, kind, f"claim:{kind}", rows)
    if int(reply.status[0, 0]) == Status.CRASH:
        words = session.ledger.last_words[function, f"claim:{kind}"]
        nothing = _nothing(session, function, kind, len(rows))
        return Claimed(
            kind=kind, vectors=vectors, products=nothing, finding=failing_claim(subject, function, kind, words)
        )
    raised = session.ledger.failed_vectors.get((function, kind), {})
    finding: Finding | None = None
    if raised:
        which = f"for {len(raised)} of {count(len(rows), 'vector')}" if len(raised) < len(rows) else "for every vector"
        finding = failing_claim(subject, function, kind, f"{which}; the first time: {next(iter(raised.values()))}")
    refused = bool(reply.refused.any())
    return Claimed(kind=kind, vectors=vectors, products=reply.values[:, 0], finding=finding, refused=refused)


def _automatic(session: Session, function: str, kind: str, source: str, rows: Array) -> Array:
    if source not in AD_SOURCES:
        raise UsageError(
            f"{kind}={source!r} names no derivative source; use {' or '.join(map(repr, AD_SOURCES))}, or a function"
        )
    reply = _asked(session, function, kind, source, rows)
    if reply.status[0, 0] not in (Status.OK, Status.NONFINITE):
        words = session.ledger.last_words.get((function, source), SPENT)
        raise UsageError(f"{kind}={source!r}: {source} cannot differentiate {function}: {words}")
    return np.asarray(reply.values[:, 0])


def _asked(session: Session, function: str, kind: str, source: str, rows: Array) -> Reply:
    request = Request(
        base=session.subject.start,
        directions=rows,
        offsets=np.zeros((len(rows), 1)),
        arithmetic="hvp" if kind == "hessian" else kind,
        source=source,
        function=function,
    )
    return session.gate([request])[0]


def _nothing(session: Session, function: str, kind: str, many: int) -> Array:
    outputs = int(np.prod(session.shape_of(function), dtype=int))
    size = session.subject.layout.size
    return np.full((many, {"jvp": outputs, "vjp": size}.get(kind, outputs * size)), np.nan)
