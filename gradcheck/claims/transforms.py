"""Whether a derivative by automatic differentiation holds in all the company in which it will be used.

A claim named after an AD library is asked for with the cotangent 1, once, at one point. Inside a larger model its rules
meet other cotangents, run forwards, are compiled, batched, scanned and differentiated again. Here each of these is
tried on its own and held against the claim, or against the same sweep done plainly, so that what breaks has a name.

The identities: a sweep is linear in its cotangent (wᵀJ for every w, exactly 0 for 0) or tangent (Jv for every v),
forward and reverse mode give the same J (⟨Jv, w⟩ = ⟨v, Jᵀw⟩), and a transformation changes nothing but the last digits.
Second derivatives are held against differences of the gradient along a random direction, single precision against
double.
"""

from collections.abc import Generator, Sequence
from dataclasses import dataclass, field, replace
from enum import StrEnum
from typing import TypeAlias

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Reply, Request, Status
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import Room, room_along
from gradcheck.witnesses.testimony import Testimony

_Swept: TypeAlias = Generator[Request, Reply, Array | None]

#: Two sweeps that differ by less than this share tell no mistake of a rule: compilers put sums in another order, and
#: iterations stop at another step. In single precision, the same for its digits.
PLAIN, PLAIN_SINGLE = 1e-6, 1e-3
#: ... nor by so many roundings of the value over the size of the variable.
ROUNDINGS = 2.0**14 * np.finfo(float).eps
#: ... nor by so many times what the gradient changes over a distance of this share of x.
NOISE_MARGIN, NOISE_SHARE = 16.0, 1e-9
#: Cotangents and tangents are tried in these sizes as well; the signs are part of it.
SIZES = (-1.37e-3, 29.3, -870.0)
#: How far other points lie, in sizes of the variables; the second where the model is not defined at the first.
FAR, NEAR = 0.1, 1e-3
#: A second derivative that is off by more than this share is wrong.
PLAIN_SECOND = 1e-5
#: The second look at a second derivative takes its values on intervals of another size.
OTHER_WIDTH = 0.3719
#: With more variables and outputs than this, fewer sweeps, and none under vmap: their batches take memory.
LARGE = 20_000
#: Compiling takes some milliseconds an equation. Programs of more equations than the first number are not compiled for
#: second order, scan, checkpoint and single precision as well; beyond the second one not for vmap either.
EQUATIONS_FEW, EQUATIONS_MANY = 120, 360
#: Up to so many rows, a wrong matrix is asked for row by row to find its wrong entries.
ROWS_MOST = 32
#: Unit round-off of single precision; gradients may be off by so many of them, and by so many times what so small a
#: change of x makes.
SINGLE, SINGLE_ROUNDINGS, SINGLE_CONDITION = 2.0**-24, 512.0, 64.0
#: A share below which nobody in single precision will miss the digits.
SINGLE_PLAIN = 1e-3


class Scaling(StrEnum):
    """What a sweep does to the size of its cotangent or tangent."""

    LINEAR = "linear"
    CONSTANT = "constant"
    POWER = "power"
    OTHER = "other"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Broken:
    """A way of differentiating that gives something else than the claim.

    Attributes
    ----------
    way : str
        As in `Transformed`, without ``"jit "`` where the compilation is not to blame; ``"between"`` for a backward pass
        that uses what a later forward pass left behind.
    wrong : ndarray of bool, shape (m, n)
        The entries that are touched; all that may be, where they cannot be told apart.
    got, due : float
        At the worst place.
    place : (row, column)
        Where that is; the column is -1 for the value.
    factor : float
        The cotangent there, if there is one output; else its size, or that of the tangent, beside the first one.
    scaling : Scaling
    power : float
    claimed_right : bool
        Whether the claim itself, with unit cotangents or tangents, stands.
    """

    way: str
    wrong: BoolArray
    got: float
    due: float
    place: tuple[int, int]
    factor: float = 1.0
    scaling: Scaling = Scaling.LINEAR
    power: float = 1.0
    claimed_right: bool = True


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Off:
    """A derivative beside what it should be, in one variable: the worst of those that are off.

    Attributes
    ----------
    wrong : ndarray of bool, shape (n,)
    column : int
    got, due, bound : float
    """

    wrong: BoolArray
    column: int
    got: float
    due: float
    bound: float = 0.0


