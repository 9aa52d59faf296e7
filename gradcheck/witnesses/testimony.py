"""What one witness says: the derivatives along some directions, each value ± bound."""

from dataclasses import dataclass, field
from typing import ClassVar

import numpy as np

from gradcheck.records.arrays import Array, BoolArray, frozen


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Testimony:
    """Derivatives of m outputs along d directions.

    Attributes
    ----------
    value, bound : ndarray, shape (d, m)
        ``|value - truth| <= bound`` is believed always to hold. Where nothing can be said the bound is infinite (and
        the value NaN or the best guess).
    step : ndarray, shape (d, m)
        Half-width of the interval that decided, in units of the direction; NaN for witnesses without one.
    left, right : ndarray, shape (d, m)
        One-sided slopes where they part beyond noise (a kink at the point); NaN elsewhere.
    noise : ndarray, shape (m,)
        Noise level of each output that the bounds rest on; NaN where the witness needs none.
    noise_along : ndarray, shape (d, m)
        The same for each direction on its own, where it was measured; NaN elsewhere.
    doubtful : ndarray of bool, shape (d, m)
        Where the values carry, or may carry, more noise than `noise` tells: on a wider scale, or of another nature.
    spent : int
        Evaluations (or AD passes).
    source : str
        ``"finite difference"``, ``"complex step"``, ``"jax"``, ``"autograd"``.
    works : bool
        False if this witness cannot speak about this model at all; `reason` then says why.
    reason : str
        Restriction or cause of failure of the whole witness.
    reasons : dict of (row, output) -> str
        Why single bounds are infinite or wide.
    """

    __test__: ClassVar[bool] = False  # pytest would take a class of this name for a collection of tests

    value: Array
    bound: Array
    source: str
    step: Array = field(default_factory=lambda: np.empty(0))
    left: Array = field(default_factory=lambda: np.empty(0))
    right: Array = field(default_factory=lambda: np.empty(0))
    noise: Array = field(default_factory=lambda: np.empty(0))
    noise_along: Array = field(default_factory=lambda: np.empty(0))
    doubtful: BoolArray = field(default_factory=lambda: np.zeros(0, bool))
    spent: int = 0
    works: bool = True
    reason: str = ""
    reasons: dict[tuple[int, int], str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        shape = np.shape(self.value)
        for name in ("value", "bound"):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        # What was not given is one array for all fields: it cannot be written to, and most witnesses give few.
        unknown = frozen(np.full(shape, np.nan))
        for name in ("step", "left", "right", "noise_along"):
            given = getattr(self, name)
            object.__setattr__(self, name, frozen(given) if np.size(given) else unknown)
        doubtful = self.doubtful if np.size(self.doubtful) else np.zeros(shape, bool)
        object.__setattr__(self, "doubtful", frozen(doubtful, dtype=bool))
        noise = self.noise if np.size(self.noise) else np.full(shape[-1:], np.nan)
        object.__setattr__(self, "noise", frozen(noise))

    @staticmethod
    def silent(source: str, directions: int, outputs: int, reason: str, spent: int = 0) -> "Testimony":
        """The testimony of a witness that cannot speak about this model."""
        return Testimony(
            value=np.full((directions, outputs), np.nan),
            bound=np.full((directions, outputs), np.inf),
            source=source,
            works=False,
            reason=reason,
            spent=spent,
        )
