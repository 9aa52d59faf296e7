"""Products H·v with many entries held against differences of a confirmed gradient: one vector after the other.

A quick look confirms a right product as a whole. Only the entries that it leaves open, the worst of them first, are
examined in full; where the claim is refuted the rest is counted.
"""

import itertools
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np

from gradcheck.checks.along import examined_by
from gradcheck.checks.confirmed_slopes import Slopes
from gradcheck.checks.curvature import Curvatures
from gradcheck.checks.parts import picked, stacked
from gradcheck.claims.desk import _VERDICTS, Examined
from gradcheck.claims.examination import DIFFERENCES
from gradcheck.claims.glance import Glance, glance
from gradcheck.claims.rule import digits_agreed
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.substituted import substituted
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.witnesses.steps import room_along

#: Open entries that are examined in full before the others: enough to refute.
WORST = 32
#: Once entries stay open after the whole examination the product is no longer confirmed: no more than so many are
#: examined then, for one that is refuted. Else all are, so many at once; between them the time is looked at.
OPEN_MOST, AT_ONCE = 256, 20_000
#: Refuted products, or broken identities, after which nothing more is looked at.
ENOUGH = 2
UNDECIDED, CONFIRMED, REFUTED = range(3)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Product:
    """One product with a vector beside its witness.

    Attributes
    ----------
    number : int
        Of the random vector.
    verdict : Verdict
    told : ndarray of int
        Entries (positions among the judged ones) that carry the verdict, the worst first.
    examined : Examined
        Those entries, (t, 1).
    off : ndarray of bool, shape (m·n,)
        Entries that were seen to differ, whether they were examined in full or not.
    ratio : float
        Claim over witness where that is the same in all these entries; else NaN.
    left_open : int
        Entries that are neither confirmed nor seen to differ.
    bound : ndarray, shape (m·n,)
    allowed : ndarray, shape (m·n,)
        What the entries may be off because errors of their terms add up.
    """

    number: int
    verdict: Verdict
    told: IntArray
    examined: Examined
    off: BoolArray
    ratio: float
    left_open: int
    bound: Array
    allowed: Array

    @property
    def cut_short(self) -> bool:
        """Whether the budget or the time ended before all of it was looked at."""
        return bool((self.examined.reason == SPENT).any())


