"""What a family of likely mistakes gets to see: a refuted claim beside the witness."""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from gradcheck.records.arrays import Array, BoolArray, IntArray

#: How many bounds beyond the tolerance an explanation may be off, as many as the verdict rule gives a claim.
BOUNDS = 3.0
#: No entry counts for more bits than this, however exactly it is met: the last digits are not independent of rounding.
MOST_BITS = 30.0


@dataclass(frozen=True, slots=True)
class Block:
    """A part of the input with a name of its own: which columns of the claim it holds, and in which shape."""

    path: str
    start: int
    shape: tuple[int, ...]

    @property
    def columns(self) -> IntArray:
        return np.arange(self.start, self.start + int(np.prod(self.shape)))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Case:
    """A claim of which some entries are refuted; arrays have shape (m, n).

    Attributes
    ----------
    kind : str
        Such as ``"gradient"`` or ``"jacobian"``.
    claim, value, bound : ndarray
        Claim, and witness ± bound.
    refuted, confirmed : ndarray of bool
    rel_tol : float
        Relative difference that is none.
    floor : ndarray
        Absolute error that rounding may leave in a right claim.
    name : callable
        Name of the entry (row, column).
    x : ndarray, shape (n,)
        The variables of these columns; NaN where unknown.
    variable : callable
        Name of a column's variable.
    blocks : tuple of Block
        Parts of the input, if all their columns were looked at.
    whole : bool
        Whether these columns are all that the claim has: of a part, nothing can be said about all entries.
    outputs : tuple of int
        Shape of what the model returns.
    values : ndarray, shape (m,)
        What the model returns at the point; NaN where unknown.
    """

    kind: str
    claim: Array
    value: Array
    bound: Array
    refuted: BoolArray
    confirmed: BoolArray
    rel_tol: float
    floor: Array
    name: Callable[[int, int], str]
    x: Array
    variable: Callable[[int], str] = "x[{}]".format
    blocks: tuple[Block, ...] = ()
    whole: bool = True
    outputs: tuple[int, ...] = ()
    values: Array = field(default_factory=lambda: np.empty(0))

    @property
    def doubt(self) -> Array:
        """How far the witness itself may be off, and honest rounding with it."""
        return self.floor + BOUNDS * self.bound

    @property
    def slack(self) -> Array:
        """How far a right claim may be from the witness."""
        return self.margin(self.value, self.doubt)

    @property
    def silent(self) -> BoolArray:
        """Entries that speak neither for nor against a story about factors: zero, as claimed, or not judged."""
        zero = (self.claim == 0) & (np.abs(self.value) <= self.doubt)
        undecided = ~self.refuted & ~self.confirmed
        marks: BoolArray = ~self.refuted & (zero | undecided)
        return marks

    @property
    def all_wrong(self) -> bool:
        """Whether nothing in the whole claim is right but zeros."""
        return self.whole and bool((self.refuted | self.silent).all())

    def margin(self, predicted: Array, doubt: Array) -> Array:
        """How far a claim may be from what a story predicts."""
        return self.rel_tol * np.fmax(np.abs(self.claim), np.abs(predicted)) + doubt

    def met(self, predicted: Array, doubt: Array) -> BoolArray:
        """Entries, refuted or not, whose claim is what a story predicts."""
        with np.errstate(invalid="ignore", over="ignore"):
            marks: BoolArray = np.abs(self.claim - predicted) <= self.margin(predicted, doubt)
        return marks

    def bits(self, predicted: Array, doubt: Array) -> Array:
        """How surprising it is that the claim is met: by how much it is off, over how far it may be off the story."""
        with np.errstate(all="ignore"):
            ratio = np.abs(self.claim - self.value) / self.margin(predicted, doubt)
            found = np.log2(ratio)
        bits: Array = np.where(np.isnan(found), 0.0, found).clip(0.0, MOST_BITS)
        return bits

    def names(self, where: BoolArray) -> tuple[str, ...]:
        """Names of the marked entries, in order."""
        return tuple(self.name(int(i), int(j)) for i, j in np.argwhere(where))

    def ratios(self) -> Array:
        """Claim over witness; NaN or infinite where there is none."""
        with np.errstate(all="ignore"):
            return np.asarray(self.claim / self.value)
