"""The vectors that a claimed product is asked for: unit vectors where they are few, random ones of several sizes."""

from dataclasses import dataclass

import numpy as np

from gradcheck.claims.identities import probes
from gradcheck.claims.policy import Rules
from gradcheck.records.arrays import Array, IntArray

#: Unit vectors are tried where there are at most so many.
UNITS_MOST = 50
#: Random vectors beside unit vectors, and instead of them.
BESIDE, INSTEAD = 4, 8
#: Vectors of more entries than this are long: fewer of them are held at a time.
LONG, INSTEAD_IF_LONG = 20_000, 3
#: How much longer each random vector is than the last but three; none has the length of a unit vector.
LENGTHS = (1.0, 0.37, 7.3, 0.012)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Vectors:
    """Vectors of p entries: unit vectors first, then random ones, then those that identities are made of.

    Attributes
    ----------
    units : ndarray of int, shape (u,)
        Places of the ones.
    random : ndarray, shape (r, p)
        At least two.
    """

    units: IntArray
    random: Array

    @property
    def size(self) -> int:
        """Number of entries p of each vector."""
        return int(self.random.shape[1])

    @property
    def judged(self) -> int:
        """How many vectors are compared with a witness: all but those of the identities."""
        return self.units.size + len(self.random)

    def rows(self) -> Array:
        """All vectors, (u + r + 4, p)."""
        units = np.zeros((self.units.size, self.size))
        units[np.arange(self.units.size), self.units] = 1.0
        return np.concatenate([units, self.random, probes(self.random[0], self.random[1])])

    def labels(self, unit: tuple[str, ...], random: str) -> tuple[str, ...]:
        """A name for each judged vector; `unit` names the unit vectors."""
        return (*unit, *(f"{random} {i + 1}" for i in range(len(self.random))))


def vectors_of(sizes: Array, able: IntArray, rules: Rules, *, units_most: int = UNITS_MOST) -> Vectors:
    """Vectors for a product whose vectors have entries of these usual sizes.

    Parameters
    ----------
    sizes : ndarray, shape (p,)
        What a large step in each entry is, > 0.
    able : ndarray of int
        The entries that may differ from zero.
    rules : Rules
        Its `directions` and `seed`.
    units_most : int
        Number of unit vectors up to which they are all tried, unless `directions` says otherwise.
    """
    all_units = rules.directions == "all" or (rules.directions is None and able.size <= units_most)
    instead = few_if_long(INSTEAD, sizes.size)
    many = rules.directions if isinstance(rules.directions, int) else BESIDE if all_units else instead
    random = np.zeros((max(2, int(many)), sizes.size))
    random[:, able] = random_rows(len(random), sizes[able], rules.seed)
    return Vectors(units=able if all_units else np.zeros(0, np.intp), random=random)


def few_if_long(many: int, size: int) -> int:
    """How many vectors of so many entries are tried where `many` short ones would be."""
    return many if size <= LONG else min(many, INSTEAD_IF_LONG)


def random_rows(many: int, sizes: Array, seed: int) -> Array:
    """(many, p): random signs, magnitudes of half to all of `sizes` (p,), times a length that differs from row to row.

    Equal magnitudes would let two wrong entries cancel; see the report on directions.
    """
    rng = np.random.default_rng(seed)
    rows = rng.uniform(-0.5, 0.5, (many, sizes.size))
    rows += np.copysign(0.5, rows)
    rows *= sizes
    rows *= np.resize(LENGTHS, many)[:, None]
    return rows
