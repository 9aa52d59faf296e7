"""What a family of likely mistakes gets to see: a refuted claim beside the witness."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.report import Diagnosis


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Case:
    """A claim of which some entries are refuted; arrays have shape (m, n).

    Attributes
    ----------
    kind : str
        ``"gradient"`` or ``"jacobian"``.
    claim, value, bound : ndarray
    refuted : ndarray of bool
    name : callable
        Name of the entry (row, column).
    tolerance : ndarray
        What may separate a right claim from the truth.
    """

    kind: str
    claim: Array
    value: Array
    bound: Array
    tolerance: Array
    refuted: BoolArray
    name: Callable[[int, int], str]

    @property
    def slack(self) -> Array:
        """How far an explanation may be off an entry and still explain it."""
        return self.tolerance + 3 * self.bound

    def explains(self, explained: Array) -> BoolArray:
        """Refuted entries at which ``explained`` (what the claim would be) meets the claim."""
        with np.errstate(invalid="ignore"):
            meets: BoolArray = self.refuted & (np.abs(explained - self.claim) <= self.slack)
        return meets

    def names(self, where: BoolArray) -> tuple[str, ...]:
        """Names of the marked entries, in order."""
        return tuple(self.name(int(i), int(j)) for i, j in np.argwhere(where))


Family: TypeAlias = Callable[[Case], Diagnosis | None]
