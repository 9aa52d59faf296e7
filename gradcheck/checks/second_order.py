"""The check of claimed second derivatives: a Hessian, or Hessian-vector products.

Where a gradient is claimed as well and was confirmed, its differences are the witness: they are as exact as first
derivatives, and cost one evaluation of the gradient where function values need many. Else second differences of the
values decide. Where there are many variables the Hessian is looked at along a few random directions.
"""

import time
from dataclasses import dataclass, replace

import numpy as np

from gradcheck.checks.entrywise import _judgeable
from gradcheck.checks.identities import Contradiction, broken_symmetry, contradictions, indifferent
from gradcheck.checks.parts import entries_from, joined, report_of, with_contradictions
from gradcheck.checks.products import case_of, examined_by, places, shared_room, tried
from gradcheck.checks.products_claimed import Claimed, claimed_products, measure_of
from gradcheck.checks.vectors import UNITS_MOST, Vectors, random_rows, vectors_of
from gradcheck.claims.desk import Examined
from gradcheck.claims.examination import DIFFERENCES
from gradcheck.claims.hessian_mistakes import hessian_mistakes, scattered
from gradcheck.claims.identities import Broken, symmetry
from gradcheck.claims.mistakes.naming import likely_mistakes
from gradcheck.claims.policy import Rules
from gradcheck.claims.product_mistakes import Conduct, product_mistakes
from gradcheck.claims.second_examination import FEW_DIGITS, Curvature, examine_second, judged
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.evaluator import SLOPE
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.protocol import Request, Status
from gradcheck.evaluation.substituted import substituted
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.report import CheckReport, Diagnosis, Entries
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.witnesses.steps import Room, room_along
from gradcheck.wording import count, number

#: Variables up to which all entries are looked at by function values: a pair of them takes about 16.
VALUES_MOST = 16
#: Directions along which function values are asked where there are more.
DIRECTIONS = 5
#: What the witness is called that takes differences of a confirmed gradient.
OF_GRADIENT = "differences of the confirmed {kind}"
#: How far away from the point the gradient is tried before its differences are believed, in sizes of the variables.
ASIDE = 0.0137
#: First derivatives whose differences are second derivatives.
FIRST = frozenset({"gradient", "jacobian", "value_and_gradient"})
UNCONFIRMED = "the first derivative claimed in the same call was not confirmed, so the values were differenced instead"
#: Identities that are about the symmetry of a Hessian; the others are about products.
SYMMETRY = ("symmetry", "adjoint pair")
#: Columns that are looked at in full, at the most, after random directions have shown which rows are wrong.
NARROWED_MOST = 50


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Seen:
    """Claimed second derivatives beside their witness.

    Attributes
    ----------
    entries : Entries
    matrix : Examined or None
        The entries (m·n, n) of the Hessians themselves, where all of them were looked at.
    rest : Examined or None
        Products with random vectors (m·n, r).
    names, rest_names : ndarray of object
    narrowed : Examined or None
        Whole columns (m·n, k) that were looked at because random directions had shown wrong rows; `names` are theirs.
    notices : tuple of str
    """

    entries: Entries
    matrix: Examined | None
    rest: Examined | None
    names: np.ndarray[tuple[int, ...], np.dtype[np.object_]]
    rest_names: np.ndarray[tuple[int, ...], np.dtype[np.object_]]
    narrowed: Examined | None = None
    notices: tuple[str, ...] = ()


def checked_second_order(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int, confirmed: str | None
) -> tuple[CheckReport, Claimed]:
    """The report on a claimed ``"hessian"`` or ``"hvp"``; `confirmed` is the kind of a first derivative that was
    confirmed in the same call.
    """
    began = time.perf_counter()
    able = _judgeable(session.subject)
    look = _Look(session, function, kind, centre, able, rules, confirmed)
    claimed, measure = look.claimed, look.measure
    seen = look.seen()
    found = _contradictions(look)
    entries = with_contradictions(seen.entries, found)
    diagnoses: tuple[Diagnosis, ...] = ()
    if Verdict.REFUTED in entries.verdict and claimed.finding is None:
        diagnoses = _diagnoses(look, seen, found)
    report = report_of(
        session,
        function,
        kind,
        entries,
        diagnoses,
        measure,
        failure=claimed.finding,
        notices=(*look.notices, *seen.notices, *_symmetric(look, found)),
        before=before,
        began=began,
    )
    return report, claimed


