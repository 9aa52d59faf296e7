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
    largest : ndarray, shape (d, m)
        Largest size of a value there.
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
    largest: Array
    apart: Array
    quantum: Array
    spent: int

    def __post_init__(self) -> None:
        for name in ("level", "width", "largest", "apart", "quantum"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def of_outputs(self) -> "OutputNoise":
        """Each output along the direction in which it is noisiest."""
        rows = np.argmax(np.where(np.isfinite(self.level), self.level, -1.0), axis=0)
        outputs = np.arange(self.level.shape[1])
        return OutputNoise(
            level=self.level[rows, outputs],
            kind=tuple(self.kind[row][output] for output, row in enumerate(rows)),
            quantum=self.quantum[rows, outputs],
            largest=self.largest[rows, outputs],
            apart=self.apart,
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OutputNoise:
    """The noise of each output; arrays of shape (m,), with the meaning they have in `NoiseReading`."""

    level: Array
    kind: tuple[NoiseKind, ...]
    quantum: Array
    largest: Array
    apart: Array

    def __post_init__(self) -> None:
        for name in ("level", "quantum", "largest", "apart"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def loudest(self) -> int:
        """The noisiest output; the first one where nothing is known."""
        return int(np.argmax(np.where(np.isfinite(self.level), self.level, -1.0)))
