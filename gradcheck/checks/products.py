"""The check of a claimed J·v or Jᵀ·w: for unit vectors where these are few, and always for random vectors.

A tangent v makes the model a function of one number, ``t -> F(x + t·v)``, a cotangent w one of one output, ``x ->
⟨w, F(x)⟩``; either way the product is a derivative that the witnesses of a Jacobian can speak about.
"""

import time
from dataclasses import dataclass

import numpy as np

from gradcheck.checks.along import examined_by, places
from gradcheck.checks.entrywise import _judgeable
from gradcheck.checks.identities import contradictions, indifferent, symbol
from gradcheck.checks.measure import Measure, measure_of
from gradcheck.checks.parts import case_of, entries_from, joined, picked, report_of, with_contradictions
from gradcheck.checks.products_claimed import Claimed, claimed_products
from gradcheck.checks.vectors import UNITS_MOST, Vectors, few_if_long, random_rows, vectors_of
from gradcheck.claims.desk import Examined
from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.policy import Rules
from gradcheck.claims.product_mistakes import Conduct, product_mistakes
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.substituted import mixed
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import Verdict
from gradcheck.wording import count

#: Outputs up to which a cotangent of one of them alone is tried.
OUTPUTS_MOST = 30
#: Directions along which the product with a cotangent is looked at where there are many variables.
DIRECTIONS = 6
#: A cotangent makes up for outputs that differ in size by at most this factor from the usual one.
EVENED_OUT = 1e6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Looked:
    """A claimed product beside its witness: entries (a, b), where the units among the vectors make up a Jacobian.

    Attributes
    ----------
    examined : Examined
        Outputs by tangents, or cotangents by variables (or by directions).
    names : tuple of str
        Row by row.
    index : ndarray of int, shape (a·b, 2)
    units : int
        How many tangents (columns), or cotangents (rows), are unit vectors.
    whole : bool
        Whether the entries with unit vectors are those of the Jacobian.
    """

    examined: Examined
    names: tuple[str, ...]
    index: IntArray
    units: int
    whole: bool = True


def checked_product(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int
) -> tuple[CheckReport, Claimed]:
    """The report on a claimed ``"jvp"`` or ``"vjp"``, and what the claim gave."""
    began = time.perf_counter()
    able = _judgeable(session.subject)
    if kind == "jvp":
        vectors = vectors_of(session.subject.domain.scale, able, rules)
    else:
        vectors = vectors_of(_evening_out(centre), np.arange(centre.size), rules, units_most=OUTPUTS_MOST)
    claimed = claimed_products(session, function, kind, vectors)
    measure = measure_of(session, function, kind, rules)
    look = _along_tangents if kind == "jvp" else _with_cotangents
    looked = look(session, function, claimed, centre, able, measure, rules)

    def name(entry: int) -> str:
        if kind == "vjp":
            return session.subject.layout.name(entry)
        return function if centre.size == 1 else f"{function}[{entry}]"

    found = contradictions(claimed, measure, name)
    entries = with_contradictions(entries_from(looked.examined, looked.index, looked.names), found)
    diagnoses: tuple[Diagnosis, ...] = ()
    if Verdict.REFUTED in entries.verdict and claimed.finding is None:
        same, by_sign, every = indifferent(claimed, measure, name)
        conduct = Conduct(same=same, by_sign=by_sign, every=every, broken=[each.broken for each in found])
        diagnoses = product_mistakes(kind, *_cases(kind, looked, measure), conduct)
    report = report_of(
        session,
        function,
        kind,
        entries,
        diagnoses,
        measure,
        failure=claimed.finding,
        notices=(tried(kind, vectors, linear=not found and claimed.finding is None),),
        before=before,
        began=began,
    )
    return report, claimed


def tried(kind: str, vectors: Vectors, *, linear: bool) -> str:
    """Which vectors a product was asked for, and which identities held."""
    units = f"{count(vectors.units.size, 'unit vector')} and " if vectors.units.size else ""
    text = f"{kind} was tried for {units}{count(len(vectors.random), 'random vector')} of several lengths"
    if linear:
        v = symbol(kind)
        text += f"; it is linear in {v} (multiple, negative, sum), and exactly zero for {v} = 0"
    return text