class _Look:
    """One claim, what it gave, and the witness that it is held against."""

    def __init__(
        self,
        session: Session,
        function: str,
        kind: str,
        centre: Array,
        able: IntArray,
        rules: Rules,
        confirmed: str | None,
    ) -> None:
        self.session, self.function, self.kind, self.centre = session, function, kind, centre
        self.able, self.rules = able, rules
        self.notices: list[str] = []
        self.slope = self._slope(confirmed)
        most = UNITS_MOST if self.slope is not None else VALUES_MOST
        vectors = vectors_of(session.subject.domain.scale, able, rules, units_most=most)
        self.claimed = claimed_products(session, function, kind, vectors)
        self.measure = measure_of(session, function, kind, rules)
        if self.slope is not None:
            precision = measure_of(session, function, confirmed or "", rules)
            self.measure = max(self.measure, precision, key=lambda each: each.unit_roundoff)
        if DIFFERENCES not in rules.witnesses:
            raise UsageError(f"witnesses is {rules.witnesses!r}; second derivatives need 'differences' among them")

    # --- what the witness is -------------------------------------------------------------------------------------

    def _slope(self, confirmed: str | None) -> Array | None:
        """The confirmed gradient at the point, flat (m·n,), where its differences can be believed; else None."""
        if confirmed is None:
            if FIRST.intersection(self.session.subject.targets[self.function].claims):
                self.notices.append(UNCONFIRMED)
            return None
        claim = self.session.subject.targets[self.function].claims[confirmed]
        if not callable(claim) and not isinstance(claim, str):
            self.notices.append(f"the {confirmed} was given as an array, so its differences cannot be taken")
            return None
        at_point = self._slopes_at(confirmed, self.session.subject.start)
        if at_point is None:
            return None
        self.confirmed = confirmed
        self.source = SLOPE + confirmed
        if not self._holds_aside():
            self.notices.append(
                f"the {confirmed} is right at the point, but not close to it, so its differences were not taken: does "
                "it depend on x?"
            )
            return None
        return at_point

    def _slopes_at(self, confirmed: str, point: Array) -> Array | None:
        request = Request(
            base=point,
            directions=np.zeros(1, dtype=np.intp),
            offsets=np.zeros((1, 1)),
            source=SLOPE + confirmed,
            function=self.function,
        )
        reply = self.session.gate([request])[0]
        return reply.values[0, 0] if int(reply.status[0, 0]) == Status.OK else None

    def _holds_aside(self) -> bool:
        """Whether the gradient is that of the function beside the point as well, along one direction.

        One that is right at the point alone (a constant, a remembered one) would make every Hessian look wrong.
        """
        subject = self.session.subject
        row = np.zeros((1, subject.layout.size))
        row[:, self.able] = random_rows(1, subject.domain.scale[self.able], self.rules.seed + 2)
        room = room_along(subject.start, row, subject.domain)
        up, down = (min(ASIDE, float(side[0]) / 2) for side in (room.above, room.below))
        aside = subject.start + (up if up >= down else -down) * row[0]
        slopes = self._slopes_at(self.confirmed, aside)
        if slopes is None:
            return False
        moved = replace(self.session, subject=replace(subject, start=aside))
        reply = self.session.gate(
            [Request(base=aside, directions=np.zeros(1, np.intp), offsets=np.zeros((1, 1)), function=self.function)]
        )[0]
        if not reply.finite.all():
            return False
        claim = slopes.reshape(self.centre.size, -1) @ row.T
        measure = measure_of(self.session, self.function, self.confirmed, self.rules)
        found = examined_by(moved, self.function, claim, reply.values[0, 0], measure, self.rules, rows=row)
        return not (found.verdict == Verdict.REFUTED).any()

    # --- entries -------------------------------------------------------------------------------------------------

    def seen(self) -> Seen:
        if self.slope is not None:
            return self._through_gradient(self.slope)
        if self.claimed.vectors.units.size:
            return self._by_values()
        return self._along_directions()

    @property
    def outputs(self) -> int:
        return int(self.centre.size)

    @property
    def places(self) -> IntArray:
        """Entries of a product (m·n,) that are judged: whole-number variables have no derivative."""
        n = self.session.subject.layout.size
        return np.concatenate([output * n + self.able for output in range(self.outputs)])

    def row_names(self) -> list[str]:
        """Names of the judged entries of a product."""
        names = [self.session.subject.layout.name(int(i)) for i in self.able]
        if self.outputs == 1:
            return names
        return [f"{self.function}[{output}]: {name}" for output in range(self.outputs) for name in names]

    def labels(self) -> tuple[str, ...]:
        layout, vectors = self.session.subject.layout, self.claimed.vectors
        return vectors.labels(tuple(layout.name(int(i)) for i in vectors.units), "random v")

    def name(self, row: str, label: str, *, unit: bool) -> str:
        if self.kind == "hvp" or not unit:
            return f"{row} along {label}"
        return row if self.session.subject.layout.size == 1 and self.outputs == 1 else f"({row}, {label})"

    def _through_gradient(self, slope: Array) -> Seen:
        vectors, places_ = self.claimed.vectors, self.places
        spent = self.session.ledger.calls["slope"]
        units, random = self.claimed.units.T[places_], self.claimed.random.T[places_]
        parts = []
        if vectors.units.size:
            parts.append(self._differences(units, slope, columns=vectors.units))
        if self.kind == "hvp" or not vectors.units.size:
            parts.append(self._differences(random, slope, rows=vectors.random))
        seen = self._seen(parts, bool(vectors.units.size))
        if not vectors.units.size:
            seen = replace(seen, notices=(self._visible(parts[0]),))
            seen = self._narrowed(seen, parts[0], slope)
        spent = self.session.ledger.calls["slope"] - spent
        notice = (
            f"{count(spent, 'evaluation')} of the {self.confirmed}"
            if spent
            else f"no evaluation of the {self.confirmed}"
        )
        notices = (f"held against differences of the confirmed {self.confirmed}: {notice} at other points",)
        return replace(seen, notices=(*notices, *seen.notices))

    def _visible(self, along: Examined) -> str:
        """What a look along random directions would have seen, and what not: a bound for an error in any one entry."""
        n = self.session.subject.layout.size
        looked = f"{count(n, 'variable')}: looked at along {count(along.claim.shape[1], 'random direction')}"
        with np.errstate(invalid="ignore"):
            off = self.measure.abs_tol + self.measure.rel_tol * np.abs(along.claim) + 4 * along.bound
        reach = np.abs(self.claimed.vectors.random[: along.claim.shape[1], self.able]).min(axis=1)
        seen = (off / reach).min(axis=1)
        if not np.isfinite(seen).any():
            return looked
        least = number(float(seen[np.isfinite(seen)].max()), 2)
        return f"{looked}; an error of {least} in a single entry would have been seen"

    def _differences(
        self, claim: Array, slope: Array, *, columns: IntArray | None = None, rows: Array | None = None
    ) -> Examined:
        subject, chosen = self.session.subject, self.places
        typical = subject.domain.scale[columns] if columns is not None else shared_room(subject, rows).typical  # type: ignore[arg-type]
        with np.errstate(invalid="ignore", over="ignore"):
            magnitude = np.nan_to_num(np.abs(claim), nan=0.0, posinf=0.0) @ typical
        found = examined_by(
            self.session,
            self.function,
            claim,
            slope[chosen],
            self.measure,
            self.rules,
            columns=columns,
            rows=rows,
            outputs=chosen if chosen.size < slope.size else None,
            magnitude=magnitude,
            source=self.source,
            witnesses=(DIFFERENCES,),
        )
        source = OF_GRADIENT.format(kind=self.confirmed)
        return replace(found, source=np.where(found.source == "", "", source).astype(object))

    def _narrowed(self, seen: Seen, along: Examined, slope: Array) -> Seen:
        """All columns of the variables whose rows are wrong: a Hessian is symmetric, and so are most mistakes."""
        n = self.session.subject.layout.size
        rows = np.unique(self.places[(along.verdict == Verdict.REFUTED).any(axis=1)] % n)
        if rows.size == 0 or rows.size > NARROWED_MOST:
            return seen
        vectors = Vectors(units=rows, random=self.claimed.vectors.random)
        columns = claimed_products(self.session, self.function, self.kind, vectors).units.T[self.places]
        found = self._differences(columns, slope, columns=rows)
        wrong = found.verdict == Verdict.REFUTED
        if not wrong.any():
            return seen
        labels = [self.session.subject.layout.name(int(j)) for j in rows]
        names = np.array(
            [[self.name(row, label, unit=True) for label in labels] for row in self.row_names()], dtype=object
        )
        fields = ("claim", "value", "bound", "left", "right", "verdict", "source", "reason")
        picked = replace(found, **{field: getattr(found, field)[wrong] for field in fields})
        at = np.argwhere(wrong)
        index = np.stack([self.places[at[:, 0]], rows[at[:, 1]]], axis=1)
        entries = entries_from(picked, index, names[wrong].tolist())
        notice = (
            f"after random directions the {count(rows.size, 'column')} of the variables in question "
            f"{'was' if rows.size == 1 else 'were'} looked at in full; what was found wrong there is told"
        )
        return replace(seen, entries=entries, narrowed=found, names=names, notices=(*seen.notices, notice))

    def _by_values(self) -> Seen:
        subject, able, vectors = self.session.subject, self.able, self.claimed.vectors
        units, random = self.claimed.units.T, self.claimed.random.T
        rows = np.eye(subject.layout.size)[able]
        whole = able.size == subject.layout.size
        room = room_along(subject.start, able, subject.domain)
        parts: list[list[Examined]] = [[], []]
        for output in range(self.outputs):
            here = output * subject.layout.size + able
            examined, curvature = self._examined(
                subject.start if whole else np.zeros(able.size),
                units[here],
                room,
                output,
                None if whole else rows,
            )
            parts[0].append(examined)
            if self.kind == "hvp":
                value, bound, tolerance = curvature.through(vectors.random[:, able])
                reasons = np.full(value.shape, "", dtype=object)
                products = judged(random[here], value, bound, tolerance, reasons, curvature.witness.source)
                parts[1].append(self._only_if_new(products, examined, units[here]))
        return self._seen([_stacked(part) for part in parts if part], True)

    def _only_if_new(self, products: Examined, units: Examined, columns: Array) -> Examined:
        """Products of random vectors (k, r) rest on the same second differences as the unit vectors (k, k).

        Where the claim is just as linear as it should be, no product is refuted whose row of entries is not.
        """
        rows = self.claimed.vectors.random[:, self.able]
        slack = self.measure.slack
        combined = columns @ rows.T
        with np.errstate(invalid="ignore"):
            allowed = np.stack([slack.of(column) for column in combined.T], axis=1)
            linear = np.abs(products.claim - combined) <= allowed
        known = (units.verdict == Verdict.REFUTED).any(axis=1, keepdims=True)
        doubted = (products.verdict == Verdict.REFUTED) & linear & ~known
        if not doubted.any():
            return products
        verdict, reason = products.verdict.copy(), products.reason.copy()
        verdict[doubted], reason[doubted] = Verdict.UNDECIDED, FEW_DIGITS
        return replace(products, verdict=verdict, reason=reason)

    def _examined(
        self, base: Array, claim: Array, room: Room, output: int, rows: Array | None
    ) -> tuple[Examined, Curvature]:
        inquiry = examine_second(
            base,
            claim,
            room,
            self.centre[[output]],
            rel_tol=self.measure.rel_tol,
            abs_tol=self.measure.abs_tol,
            unit_roundoff=self.measure.unit_roundoff,
        )
        chosen = np.array([output]) if self.outputs > 1 else None
        inquiry = substituted(inquiry, self.session.subject.start, rows=rows, outputs=chosen)
        return conduct_one(addressed(inquiry, function=self.function), self.session.gate)

    def _along_directions(self) -> Seen:
        """⟨u, H·v⟩ for a few random directions by function values, which cost the same for any number of variables."""
        subject, vectors = self.session.subject, self.claimed.vectors
        few = min(len(vectors.random), self.rules.directions or DIRECTIONS)
        rows = vectors.random[: int(few)]
        room = shared_room(subject, rows)
        parts = []
        for output in range(self.outputs):
            here = slice(output * subject.layout.size, (output + 1) * subject.layout.size)
            with np.errstate(invalid="ignore", over="ignore"):
                claim = rows @ self.claimed.random[: len(rows), here].T
            parts.append(self._examined(np.zeros(len(rows)), claim, room, output, rows)[0])
        examined = _stacked(parts)
        labels = [f"v{i + 1}" for i in range(len(rows))]
        prefix = [""] if self.outputs == 1 else [f"{self.function}[{output}]: " for output in range(self.outputs)]
        names = [f"{p}⟨{u}, H·{v}⟩" for p in prefix for u in labels for v in labels]
        n = subject.layout.size
        index = places(n * np.arange(self.outputs * len(rows)), n + np.arange(len(rows)))
        with np.errstate(invalid="ignore"):
            off = self.measure.abs_tol + self.measure.rel_tol * np.abs(examined.claim) + 4 * examined.bound
        reach = np.abs(rows[:, self.able]).min(axis=1)
        seen = (off / np.tile(np.outer(reach, reach), (self.outputs, 1))).min()
        notice = (
            f"{count(n, 'variable')}: looked at along {count(len(rows), 'random direction')} by function values; an "
            f"error of {number(float(seen), 2)} in a single entry would have been seen, but not in which. A gradient "
            "claimed in the same call shows it"
        )
        shape = examined.claim.shape
        return Seen(
            entries=entries_from(examined, index, names),
            matrix=None,
            rest=examined,
            names=np.empty((0, 0), dtype=object),
            rest_names=np.array(names, dtype=object).reshape(shape),
            notices=(notice,),
        )

    def _seen(self, parts: list[Examined], whole: bool) -> Seen:
        """All parts side by side; the first holds the entries of the Hessian where these are `whole`."""
        subject, vectors, rows, labels = self.session.subject, self.claimed.vectors, self.row_names(), self.labels()
        units = vectors.units.size
        examined = joined(parts)
        used = labels[: examined.claim.shape[1]] if whole else labels
        names = np.array(
            [[self.name(row, label, unit=k < units) for k, label in enumerate(used)] for row in rows], dtype=object
        )
        numbers = np.concatenate([vectors.units, subject.layout.size + np.arange(len(used) - units)])
        rest = parts[-1] if not whole or len(parts) > 1 else None
        return Seen(
            entries=entries_from(examined, places(self.places, numbers), names.ravel().tolist()),
            matrix=parts[0] if whole else None,
            rest=rest,
            names=names[:, :units],
            rest_names=names[:, units:],
        )


