"""Claims with planted mistakes of many kinds, and honest ones, about the models of `planted_models`.

Written before the rules that name the mistakes. A mistake is planted as a callable that is wrong in the same way at
every point, as the code of a real derivative is; every other claim is handed over as the array it gives at the point.
A mistake is planted only where it can be seen: in an entry that, times the size of its variable, makes up at least
`GROSS` of what the function and its other variables amount to. What is wrong by less may be refuted or not.

The code of a planted mistake is what a person would call it who knows it. Where values cannot tell one mistake from
another (a factor of ten beside ten observations), the figure that falls short is told.
"""

import math
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from tests.quality.planted_models import MODELS, REGIMES, Model, Regimes

#: Least share of an entry in which a mistake of its own size is planted.
GROSS = 1e-6
#: Least share for an error in the eighth digit.
SLIGHT = 1e-3
#: Relative difference from which an error of single precision must be seen.
SINGLE = 2e-8
#: How far points lie from a model's own, in units of each variable.
SPREAD = 0.15

Flat = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Plan:
    """How a claim is wrong: what it gives at any x, and which mistake sits in which entries (shape of the claim)."""

    claimed: Flat
    parts: tuple[tuple[str, np.ndarray], ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Claim:
    """One claim about one model, at one point or at several.

    Attributes
    ----------
    name, kind : str
        Of the model, and of the mistake (or of the honesty).
    aside : bool
        Whether the model was kept aside.
    function : callable
        What the library gets as the model.
    form : str
        ``"gradient"`` or ``"jacobian"``.
    points : tuple of ndarray (n,)
    at : tuple
        The same as the model takes them.
    claim : callable or array
        What the library gets as the claim.
    right, claimed : tuple of ndarray
        Flat, at each point.
    share : tuple of ndarray
    parts : tuple of (code, tuple of ndarray of bool)
        Which mistake sits in which entries, at each point; empty for an honest claim.
    exact : bool
        Whether the entries that must be refuted are known; not where they depend on the order of the calls.
    """

    name: str
    kind: str
    aside: bool
    function: Callable[[Any], Any]
    form: str
    points: tuple[np.ndarray, ...]
    at: tuple[Any, ...]
    claim: Any
    right: tuple[np.ndarray, ...]
    claimed: tuple[np.ndarray, ...]
    share: tuple[np.ndarray, ...]
    parts: tuple[tuple[str, tuple[np.ndarray, ...]], ...] = ()
    exact: bool = True

    def wrong(self, k: int) -> np.ndarray:
        """Entries at point k that must be refuted."""
        error = np.abs(self.claimed[k] - self.right[k])
        with np.errstate(divide="ignore", invalid="ignore"):
            relative = error / np.abs(self.right[k])
        if self.kind.startswith("single precision"):
            return (relative > SINGLE) & (self.share[k] >= SLIGHT)
        return error * self._per_unit(k) > GROSS / 2

    def hidden(self, k: int) -> np.ndarray:
        """Entries at point k that are wrong by less than must be seen."""
        return (self.claimed[k] != self.right[k]) & ~self.wrong(k)

    def _per_unit(self, k: int) -> np.ndarray:
        """Share of an error of 1 in each entry."""
        return np.broadcast_to(sizes_of(self.points[k]) / _whole(self, k), self.right[k].shape)


def sizes_of(x: np.ndarray) -> np.ndarray:
    """Size of each variable: its own, or 1 where it is zero."""
    return np.where(x != 0, np.abs(x), 1.0)


def _whole(claim: Claim, k: int) -> Any:
    return _amounts(np.ravel(claim.function(claim.at[k])), claim.right[k], claim.points[k])


def _amounts(values: np.ndarray, right: np.ndarray, x: np.ndarray) -> Any:
    """What shares are taken of: a number for a gradient, (m, 1) for a Jacobian."""
    whole = np.maximum(np.abs(np.asarray(values, dtype=float)), (np.abs(right) * sizes_of(x)).max(axis=-1))
    whole = np.where(whole > 0, whole, 1.0)
    return whole[:, None] if right.ndim == 2 else whole


def _share(values: Any, right: np.ndarray, x: np.ndarray) -> np.ndarray:
    return np.abs(right) * sizes_of(x) / _amounts(np.ravel(values), right, x)


def random_of(*names: Any) -> np.random.Generator:
    """Numbers of their own for each name, whatever else is in the corpus."""
    return np.random.default_rng(zlib.crc32(" ".join(map(str, names)).encode()))


def points_of(model: Model, count: int, seed: int) -> Iterator[np.ndarray]:
    """Points around the model's own; never that one itself, whose numbers are short."""
    random = random_of(model.name, seed)
    for _ in range(count):
        yield model.x0 + SPREAD * sizes_of(model.x0) * random.uniform(-1.0, 1.0, model.x0.size)


# --- where a mistake sits --------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Site:
    """A model at a point, and the random numbers of one planting."""

    model: Model
    x: np.ndarray
    right: np.ndarray
    share: np.ndarray
    random: np.random.Generator

    def pick(self, choices: list[Any]) -> Any:
        return choices[self.random.integers(len(choices))]

    def visible(self) -> list[tuple[int, ...]]:
        return [tuple(map(int, place)) for place in np.argwhere(self.share >= GROSS)]

    def one(self) -> np.ndarray | None:
        """One visible entry, as a mask."""
        places = self.visible()
        return None if not places else self.mask(self.pick(places))

    def several(self, count: int) -> list[np.ndarray] | None:
        """Different visible entries."""
        places = self.visible()
        if len(places) < count:
            return None
        order = self.random.permutation(len(places))[:count]
        return [self.mask(places[i]) for i in order]

    def mask(self, place: Any) -> np.ndarray:
        marks = np.zeros(self.right.shape, bool)
        marks[place] = True
        return marks

    def everything(self) -> np.ndarray:
        return np.ones(self.right.shape, bool)

    def block(self) -> np.ndarray | None:
        """A leaf, a row, a column, or a run of entries: some but not all, two visible ones at least."""
        blocks = []
        m, n = np.atleast_2d(self.right).shape
        first = 0
        for _, shape in self.model.shapes:
            size = int(np.prod(shape))
            if len(self.model.shapes) > 1:
                blocks.append(self.mask((..., slice(first, first + size))))
            elif len(shape) == 2:
                leaf = np.arange(size).reshape(shape)
                blocks += [self.mask((..., leaf[int(self.random.integers(shape[0]))]))]
                blocks += [self.mask((..., leaf[:, int(self.random.integers(shape[1]))]))]
            first += size
        if self.right.ndim == 2:
            blocks += [self.mask(int(self.random.integers(m))), self.mask((..., int(self.random.integers(n))))]
        elif n >= 5:
            start = int(self.random.integers(n - 3))
            blocks.append(self.mask(slice(start, start + 3)))
        able = [b for b in blocks if (b & (self.share >= GROSS)).sum() >= 2 and not b.all()]
        return self.pick(able) if able else None


def _times(site: Site, mask: np.ndarray, factor: Any) -> Flat:
    """The right derivative, times a factor where marked; the factor may depend on x (n,)."""

    def claimed(x: np.ndarray) -> np.ndarray:
        right = site.model.derivative(x)
        with np.errstate(all="ignore"):
            by = factor(x) if callable(factor) else factor
        return np.where(mask, right * by, right)

    return claimed


def _plan(claimed: Flat, code: str, mask: np.ndarray) -> Plan:
    return Plan(claimed=claimed, parts=((code, mask),))


def _factor(where: str, factors: Callable[[Site], list[float]], code: str) -> Callable[[Site], Plan | None]:
    """A constant factor in one entry, in a block, or everywhere."""

    def plant(site: Site) -> Plan | None:
        mask = {"one": site.one, "block": site.block, "all": site.everything}[where]()
        choices = factors(site)
        if mask is None or not choices or (where == "all" and len(site.visible()) < 2):
            return None
        return _plan(_times(site, mask, site.pick(choices)), code, mask)

    return plant


def _zeros(where: str) -> Callable[[Site], Plan | None]:
    def plant(site: Site) -> Plan | None:
        mask = site.one() if where == "one" else site.block()
        return None if mask is None else _plan(_times(site, mask, 0.0), "zero-entry", mask)

    return plant


# --- entries in the wrong place --------------------------------------------------------------------------------------


def _moved(site: Site, order: np.ndarray, code: str, *, empty: int | None = None) -> Plan | None:
    """Columns of the claim in another order; one may be left empty."""
    mask = np.zeros(site.right.shape, bool)
    mask[..., order != np.arange(order.size)] = True

    def claimed(x: np.ndarray) -> np.ndarray:
        found = site.model.derivative(x)[..., order]
        if empty is not None:
            found[..., empty] = 0.0
        return found

    if empty is not None:
        mask[..., empty] = True
    gap = np.abs(claimed(site.x) - site.right)
    # What looks the same in another order is no mistake that values can show.
    differs = gap > 0.01 * np.abs(site.right)
    return _plan(claimed, code, mask) if (differs & mask).sum() >= 2 else None


def swapped(site: Site) -> Plan | None:
    n = site.right.shape[-1]
    i, j = site.random.permutation(n)[:2]
    order = np.arange(n)
    order[[i, j]] = order[[j, i]]
    rows = np.atleast_2d(site.share)
    if (rows[:, [i, j]] < GROSS).any(axis=1).all():
        return None
    a, b = np.atleast_2d(site.right)[:, i], np.atleast_2d(site.right)[:, j]
    # Two values that are opposites are no different from two flipped signs.
    if np.all(np.abs(np.abs(a) - np.abs(b)) <= 0.01 * np.abs(a)):
        return None
    return _moved(site, order, "swapped-entries")


def shifted(site: Site) -> Plan | None:
    n = site.right.shape[-1]
    return _moved(site, np.roll(np.arange(n), site.pick([1, -1])), "shifted-entries") if n >= 3 else None


def shifted_with_an_end(site: Site) -> Plan | None:
    n = site.right.shape[-1]
    step = site.pick([1, -1])
    empty = 0 if step == 1 else n - 1
    return _moved(site, np.roll(np.arange(n), step), "shifted-entries", empty=empty) if n >= 4 else None


def shifted_block(site: Site) -> Plan | None:
    """A run of four or more entries moved on by one within itself."""
    n = site.right.shape[-1]
    if n < 8:
        return None
    size = int(site.random.integers(4, n - 2))
    start = int(site.random.integers(n - size))
    order = np.arange(n)
    order[start : start + size] = np.roll(order[start : start + size], 1)
    return _moved(site, order, "shifted-entries")


def transposed(site: Site) -> Plan | None:
    right = site.right
    if right.ndim != 2 or right.shape[0] != right.shape[1] or np.allclose(right, right.T, rtol=1e-3):
        return None
    return _plan(lambda x: site.model.derivative(x).T, "transposed", ~np.eye(len(right), dtype=bool))


def transposed_block(site: Site) -> Plan | None:
    """A square block on the diagonal of a Jacobian, or at another place of it."""
    if site.right.ndim != 2 or min(site.right.shape) < 3:
        return None
    m, n = site.right.shape
    size = int(site.random.integers(3, max(4, min(m, n))))
    i, j = int(site.random.integers(m - size + 1)), int(site.random.integers(n - size + 1))
    part = (slice(i, i + size), slice(j, j + size))
    if size == min(m, n) == max(m, n) or np.allclose(site.right[part], site.right[part].T, rtol=1e-3):
        return None
    mask = np.zeros(site.right.shape, bool)
    mask[part] = ~np.eye(size, dtype=bool)

    def claimed(x: np.ndarray) -> np.ndarray:
        found = site.model.derivative(x).copy()
        found[part] = found[part].T.copy()
        return found

    return _plan(claimed, "transposed", mask)


def reordered(site: Site) -> Plan | None:
    """A matrix-shaped parameter laid out the other way."""
    first, order = 0, np.arange(site.right.shape[-1])
    able = []
    for _, shape in site.model.shapes:
        size = int(np.prod(shape))
        if len(shape) == 2:
            able.append((first, size, shape))
        first += size
    if not able:
        return None
    first, size, shape = site.pick(able)
    there = np.arange(size).reshape(shape).T.ravel() if site.random.random() < 0.5 else None
    back = np.arange(size).reshape(shape[::-1]).T.ravel()
    order[first : first + size] = first + (back if there is None else there)
    return _moved(site, order, "reordered")


def reordered_outputs(site: Site) -> Plan | None:
    if len(site.model.output) != 2:
        return None
    order = np.arange(site.right.shape[0]).reshape(site.model.output).T.ravel()
    mask = np.zeros(site.right.shape, bool)
    mask[order != np.arange(order.size)] = True
    return _plan(lambda x: site.model.derivative(x)[order], "reordered", mask)


# --- factors that mean something -------------------------------------------------------------------------------------

NAMED = [2.0, 0.5, 3.0, 0.25, 4.0, -2.0, math.log(10.0), math.pi]
ODD = [1.7, 0.83, 2.0, 0.5, -1.3]
ANGLES = [math.pi / 180.0, 180.0 / math.pi]
UNITS = [1e3, 1e-3, 60.0, 1 / 60.0, 3600.0, 0.3048, 1 / 0.3048, 0.0254, 4.1868, 1e5, 1e-6, 9.80665, 1 / 9.80665]
UNITS += [101325.0, 6894.757293168, 0.45359237, 1.8, 745.6998715822702]


def _observations(site: Site) -> list[float]:
    n = site.model.observations
    return [float(n), 1.0 / n] if n else []


def degrees(site: Site) -> Plan | None:
    """All entries of angles, or one of them."""
    if not site.model.angles:
        return None
    which = list(site.model.angles) if site.random.random() < 0.5 else [site.pick(list(site.model.angles))]
    mask = site.mask((..., which))
    return _plan(_times(site, mask, site.pick(ANGLES)), "degrees-for-radians", mask)


def degrees_in_one_term(site: Site) -> Plan | None:
    """Only one of several terms by the angles is off by the factor."""
    model = site.model
    if not model.angles or len(model.terms) < 2:
        return None
    term, factor = int(site.random.integers(len(model.terms))), site.pick(ANGLES)
    mask = site.mask((..., list(model.angles)))

    def claimed(x: np.ndarray) -> np.ndarray:
        right = model.derivative(x)
        of_term = right - model.derivative(x, without=term)
        return np.where(mask, right + (factor - 1.0) * of_term, right)

    return _plan(claimed, "degrees-for-radians", mask)


def _logistic(x: np.ndarray) -> np.ndarray:
    return 1.0 / (1.0 + np.exp(-x))


#: What the claim is times the derivative where a transform of the variable was forgotten, and where that can be.
CHAINS: dict[str, tuple[Flat, Callable[[np.ndarray], np.ndarray]]] = {
    "x": (lambda x: x, lambda x: x != 0),
    "1/x": (lambda x: 1.0 / x, lambda x: x != 0),
    "exp(x)": (np.exp, lambda x: np.abs(x) < 5),
    "exp(-x)": (lambda x: np.exp(-x), lambda x: np.abs(x) < 5),
    "x(1-x)": (lambda x: x * (1.0 - x), lambda x: (x > 0) & (x < 1)),
    "1/(x(1-x))": (lambda x: 1.0 / (x * (1.0 - x)), lambda x: (x > 0) & (x < 1)),
    "s(1-s)": (lambda x: _logistic(x) * (1.0 - _logistic(x)), lambda x: np.abs(x) < 5),
    "2x": (lambda x: 2.0 * x, lambda x: x != 0),
    "1/(2x)": (lambda x: 0.5 / x, lambda x: x != 0),
    "2 sqrt(x)": (lambda x: 2.0 * np.sqrt(np.abs(x)), lambda x: x > 0),
}


def _chain(where: str) -> Callable[[Site], Plan | None]:
    def plant(site: Site) -> Plan | None:
        factor, able = CHAINS[site.pick(list(CHAINS))]
        n = site.x.size
        with np.errstate(all="ignore"):
            # A ratio next to 1, 2 or the like is no chain rule that values could show.
            shows = able(site.x) & (np.abs(factor(site.x) - 1.0) > 1e-3)
        shows &= (np.atleast_2d(site.share) >= GROSS).any(axis=0)
        able_columns = np.flatnonzero(shows)
        if where == "all":
            columns = np.arange(n) if shows.all() and n >= 2 else np.empty(0, int)
        elif where == "some":
            columns = site.random.permutation(able_columns)[: max(2, n // 3)] if able_columns.size >= 3 else []
        else:
            columns = site.random.permutation(able_columns)[:1]
        if not len(columns):
            return None
        mask = site.mask((..., np.sort(columns)))
        return _plan(_times(site, mask, factor), "missing-chain-rule", mask)

    return plant


# --- terms, arithmetic, formulas -------------------------------------------------------------------------------------


def missing_term(site: Site) -> Plan | None:
    """One of the terms of the model is not in the claim at all."""
    if len(site.model.terms) < 2:
        return None
    term = int(site.random.integers(len(site.model.terms)))
    missing = site.right - site.model.derivative(site.x, without=term)
    mask = missing != 0
    if not mask.any():
        return None
    return Plan(claimed=lambda x: site.model.derivative(x, without=term), parts=_lacking(site, mask, missing))


def _lacking(site: Site, mask: np.ndarray, missing: np.ndarray) -> tuple[tuple[str, np.ndarray], ...]:
    """Entries that a missing term leaves at zero were never filled in; the others lack a contribution."""
    zero = mask & (site.right - missing == 0)
    parts = (("zero-entry", zero), ("missing-path", mask & ~zero))
    return tuple((code, part) for code, part in parts if part.any())


def missing_path(site: Site) -> Plan | None:
    """One of the terms is missing in a block of the claim: a way from these variables to the value was overlooked."""
    block = site.block()
    if len(site.model.terms) < 2 or block is None:
        return None
    term = int(site.random.integers(len(site.model.terms)))
    missing = site.right - site.model.derivative(site.x, without=term)
    mask = block & (missing != 0)
    if (np.abs(missing) > 1e-3 * np.abs(site.right))[mask].sum() < 2 or mask.sum() < 2:
        return None
    # A term that is all there is leaves zeros, which is another mistake.
    if np.all((site.right - missing)[mask] == 0):
        return None
    return Plan(
        claimed=lambda x: np.where(mask, site.model.derivative(x, without=term), site.model.derivative(x)),
        parts=_lacking(site, mask, missing),
    )


def rounded_to_single(site: Site) -> Plan | None:
    return _plan(
        lambda x: site.model.derivative(x).astype(np.float32).astype(float), "single-precision", site.everything()
    )


def computed_in_single(site: Site) -> Plan | None:
    """Errors of a few units in the last place of single precision, others at other points."""
    if site.right.size < 3:
        return None

    def claimed(x: np.ndarray) -> np.ndarray:
        right = site.model.derivative(x)
        slips = random_of("single", x.tobytes().hex()).uniform(-2.0, 2.0, right.shape)
        return (right * (1.0 + slips * np.finfo(np.float32).eps)).astype(np.float32).astype(float)

    return _plan(claimed, "single-precision", site.everything())


def wrong_formula(site: Site) -> Plan | None:
    """One or two entries by another formula: no story fits, and `unknown` is the honest one."""
    marks = site.several(int(site.random.integers(1, 3)))
    if marks is None:
        return None
    offs = [float(v) for v in site.random.uniform(0.2, 0.9, len(marks))]

    def claimed(x: np.ndarray) -> np.ndarray:
        right = site.model.derivative(x)
        found = right.copy()
        for mark, off in zip(marks, offs, strict=True):
            found[mark] = right[mark] * (1.0 + off * np.cos(3.0 * np.sum(x) + 7.0 * off)) + off * np.abs(right[mark])
        return found

    return _plan(claimed, "unknown", np.any(marks, axis=0))


def a_few_thousandths(site: Site) -> Plan | None:
    """Three thousandths too much in one entry."""
    places = [tuple(map(int, p)) for p in np.argwhere(site.share >= SLIGHT)]
    if not places:
        return None
    mask = site.mask(site.pick(places))
    return _plan(_times(site, mask, 1.0 + 3e-3), "unknown", mask)


def several_at_once(site: Site) -> Plan | None:
    """Two or three mistakes in different entries."""
    marks = site.several(int(site.random.integers(2, 4)))
    if marks is None:
        return None
    kinds = [
        ("sign-flipped", -1.0),
        ("zero-entry", 0.0),
        ("constant-factor", 2.0),
        ("unit-factor", 1e3),
        ("degrees-for-radians", math.pi / 180.0),
        ("constant-factor", 0.5),
    ]
    order = site.random.permutation(len(kinds))[: len(marks)]
    factor = np.ones(site.right.shape)
    parts: dict[str, np.ndarray] = {}
    for mark, k in zip(marks, order, strict=True):
        code, by = kinds[k]
        factor[mark] = by
        parts[code] = parts.get(code, np.zeros(site.right.shape, bool)) | mark
    return Plan(claimed=lambda x: site.model.derivative(x) * factor, parts=tuple(parts.items()))


MISTAKES: dict[str, Callable[[Site], Plan | None]] = {
    "sign, one entry": _factor("one", lambda _: [-1.0], "sign-flipped"),
    "sign, a block": _factor("block", lambda _: [-1.0], "sign-flipped"),
    "sign, all": _factor("all", lambda _: [-1.0], "sign-flipped"),
    "factor, one entry": _factor("one", lambda _: NAMED, "constant-factor"),
    "factor, a block": _factor("block", lambda _: ODD, "constant-factor"),
    "factor, all": _factor("all", lambda _: ODD, "constant-factor"),
    "zero, one entry": _zeros("one"),
    "zero, a block": _zeros("block"),
    "swapped": swapped,
    "shifted round": shifted,
    "shifted, end zero": shifted_with_an_end,
    "shifted block": shifted_block,
    "transposed": transposed,
    "transposed block": transposed_block,
    "reordered": reordered,
    "reordered outputs": reordered_outputs,
    "degrees": degrees,
    "degrees, one entry": _factor("one", lambda _: ANGLES, "degrees-for-radians"),
    "degrees, one term": degrees_in_one_term,
    "unit, one entry": _factor("one", lambda _: UNITS, "unit-factor"),
    "unit, all": _factor("all", lambda _: UNITS, "unit-factor"),
    "mean for sum": _factor("all", _observations, "mean-for-sum"),
    "chain rule, one": _chain("one"),
    "chain rule, some": _chain("some"),
    "chain rule, all": _chain("all"),
    "missing term": missing_term,
    "missing path": missing_path,
    "single precision, rounded": rounded_to_single,
    "single precision, computed": computed_in_single,
    "several at once": several_at_once,
    "wrong formula": wrong_formula,
    "a few thousandths": a_few_thousandths,
}


def planted(points: int, seed: int = 0, *, most: int = 60, kinds: Any = None) -> list[Claim]:
    """Each model with each mistake that can be planted in it, at each point; then what needs more points or calls."""
    claims = []
    for model in MODELS:
        if model.x0.size > most:
            continue
        for place, x in enumerate(points_of(model, points, seed)):
            right = model.derivative(x)
            share = _share(model.value(x), right, x)
            for kind, plant in MISTAKES.items():
                if kinds is not None and kind not in kinds:
                    continue
                plan = plant(Site(model, x, right, share, random_of(model.name, kind, place, seed)))
                if plan is not None:
                    claims.append(_planted(model, kind, x, plan, share, as_array=place % 2 == 1))
    extra = [*stale_claims(points, seed, most=most), *region_claims(points, seed), *unrepeatable_claims(points, seed)]
    return [
        claim
        for claim in claims + [c for c in extra if kinds is None or c.kind in kinds]
        if not claim.exact or any(claim.wrong(k).any() for k in range(len(claim.points)))
    ]


def _planted(model: Model, kind: str, x: np.ndarray, plan: Plan, share: np.ndarray, *, as_array: bool) -> Claim:
    claimed = plan.claimed(x)
    return Claim(
        name=model.name,
        kind=kind,
        aside=model.aside,
        function=model,
        form=model.kind,
        points=(x,),
        at=(model.pack(x),),
        claim=_shaped(model, claimed) if as_array else lambda packed: _shaped(model, plan.claimed(model.flat(packed))),
        right=(model.derivative(x),),
        claimed=(claimed,),
        share=(share,),
        parts=tuple((code, (mask,)) for code, mask in plan.parts),
    )


def _shaped(model: Model, claimed: np.ndarray) -> Any:
    return model.pack(claimed) if model.kind == "gradient" else claimed


# --- more points, more calls -----------------------------------------------------------------------------------------


def stale_claims(points: int, seed: int, *, most: int = 60) -> list[Claim]:
    """The gradient of an earlier point: looked up one place too early, one call behind, or of whatever x the model saw
    last.
    """
    claims = []
    for model in MODELS:
        if model.x0.size > most:
            continue
        for turn in range(max(1, points // 3)):
            xs = tuple(points_of(model, 3, seed + 1000 + turn))
            right = tuple(model.derivative(x) for x in xs)
            late = (right[0], *right[:-1])
            common = {
                "name": model.name,
                "aside": model.aside,
                "form": model.kind,
                "right": right,
                "share": tuple(_share(model.value(x), r, x) for x, r in zip(xs, right, strict=True)),
                "points": xs,
                "at": tuple(model.pack(x) for x in xs),
                "claimed": late,
                "parts": (("stale-point", tuple(np.full(r.shape, k > 0) for k, r in enumerate(right))),),
            }
            table = {x.tobytes(): values for x, values in zip(xs, late, strict=True)}
            claims.append(
                Claim(
                    kind="stale, earlier point",
                    function=model,
                    claim=lambda packed, model=model, table=table: _shaped(model, table[model.flat(packed).tobytes()]),
                    **common,
                )
            )
            claims.append(Claim(kind="stale, one call behind", function=model, claim=_Behind(model), **common))
            workspace = _Workspace(model)
            first = {key: value[:1] for key, value in common.items() if key in ("right", "share", "points", "at")}
            claims.append(
                Claim(
                    kind="stale, last evaluated",
                    function=workspace,
                    claim=workspace.claim,
                    exact=False,
                    **(common | first | {"claimed": right[:1], "parts": (("stale-point", (np.ones(1, bool),)),)}),
                )
            )
    return claims


class _Behind:
    """A claim that returns what it worked out in the call before."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.last: np.ndarray | None = None

    def __call__(self, packed: Any) -> Any:
        mine = self.model.derivative(self.model.flat(packed))
        answer, self.last = (mine if self.last is None else self.last), mine
        return _shaped(self.model, answer)


class _Workspace:
    """A model that leaves its state for the derivative, which then does not look at its own x."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.__name__ = "workspace"
        self.state = model.x0

    def __call__(self, packed: Any) -> Any:
        x = self.model.flat(packed)
        self.state = np.real(x).astype(float)
        return self.model.value(x)

    def claim(self, packed: Any) -> Any:
        return _shaped(self.model, self.model.derivative(self.state))


def region_claims(points: int, seed: int) -> list[Claim]:
    """Right in one regime, and there the formula of the one regime used in the other."""
    claims = []
    for regimes in REGIMES:
        for turn in range(max(2, points)):
            random = random_of(regimes.name, seed, turn)
            xs = tuple(_regime_points(regimes, random))
            formula = regimes.below if turn % 2 else regimes.above
            right = tuple(regimes.derivative(x) for x in xs)
            claimed = tuple(_gradient_of(formula, x) for x in xs)
            claims.append(
                Claim(
                    name=regimes.name,
                    kind="region only",
                    aside=regimes.aside,
                    function=regimes,
                    form="gradient",
                    points=xs,
                    at=xs,
                    claim=lambda x, formula=formula: _gradient_of(formula, x),
                    right=right,
                    claimed=claimed,
                    share=tuple(_share(regimes(x), r, x) for x, r in zip(xs, right, strict=True)),
                    parts=(("region-only", tuple(c != r for c, r in zip(claimed, right, strict=True))),),
                )
            )
    return claims


def _gradient_of(formula: Callable[[Any], Any], x: np.ndarray) -> np.ndarray:
    return np.array([np.imag(formula(x + 1e-40j * row)) / 1e-40 for row in np.eye(x.size)])


def _regime_points(regimes: Regimes, random: np.random.Generator) -> Iterator[np.ndarray]:
    """Three points in each regime, none next to the threshold."""
    for sign in (-1, 1, 1, -1, -1, 1):
        x = regimes.x0 * (1.0 + 0.1 * random.uniform(-1.0, 1.0, regimes.x0.size))
        x[regimes.variable] = regimes.threshold + sign * regimes.width * random.uniform(0.25, 1.0)
        yield x


def unrepeatable_claims(points: int, seed: int) -> list[Claim]:
    """A claim with unseeded random numbers in it: another one at each call."""
    claims = []
    for model in MODELS[::4]:
        for x in points_of(model, max(1, points // 3), seed + 2000):
            random = random_of(model.name, seed, "unrepeatable")
            right = model.derivative(x)

            def claim(packed: Any, model: Model = model, random: np.random.Generator = random) -> Any:
                found = model.derivative(model.flat(packed))
                return _shaped(model, found * (1.0 + 1e-2 * random.standard_normal(found.shape)))

            claims.append(
                Claim(
                    name=model.name,
                    kind="unrepeatable claim",
                    aside=model.aside,
                    function=model,
                    form=model.kind,
                    points=(x,),
                    at=(model.pack(x),),
                    claim=claim,
                    right=(right,),
                    claimed=(right,),
                    share=(_share(model.value(x), right, x),),
                    parts=(("unknown", (np.ones(1, bool),)),),
                    exact=False,
                )
            )
    return claims


# --- honest claims ---------------------------------------------------------------------------------------------------

NOISES = (1e-12, 1e-9, 1e-6)


def honest(points: int, seed: int = 0, *, most: int = 60) -> list[Claim]:
    """Right claims that must not be accused: plain, about noisy models, at a kink, at an optimum, with a memory."""
    claims = []
    for model in MODELS:
        if model.x0.size > most:
            continue
        for place, x in enumerate(points_of(model, points, seed + 77)):
            random = random_of(model.name, "honest", place, seed)
            right = model.derivative(x)
            claims.append(_honest("right", model, model, x, right, lambda p, m=model: m.derivative(m.flat(p))))
            claims.append(_honest("remembers by x", model, model, x, right, _Memory(model)))
            claims += [_honest(f"noise of {noise:g}", model, _noisy(model, noise), x, right, None) for noise in NOISES]
            if model.kind == "gradient":
                claims.append(_at_a_kink(model, x, right, random))
                claims.append(_at_an_optimum(model, x, right))
    return claims


def _honest(kind: str, model: Model, function: Any, x: np.ndarray, right: np.ndarray, claim: Any) -> Claim:
    return Claim(
        name=model.name,
        kind=kind,
        aside=model.aside,
        function=function,
        form=model.kind,
        points=(x,),
        at=(model.pack(x),),
        claim=_shaped(model, right) if claim is None else lambda packed: _shaped(model, claim(packed)),
        right=(right,),
        claimed=(right,),
        share=(_share(model.value(x), right, x),),
    )


class _Memory:
    """A claim that keeps what it worked out, by x."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.kept: dict[bytes, np.ndarray] = {}

    def __call__(self, packed: Any) -> np.ndarray:
        x = self.model.flat(packed)
        key = x.tobytes()
        if key not in self.kept:
            self.kept[key] = self.model.derivative(x)
        return self.kept[key]


def _noisy(model: Model, size: float) -> Callable[[Any], Any]:
    """Relative noise that is the same at the same x."""

    def noisy(packed: Any) -> Any:
        x = model.flat(packed)
        value = model.value(x)
        draw = random_of("noise", np.ascontiguousarray(x).tobytes().hex()).standard_normal(np.shape(value))
        return value * (1.0 + size * draw)

    return noisy


def _at_a_kink(model: Model, x: np.ndarray, right: np.ndarray, random: np.random.Generator) -> Claim:
    """|x[i] − c| at c, of a tenth of the function's pull; the claim is one of the slopes between."""
    place = int(random.integers(x.size))
    pull = max(abs(float(right[place])), 0.1 * float(np.abs(right * sizes_of(x)).max()) / sizes_of(x)[place])
    claimed = right.copy()
    claimed[place] += pull * random.uniform(-0.9, 0.9)

    def function(packed: Any) -> Any:
        y = model.flat(packed)
        return model.value(y) + pull * np.abs(y[place] - x[place])

    return _honest("at a kink", model, function, x, claimed, None)


def _at_an_optimum(model: Model, x: np.ndarray, right: np.ndarray) -> Claim:
    """The model less its tangent, so that the point is stationary."""

    def function(packed: Any) -> Any:
        y = model.flat(packed)
        return model.value(y) - right @ (y - x)

    return _honest("at an optimum", model, function, x, np.zeros(x.size), None)