class Witness:
    """The confirmed gradient, asked for differences along single directions.

    Parameters
    ----------
    look : Curvatures
    slopes : Slopes
    claims : ndarray, shape (k, m·n)
        All claimed products that will be compared, and
    typical : ndarray, shape (k,)
        how far their directions reach: a gradient that vanishes is a sum of terms that do not, and rounds as they do.
    """

    def __init__(self, look: Curvatures, slopes: Slopes, claims: Array, typical: Array) -> None:
        self.look, self.slopes = look, slopes
        self.centre = slopes.at_point[look.places]
        size, squares = np.zeros(self.centre.size), np.zeros(self.centre.size)
        for claim, reach in zip(claims, typical.tolist(), strict=True):
            with np.errstate(invalid="ignore", over="ignore"):
                part = np.nan_to_num(np.abs(claim[look.places]), nan=0.0, posinf=0.0) * reach
                size += part
                squares += part**2 / len(typical)
        #: Size of an entry's terms along a direction that reaches 1: the root of the mean square over all of them.
        self.terms = np.sqrt(squares)
        size = np.fmax(size, np.abs(self.centre))
        self.size = np.where(size > 0, size, float(size.max(initial=0.0)) or 1.0)

    def allowed(self, row: Array) -> Array:
        """What the entries of a product may be off: errors of its terms add up, while the terms cancel by chance."""
        reach = float(
            room_along(self.look.session.subject.start, row[None], self.look.session.subject.domain).typical[0]
        )
        return np.asarray(self.look.measure.abs_tol + self.look.measure.rel_tol * self.terms / reach)

    def glance(self, claim: Array, *, row: Array | None = None, column: int | None = None) -> Glance:
        """A quick look at a claimed product (m·n,) of the judged entries."""
        subject, measure = self.look.session.subject, self.look.measure
        if row is None:
            direction = np.array([column], dtype=np.intp)
            base, room = subject.start, room_along(subject.start, direction, subject.domain)
        else:
            direction, base = np.zeros(1, np.intp), np.zeros(1)
            room = room_along(subject.start, row[None], subject.domain)
        inquiry = glance(
            base,
            direction,
            claim[:, None],
            room,
            self.centre,
            room.typical if row is not None else subject.domain.scale[direction],
            rel_tol=measure.rel_tol,
            abs_tol=measure.abs_tol if row is None else self.allowed(row)[:, None],
            unit_roundoff=measure.unit_roundoff,
            magnitude=self.size,
        )
        rows = None if row is None else row[None]
        inquiry = substituted(inquiry, subject.start, rows=rows, outputs=self._outputs(np.arange(self.centre.size)))
        inquiry = addressed(inquiry, function=self.look.function, source=self.slopes.source)
        return conduct_one(inquiry, self.look.session.gate)

    def examined(
        self, claim: Array, which: IntArray, *, rows: Array | None = None, columns: IntArray | None = None
    ) -> Examined:
        """The whole examination of some of the judged entries, claimed (k, d) along d directions."""
        look, measure = self.look, self.look.measure
        if rows is not None:
            measure = replace(measure, abs_tol=np.stack([self.allowed(row)[which] for row in rows], axis=1))
        return examined_by(
            look.session,
            look.function,
            claim,
            self.centre[which],
            measure,
            look.rules,
            columns=columns,
            rows=rows,
            outputs=self._outputs(which),
            magnitude=self.size[which],
            source=self.slopes.source,
            witnesses=(DIFFERENCES,),
        )

    def _outputs(self, which: IntArray) -> IntArray | None:
        """Which entries of the gradient; None for all of them."""
        return None if which.size == self.slopes.at_point.size else self.look.places[which]


def products_along(look: Curvatures, slopes: Slopes, *, contradicted: bool) -> Iterator[Product]:
    """The products with the random vectors, until enough of them are refuted, or budget or time are spent.

    `contradicted` says that the claim breaks an identity, which is a refutation already.
    """
    subject, vectors = look.session.subject, look.claimed.vectors.random
    witness = Witness(look, slopes, look.claimed.random, room_along(subject.start, vectors, subject.domain).typical)
    refuted = int(contradicted)
    for number in range(len(vectors)):
        product = _product(witness, number)
        yield product
        refuted += product.verdict == Verdict.REFUTED
        if refuted >= ENOUGH or product.cut_short or (contradicted and number + 1 >= ENOUGH):
            return


def _product(witness: Witness, number: int) -> Product:
    look = witness.look
    row, claim = look.claimed.vectors.random[number], look.claimed.random[number][look.places]
    seen, allowed = witness.glance(claim, row=row), witness.allowed(row)
    if seen.cut_short:
        code = np.where(seen.confirmed, CONFIRMED, UNDECIDED)
        return _told(number, claim, seen, allowed, code, {}, np.zeros(1, np.intp))
    # A product of nothing but zeros may be the flat of a staircase, which the whole examination knows.
    blank = not claim.any() and not seen.value.any()
    code = np.where(seen.confirmed & (not blank), CONFIRMED, UNDECIDED)

    def examine(which: IntArray) -> Examined:
        return witness.examined(claim[which, None], which, rows=row[None])

    parts, last = _resolved(seen, code, examine)
    return _told(number, claim, seen, allowed, code, parts, last)