def _stacked(parts: list[Examined]) -> Examined:
    """Examined rows of several outputs below each other."""
    fields = ("claim", "value", "bound", "left", "right", "verdict", "source", "reason")
    stacked = {name: np.concatenate([getattr(part, name) for part in parts], axis=0) for name in fields}
    return Examined(**stacked, noise=np.concatenate([part.noise for part in parts]))


# --- what a claim says against itself --------------------------------------------------------------------------------


def _contradictions(look: _Look) -> list[Contradiction]:
    layout, claimed, measure = look.session.subject.layout, look.claimed, look.measure
    found: list[Contradiction] = []
    if look.kind == "hvp":
        found += contradictions(claimed, measure, lambda entry: layout.name(entry % layout.size))
    if look.outputs > 1:
        return found
    if claimed.vectors.units.size:
        return [*found, *_asymmetry(look)]
    random, products = claimed.vectors.random, claimed.random
    labels = claimed.vectors.labels((), "random v")
    pair = broken_symmetry(random, products, labels, measure, first=layout.size)
    return [*found, *([pair] if pair else [])]


def _asymmetry(look: _Look) -> list[Contradiction]:
    """The place where a Hessian differs most from its transpose."""
    layout, able = look.session.subject.layout, look.able
    matrix = look.claimed.units[:, able].T
    apart, allowed = symmetry(matrix, look.session.subject.domain.scale[able], look.measure.slack)
    if not apart.any():
        return []
    with np.errstate(invalid="ignore", divide="ignore"):
        worst = int(np.argmax(np.where(apart, np.abs(matrix - matrix.T) / np.where(allowed > 0, allowed, 1.0), -1.0)))
    i, j = sorted(divmod(worst, able.size))
    broken = Broken(
        name="symmetry",
        left=float(matrix[i, j]),
        right=float(matrix[j, i]),
        allowed=float(allowed[i, j]),
        entry=worst,
        entries=int(apart.sum()) // 2,
    )
    one, other = layout.name(int(able[i])), layout.name(int(able[j]))
    return [
        Contradiction(broken=broken, name=f"H[{one}, {other}] = H[{other}, {one}]", place=(int(able[i]), int(able[j])))
    ]