@dataclass(slots=True, kw_only=True, eq=False)
class Tried:
    """What the trials showed.

    Attributes
    ----------
    ways : list of str
        What was tried and did not raise.
    broken : list of Broken
    raised : list of str
        Ways in which the model or its rules cannot be differentiated at all.
    second : Off or None
        A wrong second derivative.
    single : Off or None
        What single precision makes of the gradient, where that is more than rounding; infinite or NaN on overflow.
    short : ndarray of bool, shape (n,)
        Where the reverse rule gives single precision in a model of double precision.
    sweeps : int
    complete : bool
        False where the budget or the time ended before.
    equations : int
        Of a sweep in reverse mode, where that is the reason why only some transformations were tried; else 0.
    """

    short: BoolArray
    ways: list[str] = field(default_factory=list)
    broken: list[Broken] = field(default_factory=list)
    raised: list[str] = field(default_factory=list)
    second: Off | None = None
    single: Off | None = None
    sweeps: int = 0
    complete: bool = True
    equations: int = 0


def trials(
    base: Array,
    claim: Array,
    centre: Array,
    domain: Domain,
    source: str,
    *,
    right: Array | None = None,
    parts: Sequence[slice] = (),
    second: bool = True,
    single: bool = False,
    transforms: bool = True,
    seed: int = 0,
) -> Inquiry[Tried]:
    """Try a derivative under everything that will be done to it.

    Parameters
    ----------
    base : ndarray, shape (n,)
    claim : ndarray, shape (m, n)
        What the source gives with unit cotangents or tangents; entries that are not finite are not compared.
    centre : ndarray, shape (m,)
        Values at the point.
    domain : Domain
        Other points stay within its bounds.
    source : str
        ``"jax"``, or ``"autograd"`` (with ``transforms=False``).
    right : ndarray, shape (m, n), optional
        The derivative as far as it is known otherwise; by default the claim.
    parts : sequence of slice
        Parts of x that are each put under vmap alone.
    second : bool
        Whether second derivatives are looked at.
    single : bool
        Whether single precision is.
    transforms : bool
        Whether jit, vmap, scan and checkpoint are.
    seed : int

    Returns
    -------
    Tried

    Notes
    -----
    About thirty sweeps and ten more for the second derivative; a handful for more than 20,000 variables and outputs.
    """
    parts = parts if len(parts) > 1 else ()
    known = claim if right is None else right
    return (yield from _Trials(base, claim, known, centre, domain, source, parts, seed).run(second, single, transforms))