def _resolved(
    seen: Glance, code: IntArray, examine: Callable[[IntArray], Examined]
) -> tuple[dict[int, tuple[Examined, int]], IntArray]:
    """Examine open entries in full, the worst first, until one is refuted; `code` takes their verdicts up.

    Returns where each of the decisive ones stands, and the last ones that were examined.
    """
    open_ = np.flatnonzero(code == UNDECIDED)
    open_ = open_[np.argsort(-seen.excess[open_], kind="stable")]
    found: dict[int, tuple[Examined, int]] = {}
    last = open_[:0]
    for first, stop in _pieces(open_.size):
        last = np.sort(open_[first:stop])
        part = examine(last)
        verdict = part.verdict[:, 0]
        code[last[verdict == Verdict.CONFIRMED]] = CONFIRMED
        code[last[verdict == Verdict.REFUTED]] = REFUTED
        known = np.isfinite(part.bound[:, 0])
        seen.value[last[known]], seen.bound[last[known]] = part.value[known, 0], part.bound[known, 0]
        telling = np.flatnonzero(verdict != Verdict.CONFIRMED)[:WORST]
        found |= {int(last[i]): (part, int(i)) for i in telling}
        if (code == REFUTED).any() or (part.reason == SPENT).any():
            break
        if stop >= OPEN_MOST and (code[open_[:stop]] == UNDECIDED).any():
            break
    return found, last


def _pieces(many: int) -> Iterator[tuple[int, int]]:
    """The worst ones, then the others in pieces."""
    edges = [0, WORST, *range(OPEN_MOST, many, AT_ONCE)]
    edges = [edge for edge in edges if edge < many]
    yield from itertools.pairwise([*edges, many] if many else [])


def _told(
    number: int,
    claim: Array,
    seen: Glance,
    allowed: Array,
    code: IntArray,
    parts: dict[int, tuple[Examined, int]],
    last: IntArray,
) -> Product:
    refuted = bool((code == REFUTED).any())
    off = (code == REFUTED) | (seen.off & (code == UNDECIDED) & refuted)
    decisive = [place for place in parts if code[place] == (REFUTED if refuted else UNDECIDED)]
    if decisive:
        told = np.array(sorted(decisive, key=lambda place: -seen.excess[place]), dtype=np.intp)
        examined = stacked([picked(one, slice(i, i + 1)) for one, i in (parts[int(place)] for place in told)])
    else:
        digits = digits_agreed(claim, seen.value, seen.bound)
        told = last[:1] if seen.cut_short else np.array([int(np.argmin(digits))], dtype=np.intp)
        examined = _glanced(claim, seen, told)
    return Product(
        number=number,
        verdict=Verdict.overall(examined.verdict.ravel().tolist()),
        told=told,
        examined=examined,
        off=off,
        ratio=common_ratio(claim[off], seen.value[off], seen.bound[off]),
        left_open=int(np.count_nonzero((code == UNDECIDED) & ~off)),
        bound=seen.bound,
        allowed=allowed,
    )


def _glanced(claim: Array, seen: Glance, told: IntArray) -> Examined:
    """Entries that the quick look decided, or that nobody looked at."""
    shape = told.size, 1
    unknown = np.full(shape, np.nan)
    spent = seen.cut_short
    return Examined(
        claim=claim[told, None],
        value=unknown if spent else seen.value[told, None],
        bound=np.full(shape, np.inf) if spent else seen.bound[told, None],
        left=unknown,
        right=unknown,
        verdict=_VERDICTS[np.full(shape, UNDECIDED if spent else CONFIRMED)],
        source=np.full(shape, "" if spent else "differences", dtype=object),
        reason=np.full(shape, SPENT if spent else "", dtype=object),
        noise=np.full(told.size, np.nan),
    )


def common_ratio(claim: Array, value: Array, bound: Array) -> float:
    """Claim over value where one factor fits all entries; NaN where none does."""
    if claim.size < 2 or not np.isfinite(claim).all() or not np.isfinite(value).all():
        return float("nan")
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = float(np.median(claim / value))
        fits = np.abs(claim - ratio * value) <= 4 * max(1.0, abs(ratio)) * bound + 1e-6 * np.abs(claim)
    return ratio if np.isfinite(ratio) and ratio != 0 and fits.all() else float("nan")
