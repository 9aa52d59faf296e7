"""What was heard of the noise of m outputs along d directions."""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, frozen
from gradcheck.records.noise import NoiseKind


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseReading:
    """Level and kind of the noise.

    Attributes
    ----------
    level : ndarray, shape (d, m)
        Standard deviation of one value's error, in units of the output; NaN where nothing could be measured.
    kind : tuple of tuple of NoiseKind
        Row by row.
    width : ndarray, shape (d, m)
        Half-width, in units of the direction, of the interval on which it was heard: noise depends on the scale.
    apart : ndarray, shape (m,)
        Largest difference between two values at the same point; 0 if all agree, NaN if none was repeated.
    quantum : ndarray, shape (d, m)
        Step of the decimal lattice on which the values lie; 0 if there is none.
    spent : int
        Evaluations.
    """

    level: Array
    kind: tuple[tuple[NoiseKind, ...], ...]
    width: Array
    apart: Array
    quantum: Array
    spent: int

    def __post_init__(self) -> None:
        for name in ("level", "width", "apart", "quantum"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def loudest(self, output: int) -> int:
        """The direction along which an output is noisiest; the first one where nothing is known."""
        level = self.level[:, output]
        return int(np.argmax(np.where(np.isfinite(level), level, -1.0)))