class _Trials:
    def __init__(
        self,
        base: Array,
        claim: Array,
        right: Array,
        centre: Array,
        domain: Domain,
        source: str,
        parts: Sequence[slice],
        seed: int,
    ) -> None:
        self.base, self.claim, self.right, self.centre = np.asarray(base, dtype=float), claim, right, centre
        self.domain, self.source, self.parts = domain, source, parts
        self.rng = np.random.default_rng(seed)
        self.m, self.n = claim.shape
        self.large = self.m + self.n > LARGE
        self.size = np.where(self.base != 0, np.abs(self.base), domain.scale)
        self.tried = Tried(short=np.zeros(self.n, dtype=bool))
        self.plain = PLAIN
        self.noise = np.zeros(self.m + self.n)
        self.compiled = True
        rows = np.abs(np.where(np.isfinite(claim), claim, 0.0)).max(axis=1)
        middle = float(np.median(rows[rows > 0])) if (rows > 0).any() else 1.0
        self.balance = np.clip(middle / np.where(rows > 0, rows, middle), 1e-6, 1e6)
        self.first = self.cotangent()

    def run(self, second: bool, single: bool, transforms: bool) -> Inquiry[Tried]:
        self.compiled = transforms
        plain = yield from self._reverse()
        if plain is not None and transforms:
            equations = yield from self._equations()
            rows, reference = yield from self._jit(plain)
            if reference is not None and not self.large:
                if equations <= EQUATIONS_MANY:
                    yield from self._vmap(rows, reference)
                if equations <= EQUATIONS_FEW:
                    yield from self._further(rows, reference, second, single)
        yield from self._forward()
        if plain is None and "reverse" in self.tried.raised and transforms:
            yield from self._forward_transformed()
        return self.tried

    def _further(self, rows: Array, reference: Array, second: bool, single: bool) -> Inquiry[None]:
        yield from self._scan(rows, reference)
        if single:
            yield from self._single(rows)
        if second and not self.tried.broken:
            yield from self._second(reference[0])

    def _equations(self) -> Generator[Request, Reply, int]:
        """The size of the program; 0 where it cannot be traced, and so will not be compiled."""
        if self.large:
            return 0
        found = yield from self.ask("equations", np.array([self.row(self.base, self.first)]), silent=True)
        if found is None:
            return 0
        self.tried.ways.pop()
        self.tried.sweeps -= 1
        equations = int(found[0, 0])
        self.tried.equations = equations if equations > EQUATIONS_FEW else 0
        return equations

    # --- asking and comparing ---

    def ask(self, way: str, rows: Array, *, silent: bool = False) -> _Swept:
        """The rows that come back; None if that raised, or was not carried out."""
        if not self.tried.complete:
            return None
        reply = yield Request(
            base=self.base, directions=rows, offsets=np.zeros((len(rows), 1)), arithmetic=way, source=self.source
        )
        status = Status(reply.status[0, 0])
        if status == Status.REFUSED:
            self.tried.complete = False
            return None
        if status > Status.NONFINITE:
            if not silent:
                self.tried.raised.append(_without_jit(way))
            return None
        self.tried.sweeps += len(rows)
        self.tried.ways.append(way)
        return np.asarray(reply.values[:, 0, :], dtype=float)

    def beyond(self, got: Array, due: Array, rows: Array, level: Array | None = None) -> BoolArray:
        """Where rows of reverse mode (k, m+n) differ by more than rounding; `level` (k, n) is the size of terms."""
        cotangents = np.abs(rows[:, self.n :])
        value, gradient = np.abs(np.where(np.isfinite(due), due, 0.0))[:, : self.m], np.abs(due[:, self.m :])
        gradient = np.where(np.isfinite(gradient), gradient, 0.0)
        level = gradient if level is None else np.maximum(level, gradient)
        reach = (level * self.size).max(axis=1, keepdims=True)
        own = cotangents.max(axis=1, keepdims=True) / np.abs(self.first).max()
        weight = cotangents @ np.abs(self.centre)[:, None]
        steep = np.abs(np.where(np.isfinite(self.claim), self.claim, 0.0)) @ self.size
        allowed = np.concatenate(
            [
                self.plain * value + ROUNDINGS * steep + NOISE_MARGIN * self.noise[: self.m],
                self.plain * level
                + ROUNDINGS * (weight + reach) / self.size
                + NOISE_MARGIN * self.noise[self.m :] * own,
            ],
            axis=1,
        )
        return _differs(got, due, allowed)

    def due(self, rows: Array) -> tuple[Array, Array]:
        """What rows at the point itself should give, and the size of the terms of the gradient."""
        cotangents = rows[:, self.n :]
        with np.errstate(invalid="ignore", over="ignore"):
            gradient, level = cotangents @ self.claim, np.abs(cotangents) @ np.abs(self.claim)
        level = np.where(np.isfinite(level), level, 0.0)
        return np.concatenate([np.tile(self.centre, (len(rows), 1)), gradient], axis=1), level

    def cotangent(self) -> Array:
        return np.asarray(self._random(self.m) * self.balance)

    def elsewhere(self, share: float) -> Array:
        """Another point within the bounds; variables of whole numbers stay."""
        moved = self._random(self.n) * share * self.size
        moved = np.where(self.domain.integer, 0.0, moved)
        return np.asarray(np.clip(self.base + moved, self.domain.lower, self.domain.upper))

    def _random(self, count: int) -> Array:
        """Numbers of either sign, none of them small."""
        return np.asarray(self.rng.uniform(0.5, 1.0, count) * self.rng.choice([-1.0, 1.0], count))

    def row(self, point: Array, other: Array) -> Array:
        return np.concatenate([point, other])

    def blame(self, way: str, got: Array, due: Array, beyond: BoolArray) -> Broken:
        """The broken way with its worst place, from rows of reverse mode."""
        gap = _gap(got, due, beyond)
        gap[:, self.m :] *= self.size
        k, place = np.unravel_index(int(gap.argmax()), gap.shape)
        columns: BoolArray = np.asarray(beyond.any(axis=0))
        wrong = np.broadcast_to(columns[: self.m, None], self.claim.shape) | self._entries(columns[self.m :])
        entry = (int(place), -1) if place < self.m else (int(wrong[:, place - self.m].argmax()), int(place) - self.m)
        return Broken(way=way, wrong=wrong, got=float(got[k, place]), due=float(due[k, place]), place=entry)

    def _stands(self, marks: BoolArray) -> bool:
        """Whether the claim is right in the marked entries, as far as is known."""
        with np.errstate(invalid="ignore"):
            off = np.abs(self.claim - self.right) > PLAIN * np.abs(self.right)
        return not bool((off & marks).any())

    def _entries(self, columns: BoolArray) -> BoolArray:
        """The entries (m, n) of these columns that may be to blame: the ones that are not zero, or all of them."""
        entries = columns & (self.claim != 0)
        return np.asarray(entries | (columns & ~entries.any(axis=0)))

    # --- reverse mode, plainly ---

    def _reverse(self) -> _Swept:
        """Rows of the first cotangents at the point, one at another point last; None if reverse mode is not right."""
        w = self.first
        cotangents = [w, *(size * w for size in (SIZES[1:2] if self.large else SIZES)), 0 * w]
        if not self.large:
            other = self.cotangent()
            cotangents += [other, w + other]
        rows = np.array([self.row(self.base, c) for c in cotangents])
        found: Array | None = None
        for share in () if self.large else (FAR, NEAR):
            apart = np.vstack([rows, self.row(self.elsewhere(share), self.cotangent())])
            found = yield from self.ask("reverse", apart, silent=True)
            if found is not None and np.isfinite(found[-1]).all():
                rows = apart
                break
        else:
            found = yield from self.ask("reverse", rows)
        if found is None:
            return None
        self.aside = rows[len(cotangents) :]
        at_point = slice(len(cotangents))
        self._measure_precision(found)
        due, level = self.due(rows[at_point])
        due = self._without_overflow(found[at_point], due)
        beyond = self.beyond(found[at_point], due, rows[at_point], level)
        if not beyond[:, self.m :].any():
            return found
        yield from self._accuse_reverse(rows, found, due, level, beyond)
        return None

    def _without_overflow(self, found: Array, due: Array) -> Array:
        """What is due, unknown where a large cotangent or tangent may have made the numbers overflow on the way."""
        large = np.abs(self._sizes(len(due)))[:, None] > 1
        return np.where(large & ~np.isfinite(found), np.nan, due)

    def _sizes(self, count: int) -> Array:
        """Sizes of the cotangents or tangents of the first rows, beside the first one; those of the others are 1."""
        sizes = np.ones(count)
        some = [1.0, *(SIZES[1:2] if self.large else SIZES), 0.0]
        sizes[: len(some)] = some[:count]
        return sizes

    def _measure_precision(self, found: Array) -> None:
        """Where gradients come as exact float32 for random cotangents: everywhere, or only in the rule."""
        values, gradients = found[-1:, : self.m], found[:, self.m :]
        short = _is_single(gradients)
        if short.any() and _is_single(values).all():
            self.plain = PLAIN_SINGLE
        elif short.any():
            self.tried.short = short

    def _accuse_reverse(self, rows: Array, found: Array, due: Array, level: Array, beyond: BoolArray) -> Inquiry[None]:
        """Is it the cotangent, or what another forward pass left behind?"""
        count = len(due)
        beyond[:, : self.m] = False
        if len(rows) > count:
            alone = yield from self.ask("apart", rows, silent=True)
            if alone is not None and not self.beyond(alone[:count], due, rows[:count], level)[:, self.m :].any():
                self.tried.broken.append(self.blame("between", found[:count], due, beyond))
                return
        columns = np.asarray(beyond.any(axis=0))[self.m :]
        sizes = np.array([1.0, *(SIZES[1:2] if self.large else SIZES), 0.0])
        scaling, power = _scaling(found[: len(sizes), self.m :][:, columns], sizes)
        worst = self.blame("reverse", found[:count], due, beyond)
        gap = _gap(found[:count], due, beyond)
        k, place = (int(part) for part in np.unravel_index(int(gap.argmax()), gap.shape))
        with np.errstate(invalid="ignore"):
            worth = float(rows[k, self.n :] @ self.right[:, place - self.m])
        worst = replace(worst, got=float(found[k, place]), due=worth, claimed_right=self._stands(worst.wrong))
        factor = float(rows[k, -1]) if self.m == 1 else float(sizes[k]) if k < len(sizes) else 1.0
        wrong = yield from self._entry_by_entry(worst.wrong)
        self.tried.broken.append(replace(worst, scaling=scaling, power=power, factor=factor, wrong=wrong))

    def _entry_by_entry(self, suspected: BoolArray) -> Generator[Request, Reply, BoolArray]:
        """The wrong entries of a matrix, each output asked for on its own."""
        if self.m == 1 or self.m > ROWS_MOST:
            return suspected
        units = -1.7 * np.eye(self.m)
        rows = np.array([self.row(self.base, unit) for unit in units])
        found = yield from self.ask("apart", rows, silent=True)
        if found is None:
            return suspected
        due, level = self.due(rows)
        wrong = self.beyond(found, due, rows, level)[:, self.m :]
        return wrong if wrong.any() else suspected

    # --- under transformations ---

    def _jit(self, plain: Array) -> Generator[Request, Reply, tuple[Array, Array | None]]:
        """The rows for a batch, and what they give one by one in all its forms."""
        others = [self.row(self.elsewhere(FAR if len(self.aside) else NEAR), self.cotangent()) for _ in range(2)]
        rows = np.array([self.row(self.base, self.first), *(self.aside if len(self.aside) else others[1:]), others[0]])
        if self.large:
            rows = rows[:1]
        expanded = rows if self.large else _expanded(rows, self.n, self.parts)
        shaken = self.base * (1 + NOISE_SHARE * self.rng.uniform(-1, 1, (3, self.n)))
        shaken = np.clip(shaken, self.domain.lower, self.domain.upper)
        probes = np.array([self.row(point, self.first) for point in shaken])[: 0 if self.large else 3]
        asked = np.vstack([expanded, *probes[:, None]])
        found = yield from self.ask("jit reverse", asked)
        if found is not None:
            self._measure_noise(found[len(expanded) :], found[0])
            known = np.vstack([expanded, *self.aside[:, None]])
            due, level = self.due(known)
            away = [i for i, row in enumerate(expanded) if not np.array_equal(row[: self.n], self.base)]
            due[away], level[away] = np.nan, 0.0
            if len(self.aside):
                due[1] = plain[-1]
            beyond = self.beyond(found[: len(expanded)], due[: len(expanded)], expanded, level[: len(expanded)])
            if not beyond.any():
                return rows, found[: len(expanded)]
            self.tried.broken.append(self.blame("jit", found[: len(expanded)], due[: len(expanded)], beyond))
        self.compiled = False
        found = yield from self.ask("apart", asked, silent=True)
        if found is None:
            return rows, None
        self._measure_noise(found[len(expanded) :], found[0])
        return rows, found[: len(expanded)]

    def _measure_noise(self, probes: Array, plain: Array) -> None:
        """How much sweeps close to the point differ from the one at it, done in the same way."""
        if len(probes):
            known = np.isfinite(probes) & np.isfinite(plain)
            self.noise = np.maximum(_gap(probes, plain, known).max(axis=0), 0.0)

    def way(self, name: str) -> str:
        return f"jit {name}" if self.compiled else name

    def _vmap(self, rows: Array, reference: Array) -> Inquiry[None]:
        names = ["vmap points", "vmap cotangents", *(f"vmap argument {i}" for i in range(len(self.parts)))]
        expanded = _expanded(rows, self.n, self.parts)
        found = yield from self.ask(self.way("vmap"), rows, silent=True)
        if found is not None and not self.beyond(found, reference, expanded).any():
            return
        for i, name in enumerate(names):
            part = slice(i * len(rows), (i + 1) * len(rows))
            yield from self._one_transform(name, rows, expanded[part], reference[part])

    def _one_transform(self, name: str, rows: Array, due_rows: Array, due: Array) -> Inquiry[None]:
        found = yield from self.ask(self.way(name), rows)
        if found is not None and (beyond := self.beyond(found, due, due_rows)).any():
            self.tried.broken.append(self.blame(name, found, due, beyond))

    def _scan(self, rows: Array, reference: Array) -> Inquiry[None]:
        rows, reference = rows[:2], reference[:2]
        found = yield from self.ask(self.way("scan checkpoint"), rows, silent=True)
        if found is not None and not self.beyond(found, reference, rows).any():
            return
        for name in ("scan", "checkpoint"):
            yield from self._one_transform(name, rows, rows, reference)

    # --- forward mode ---

    def _forward(self) -> Inquiry[None]:
        """Other tangents; compiled if that is no trouble, because plain forward mode compiles every operation."""
        first = self.tangent()
        tangents = [first, *(size * first for size in (SIZES[1:2] if self.large else SIZES)), 0 * first]
        tangents += [] if self.large else [self.tangent()]
        rows = np.array([self.row(self.base, v) for v in tangents])
        compiled = None
        if self.compiled and not self.tried.raised:
            compiled = yield from self.ask("jit forward", rows, silent=True)
            if compiled is not None and not self._off_forward(compiled, rows, self.claim).any():
                return
        found = yield from self.ask("forward", rows)
        if found is None:
            return
        if not self._off_forward(found, rows, self.claim).any():
            if compiled is not None:
                beyond = self._off_forward(compiled, rows, self.claim)
                due = self._due_forward(rows, self.claim)
                self.tried.broken.append(self._blame_forward("jit", compiled[:, self.m :], due, beyond))
        elif (beyond := self._off_forward(found, rows, self.right)).any():
            yield from self._accuse_forward(found[:, self.m :], self._due_forward(rows, self.right), beyond)
        else:
            self._accuse_claim(rows)

    def _due_forward(self, rows: Array, derivative: Array) -> Array:
        with np.errstate(invalid="ignore", over="ignore"):
            return np.asarray(rows[:, self.n :] @ derivative.T)

    def _off_forward(self, found: Array, rows: Array, derivative: Array) -> BoolArray:
        """Where forward mode differs from a derivative."""
        got = found[:, self.m :]
        return self._beyond_forward(got, self._without_overflow(got, self._due_forward(rows, derivative)), rows)

    def _accuse_claim(self, rows: Array) -> None:
        """Forward mode gives what the witnesses say, and the claim by reverse mode does not."""
        if any(broken.way == "reverse" for broken in self.tried.broken) or "reverse" in self.tried.raised:
            return
        claimed, due = self._due_forward(rows, self.claim), self._due_forward(rows, self.right)
        broken = self._blame_forward("reverse", claimed, due, self._beyond_forward(claimed, due, rows))
        with np.errstate(invalid="ignore"):
            off = np.abs(self.claim - self.right) > PLAIN * np.abs(self.right)
        self.tried.broken.append(replace(broken, wrong=off, claimed_right=False))

    def _accuse_forward(self, got: Array, due: Array, beyond: BoolArray) -> Inquiry[None]:
        sizes = np.array([1.0, *(SIZES[1:2] if self.large else SIZES), 0.0])
        scaling, power = _scaling(got[: len(sizes)][:, np.asarray(beyond.any(axis=0))], sizes)
        broken = self._blame_forward("forward", got, due, beyond)
        k = int(_gap(got, due, beyond).max(axis=1).argmax())
        factor = float(sizes[k]) if k < len(sizes) else 1.0
        wrong = yield from self._column_by_column(broken.wrong)
        right = self._stands(wrong)
        self.tried.broken.append(
            replace(broken, wrong=wrong, factor=factor, scaling=scaling, power=power, claimed_right=right)
        )

    def _blame_forward(self, way: str, got: Array, due: Array, beyond: BoolArray) -> Broken:
        """The broken way with its worst place, from derivatives (k, m) of forward mode."""
        gap = _gap(got, due, beyond)
        k, i = (int(place) for place in np.unravel_index(int(gap.argmax()), gap.shape))
        wrong = np.broadcast_to(np.asarray(beyond.any(axis=0))[:, None], self.claim.shape)
        return Broken(way=way, wrong=wrong, got=float(got[k, i]), due=float(due[k, i]), place=(i, 0))

    def tangent(self) -> Array:
        return np.asarray(self._random(self.n) * self.size / self.size.max())

    def _beyond_forward(self, got: Array, due: Array, rows: Array) -> BoolArray:
        tangents = np.abs(rows[:, self.n :])
        with np.errstate(invalid="ignore", over="ignore"):
            level = tangents @ np.abs(np.where(np.isfinite(self.right), self.right, 0.0)).T
        moved = (tangents / self.size).max(axis=1, keepdims=True)
        noise = (tangents @ self.noise[self.m :])[:, None] / np.abs(self.first)
        allowed = self.plain * level + ROUNDINGS * moved * np.abs(self.centre) + NOISE_MARGIN * noise
        return _differs(got, due, allowed)

    def _column_by_column(self, suspected: BoolArray) -> Generator[Request, Reply, BoolArray]:
        """The wrong entries, each variable moved on its own."""
        if self.n > ROWS_MOST:
            return suspected
        rows = np.array([self.row(self.base, tangent) for tangent in np.diag(-1.7 * self.size / self.size.max())])
        found = yield from self.ask("forward", rows, silent=True)
        if found is None:
            return suspected
        wrong = self._beyond_forward(found[:, self.m :], rows[:, self.n :] @ self.right.T, rows).T
        return wrong if wrong.any() else suspected

    def _forward_transformed(self) -> Inquiry[None]:
        """Under jit and vmap where there is forward mode only."""
        if self.large or any(broken.way == "forward" for broken in self.tried.broken):
            return
        points = [self.base, self.elsewhere(NEAR), self.elsewhere(NEAR)]
        rows = np.array([self.row(point, self.tangent()) for point in points])
        expanded = _expanded(rows, self.n, self.parts)
        plain = yield from self.ask("forward", expanded, silent=True)
        if plain is None:
            return
        names = ["points", "tangents", *(f"argument {i}" for i in range(len(self.parts)))]
        yield from self._one_forward("jit forward", "jit", expanded, expanded, plain)
        found = yield from self.ask("vmap forward", rows, silent=True)
        if found is not None and not self._beyond_forward(found[:, self.m :], plain[:, self.m :], expanded).any():
            return
        for i, name in enumerate(names):
            part = slice(i * len(rows), (i + 1) * len(rows))
            yield from self._one_forward(f"vmap forward {name}", f"vmap {name}", rows, expanded[part], plain[part])

    def _one_forward(self, way: str, name: str, rows: Array, due_rows: Array, plain: Array) -> Inquiry[None]:
        found = yield from self.ask(way, rows)
        if found is None:
            return
        got, due = found[:, self.m :], plain[:, self.m :]
        beyond = self._beyond_forward(got, due, due_rows)
        if beyond.any():
            self.tried.broken.append(self._blame_forward(name, got, due, beyond))

    # --- second order ---

    def _second(self, gradient: Array) -> Inquiry[None]:
        tangent = self.tangent()
        tangent = np.where(self.domain.integer, 0.0, tangent)
        rows = np.concatenate([self.base, self.first, tangent])[None]
        found = yield from self.ask(self.way("second"), rows, silent=True)
        if found is None:
            found = yield from self.ask(self.way("second reverse"), rows, silent=True)
        if found is None:
            if self.tried.complete:
                self.tried.raised.append("second")
            return
        got, centre = found[0], gradient[self.m :]
        room = room_along(self.base, tangent[None], self.domain)
        wrong = np.ones(self.n, dtype=bool)
        seen: Testimony | None = None
        for width in (1.0, OTHER_WIDTH):
            other = replace(room, scale=room.scale * width, widest=room.widest * width)
            seen = yield from self._differences(tangent, other, centre)
            if seen is None:
                return
            wrong = wrong & self._off(got, seen, centre)
            if not wrong.any():
                return
        assert seen is not None  # or it has returned
        value, bound = seen.value[0], seen.bound[0]
        j = int((_gap(got, value, wrong) * self.size).argmax())
        self.tried.second = Off(wrong=wrong, column=j, got=float(got[j]), due=float(value[j]), bound=float(bound[j]))

    def _off(self, got: Array, seen: Testimony, gradient: Array) -> BoolArray:
        value, bound = seen.value[0], seen.bound[0]
        level = np.fmax(np.abs(got), np.abs(value))
        level = np.where(np.isfinite(level), level, 0.0)
        reach = float((level * self.size).max())
        with np.errstate(invalid="ignore"):
            allowed = max(PLAIN_SECOND, self.plain) * level + 3 * bound + PLAIN * reach / self.size
            allowed = allowed + ROUNDINGS * np.abs(gradient) + NOISE_MARGIN * self.noise[self.m :]
            known = np.isfinite(bound) & np.isfinite(value) & ~np.isfinite(seen.left[0])
            return np.asarray(known & ~(np.abs(got - value) <= allowed))

    def _differences(self, tangent: Array, room: Room, centre: Array) -> Generator[Request, Reply, Testimony | None]:
        """The difference witness on the gradient, along the tangent."""
        if not np.isfinite(centre).all():
            return None
        inquiry = finite_difference(self.base, tangent[None], room, centre)
        try:
            request = next(inquiry)
            while True:
                points = self.base + request.offsets[0][:, None] * tangent
                rows = np.array([self.row(point, self.first) for point in points])
                found = yield from self.ask("jit reverse" if self.compiled else "apart", rows, silent=True)
                request = inquiry.send(_reply_of(found, len(rows), self.m, self.n))
        except StopIteration as end:
            testimony: Testimony = end.value
            return testimony if self.tried.complete else None

    # --- single precision ---

    def _single(self, rows: Array) -> Inquiry[None]:
        rows = np.array([self._in_single(row) for row in rows[:1]])
        inside = (rows[:, : self.n] >= self.domain.lower) & (rows[:, : self.n] <= self.domain.upper)
        if not (np.isfinite(rows).all() and inside.all()):  # no such number between the bounds
            return
        # What raises here may be jax's own: it keeps constants of the other precision between its scopes.
        found = yield from self.ask(self.way("single"), rows, silent=True)
        if found is None:
            return
        shaken = [self.row(point, rows[0, self.n :]) for point in self._shaken(rows[0, : self.n])]
        reference = yield from self.ask(
            "jit reverse" if self.compiled else "apart", np.vstack([rows, shaken]), silent=True
        )
        if reference is None:
            return
        got, due = found[0, self.m :], reference[0, self.m :]
        condition = _gap(reference[1:, self.m :], due, np.isfinite(due)).max(axis=0)
        size = np.abs(np.where(np.isfinite(due), due, 0.0))
        reach = float((size * self.size).max()) / self.size
        with np.errstate(invalid="ignore"):
            budget = SINGLE_ROUNDINGS * SINGLE * np.maximum(size, reach) + SINGLE_CONDITION * condition
            budget = np.maximum(budget, SINGLE_PLAIN * np.maximum(size, SINGLE_PLAIN * reach))
            wrong = np.isfinite(due) & ~(np.abs(got - due) <= np.nan_to_num(budget, nan=np.inf))
        if wrong.any():
            j = int(_gap(got / 2, due / 2, wrong).argmax())
            self.tried.single = Off(wrong=wrong, column=j, got=float(got[j]), due=float(due[j]), bound=float(budget[j]))

    def _in_single(self, row: Array) -> Array:
        """A row of numbers of single precision, its point still within the bounds."""
        with np.errstate(over="ignore", under="ignore"):
            short = row.astype(np.float32)
            lower, upper = self.domain.lower.astype(np.float32), self.domain.upper.astype(np.float32)
        point = short[: self.n]
        point = np.where(point < self.domain.lower, np.nextafter(lower, np.float32(np.inf)), point)
        point = np.where(point > self.domain.upper, np.nextafter(upper, np.float32(-np.inf)), point)
        return self.row(point.astype(float), short[self.n :].astype(float))

    def _shaken(self, point: Array) -> Array:
        moved = point * (1 + 4 * SINGLE * self.rng.choice([-1.0, 1.0], (3, self.n)))
        return np.clip(moved, self.domain.lower, self.domain.upper)