def _symmetric(look: _Look, found: list[Contradiction]) -> tuple[str, ...]:
    """Which vectors were tried, and which identities held."""
    linear = not any(each.broken.name not in SYMMETRY for each in found)
    held = look.outputs == 1 and not any(each.broken.name in SYMMETRY for each in found)
    if look.claimed.finding is not None or not np.isfinite(look.claimed.products).all():
        return ()
    if look.kind == "hessian":
        whole = look.claimed.vectors.units.size
        told = "the claimed Hessian is symmetric" if whole else "⟨u, H·v⟩ = ⟨v, H·u⟩ holds for random u and v"
        return (told,) if held and look.able.size > 1 else ()
    text = tried("hvp", look.claimed.vectors, linear=linear)
    return (text + ("; ⟨u, H·v⟩ = ⟨v, H·u⟩ holds" if held else ""),)


def _diagnoses(look: _Look, seen: Seen, found: list[Contradiction]) -> tuple[Diagnosis, ...]:
    units = None if seen.matrix is None else case_of(seen.matrix, seen.names, look.measure)
    rest = None if seen.rest is None else case_of(seen.rest, seen.rest_names, look.measure)
    if seen.narrowed is not None:
        return likely_mistakes(case_of(seen.narrowed, seen.names, look.measure))
    conduct = _conduct(look, [each.broken for each in found])
    indifferent_to_size = bool(conduct.same or conduct.by_sign)
    if units is not None and look.outputs == 1 and units.refuted.any() and not indifferent_to_size:
        return hessian_mistakes(units)
    if units is None and rest is not None and rest.refuted.any() and not indifferent_to_size and not conduct.broken:
        return (scattered(rest),)
    return product_mistakes("hvp", units, rest, conduct) or tuple(_asymmetric(each) for each in found)


def _asymmetric(found: Contradiction) -> Diagnosis:
    """The story of a claim that only contradicts itself."""
    left, right = number(found.broken.left), number(found.broken.right)
    text = f"a Hessian is symmetric, and this is not: {found.name} fails, {left} against {right}."
    return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=(found.name,))


def _conduct(look: _Look, broken: list[Broken]) -> Conduct:
    linear = [each for each in broken if each.name not in SYMMETRY]
    if look.kind == "hessian":
        return Conduct(same=(), by_sign=(), every=False, broken=linear)
    layout = look.session.subject.layout
    same, by_sign, every = indifferent(look.claimed, look.measure, lambda i: layout.name(i % layout.size))
    return Conduct(same=same, by_sign=by_sign, every=every, broken=linear)