def _evening_out(centre: Array) -> Array:
    """(m,): sizes of cotangents that give all outputs about the same weight."""
    size = np.abs(centre)
    usual = float(np.median(size[size > 0])) if (size > 0).any() else 1.0
    even = np.where(size > 0, size, usual).clip(usual / EVENED_OUT, usual * EVENED_OUT)
    return np.asarray(usual / even)


def _along_tangents(
    session: Session, function: str, claimed: Claimed, centre: Array, able: IntArray, measure: Measure, rules: Rules
) -> Looked:
    subject, vectors = session.subject, claimed.vectors
    parts = []
    if vectors.units.size:
        parts.append(examined_by(session, function, claimed.units.T, centre, measure, rules, columns=vectors.units))
    if not parts or Verdict.REFUTED not in parts[0].verdict:  # else it is decided
        parts.append(examined_by(session, function, claimed.random.T, centre, measure, rules, rows=vectors.random))
    examined, m = joined(parts), centre.size
    many = examined.claim.shape[1]
    labels = vectors.labels(tuple(subject.layout.name(int(i)) for i in vectors.units), "random v")[:many]
    numbers = np.concatenate([vectors.units, subject.layout.size + np.arange(len(vectors.random))])[:many]
    return Looked(
        examined=examined,
        names=tuple(
            f"along {label}" if m == 1 else f"{subject.output_name(function, i)} along {label}"
            for i in range(m)
            for label in labels
        ),
        index=places(np.arange(m), numbers),
        units=vectors.units.size,
    )


def _with_cotangents(
    session: Session, function: str, claimed: Claimed, centre: Array, able: IntArray, measure: Measure, rules: Rules
) -> Looked:
    subject, vectors = session.subject, claimed.vectors
    m = centre.size
    weights = vectors.rows()[: vectors.judged]
    unit = tuple("w = 1" if m == 1 else subject.output_name(function, i) for i in vectors.units.tolist())
    labels = vectors.labels(unit, "random w")
    numbers = np.concatenate([vectors.units, m + np.arange(len(vectors.random))])
    magnitude = np.abs(weights) @ np.abs(centre)
    whole = rules.directions == "all" or able.size <= UNITS_MOST
    if whole:
        across = tuple(subject.layout.name(int(j)) for j in able)
        examined = examined_by(
            session,
            function,
            claimed.judged[:, able],
            mixed(centre, weights),
            measure,
            rules,
            columns=able,
            mixture=weights,
            magnitude=magnitude,
        )
        columns = able
    else:
        many = few_if_long(DIRECTIONS, subject.layout.size)
        rows = np.zeros((many, subject.layout.size))
        rows[:, able] = random_rows(many, subject.domain.scale[able], rules.seed + 1)
        across = tuple(f"along direction {j + 1}" for j in range(many))
        with np.errstate(invalid="ignore", over="ignore"):
            claim = claimed.judged @ rows.T
        examined = examined_by(
            session,
            function,
            claim,
            mixed(centre, weights),
            measure,
            rules,
            rows=rows,
            mixture=weights,
            magnitude=magnitude,
        )
        columns = subject.layout.size + np.arange(many)
    return Looked(
        examined=examined,
        names=tuple(f"{name} for {label}" for label in labels for name in across),
        index=places(numbers, columns),
        units=vectors.units.size,
        whole=whole,
    )


def _cases(kind: str, looked: Looked, measure: Measure) -> tuple[Case | None, Case | None]:
    """The entries with unit vectors, and the others, as families of mistakes see them."""
    names = np.array(looked.names, dtype=object).reshape(looked.examined.claim.shape)
    every = slice(None)
    cut, left = slice(looked.units), slice(looked.units, None)
    units, rest = ((every, cut), (every, left)) if kind == "jvp" else ((cut, every), (left, every))
    others = case_of(picked(looked.examined, rest), names[rest], measure)
    if not looked.units or not looked.whole:
        return None, others
    return case_of(picked(looked.examined, units), names[units], measure), others