def _gap(got: Array, due: Array, where: BoolArray) -> Array:
    """Distances; infinite where one is not finite, -1 outside `where`."""
    with np.errstate(invalid="ignore", over="ignore"):
        gap = np.abs(got - due)
    return np.where(where, np.where(np.isfinite(gap), gap, np.inf), -1.0)


def _differs(got: Array, due: Array, allowed: Array) -> BoolArray:
    """Where `got` is off by more than is allowed, or not finite where it should be; unknown `due` is never off."""
    with np.errstate(invalid="ignore"):
        return np.asarray(np.isfinite(due) & ~(np.abs(got - due) <= allowed))


def _is_single(values: Array) -> BoolArray:
    """Columns of which every entry is a number of single precision, and one at least is not zero."""
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        short = values.astype(np.float32).astype(float)
    return np.asarray((short == values).all(axis=0) & (values != 0).any(axis=0))


def _scaling(found: Array, sizes: Array) -> tuple[Scaling, float]:
    """What becomes of rows (k, columns), the first of size 1, when their cotangents have these sizes (0 last)."""
    first, others, factors = found[0], found[1:-1], sizes[1:-1, None]
    if not np.isfinite(found[:-1]).all():
        return Scaling.OTHER, 1.0
    near = PLAIN * np.maximum(np.abs(first), np.abs(others))
    if np.all(np.abs(others - factors * first) <= PLAIN * np.abs(factors * first)):
        return Scaling.LINEAR, 1.0
    if np.all(np.abs(others - first) <= near):
        return Scaling.CONSTANT, 0.0
    used = (first != 0) & (others != 0).all(axis=0)
    if not used.any():
        return Scaling.OTHER, 1.0
    powers = np.log(np.abs(others / first)[:, used]) / np.log(np.abs(factors))
    power = float(powers.mean())
    return (Scaling.POWER, round(power, 6)) if np.ptp(powers) <= 1e-3 else (Scaling.OTHER, 1.0)


def _expanded(rows: Array, n: int, parts: Sequence[slice]) -> Array:
    """One by one what a batch of these rows stands for under vmap, in the order of the way ``"vmap"``."""
    at_first = rows.copy()
    at_first[:, :n] = rows[0, :n]
    alone = []
    for part in parts:
        one = at_first.copy()
        one[:, part] = rows[:, part]
        alone.append(one)
    return np.concatenate([rows, at_first, *alone])


def _reply_of(found: Array | None, count: int, m: int, n: int) -> Reply:
    """Gradients as values along one direction."""
    if found is None:
        return Reply(
            values=np.full((1, count, n), np.nan), status=np.full((1, count), Status.CRASH, np.int8), spent=count
        )
    values = found[None, :, m:]
    finite = np.isfinite(values).all(axis=2)
    return Reply(values=values, status=np.where(finite, Status.OK, Status.NONFINITE).astype(np.int8), spent=count)


def _without_jit(way: str) -> str:
    return "jit" if way in ("jit reverse", "jit forward") else way.removeprefix("jit ").replace("vmap forward", "vmap")
