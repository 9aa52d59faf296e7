"""Claimed second derivatives: what the claim gave, and the names and places of its entries."""

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from gradcheck.checks.along import places
from gradcheck.checks.measure import Measure
from gradcheck.checks.parts import entries_from, joined
from gradcheck.checks.products_claimed import Claimed
from gradcheck.claims.desk import Examined
from gradcheck.claims.policy import Rules
from gradcheck.evaluation.pipeline import Session
from gradcheck.problem.layout import Layout
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.report import DirectionChecks, Entries

Names = NDArray[np.object_]


def _no_names() -> Names:
    return np.empty((0, 0), dtype=object)


@dataclass(frozen=True, slots=True, kw_only=True)
class WrongRows:
    """Which entries of products with random vectors are wrong: those are rows of the Hessian.

    Attributes
    ----------
    many, of : int
        How many of how many.
    vectors : int
        Vectors that show it.
    ratio : float
        Claim over witness where that is one number for all of them; else NaN.
    names : tuple of str
        The first of them.
    """

    many: int
    of: int
    vectors: int
    ratio: float
    names: tuple[str, ...]


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
        Columns (r, k) that were looked at because random directions had shown wrong rows; `names` are theirs.
    few : bool
        Whether these are the columns of all wrong rows, and not examples.
    wrong : WrongRows or None
        What the products with random vectors show, where those are many entries and refuted.
    directions : DirectionChecks or None
        The products with random vectors, one by one, where they are many entries.
    notices : tuple of str
    """

    entries: Entries
    matrix: Examined | None = None
    rest: Examined | None = None
    names: Names = field(default_factory=_no_names)
    rest_names: Names = field(default_factory=_no_names)
    narrowed: Examined | None = None
    few: bool = True
    wrong: WrongRows | None = None
    directions: DirectionChecks | None = None
    notices: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True, eq=False)
class Curvatures:
    """A claimed Hessian, or claimed products with it.

    Attributes
    ----------
    centre : ndarray, shape (m,)
        Values of the function at the point.
    able : ndarray of int
        The variables that have derivatives.
    claimed : Claimed
        Products (m·n,) of the Hessians with vectors, output by output.
    """

    session: Session
    function: str
    kind: str
    centre: Array
    able: IntArray
    rules: Rules
    claimed: Claimed
    measure: Measure

    @property
    def layout(self) -> Layout:
        return self.session.subject.layout

    @property
    def outputs(self) -> int:
        return int(self.centre.size)

    @cached_property
    def places(self) -> IntArray:
        """Entries of a product that are judged: whole-number variables have no derivative."""
        return np.concatenate([output * self.layout.size + self.able for output in range(self.outputs)])

    def row_names(self) -> list[str]:
        """Names of the judged entries of a product."""
        names = [self.layout.name(int(i)) for i in self.able]
        if self.outputs == 1:
            return names
        return [f"{self.function}[{output}]: {name}" for output in range(self.outputs) for name in names]

    def row_name(self, place: int) -> str:
        """Name of one of the judged entries of a product."""
        output, variable = divmod(int(self.places[place]), self.layout.size)
        name = self.layout.name(variable)
        return name if self.outputs == 1 else f"{self.function}[{output}]: {name}"

    def name(self, row: str, label: str, *, unit: bool) -> str:
        """Name of an entry of the product with the vector of this label."""
        if self.kind == "hvp" or not unit:
            return f"{row} along {label}"
        return row if self.layout.size == 1 and self.outputs == 1 else f"({row}, {label})"

    def visible(self, examined: Examined, reach: Array, allowed: Array | float = 0.0) -> Array:
        """By how much a single entry of the Hessian must be off to be refuted in each examined place.

        `reach` is what such an error counts there at the least, `allowed` what sums of many terms may be off.
        """
        with np.errstate(invalid="ignore"):
            off = self.measure.abs_tol + self.measure.rel_tol * np.abs(examined.claim) + 4 * examined.bound + allowed
            return np.asarray(off / reach)

    def seen(self, parts: list[Examined]) -> Seen:
        """All parts side by side: the unit vectors where there are any, then the random ones."""
        vectors, examined = self.claimed.vectors, joined(parts)
        units = vectors.units.size
        labels = vectors.labels(tuple(self.layout.name(int(i)) for i in vectors.units), "random v")
        used = labels[: examined.claim.shape[1]]
        names = np.array(
            [[self.name(row, label, unit=k < units) for k, label in enumerate(used)] for row in self.row_names()],
            dtype=object,
        )
        numbers = np.concatenate([vectors.units, self.layout.size + np.arange(len(used) - units)])
        return Seen(
            entries=entries_from(examined, places(self.places, numbers), names.ravel().tolist()),
            matrix=parts[0] if units else None,
            rest=parts[-1] if len(used) > units else None,
            names=names[:, :units],
            rest_names=names[:, units:],
        )
