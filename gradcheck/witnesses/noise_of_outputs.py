"""The noise of each output of a model, from what the difference witness met and, where that is not enough, a look."""

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.noise import NoiseKind
from gradcheck.witnesses.noise import noise
from gradcheck.witnesses.noise_reading import OutputNoise
from gradcheck.witnesses.steps import Room, room_along
from gradcheck.witnesses.testimony import Testimony

#: Directions along which an estimate listens at most.
LISTENED_MOST = 2


def noise_beside(
    base: Array, directions: Directions, room: Room, centre: Array, testimony: Testimony
) -> Inquiry[OutputNoise]:
    """The noise that differences met, at no cost where it is rounding; else the noise inquiry is asked.

    Parameters
    ----------
    base, directions, room, centre
        As in `noise`, for d directions and m outputs.
    testimony : Testimony
        Of the difference witness about the same directions.

    Returns
    -------
    OutputNoise
        Not examined where differences say nothing of the noise (a kink, a budget that ended) and none is suspected.
    """
    level = np.array(testimony.noise)
    kind = [NoiseKind.ROUNDING if np.isfinite(one) else NoiseKind.NOT_EXAMINED for one in level]
    quantum, apart, largest = np.zeros(level.size), np.full(level.size, np.nan), np.abs(centre)
    rows = _rows(testimony.doubtful)
    if rows.size:
        some = Room(**{name: getattr(room, name)[rows] for name in Room.__slots__})
        heard = (yield from noise(base, directions[rows], some, centre)).of_outputs()
        for output in np.flatnonzero(testimony.doubtful.any(axis=0)):
            if np.isfinite(heard.level[output]):
                level[output], kind[output] = heard.level[output], heard.kind[output]
            elif kind[output] == NoiseKind.ROUNDING:
                kind[output] = NoiseKind.NOT_EXAMINED
        quantum, apart, largest = heard.quantum, heard.apart, heard.largest
    return OutputNoise(level=level, kind=tuple(kind), quantum=quantum, largest=largest, apart=apart)


def _rows(doubtful: BoolArray) -> IntArray:
    """Few directions that together meet the doubts about as many outputs as possible."""
    open_ = doubtful.copy()
    rows: list[int] = []
    while open_.any() and len(rows) < LISTENED_MOST:
        rows.append(int(np.argmax(open_.sum(axis=1))))
        open_ &= ~open_[rows[-1]]
    return np.array(rows, dtype=np.intp)


def noise_of_all(
    base: Array, coordinates: IntArray, domain: Domain, centre: Array, *, apart: Array
) -> Inquiry[OutputNoise]:
    """The noise along one line on which all these coordinates change at once, each by its own size.

    `apart` (m,) is how far repeated values at `base` lay apart.
    Nothing is known (every kind ``not examined``) where there is no coordinate with room to move.
    """
    m = centre.size
    room = room_along(base, coordinates, domain)
    # Each variable goes where it has room; one that has none stays.
    sign = np.where(room.above >= room.below, 1.0, -1.0)
    row = np.zeros((1, base.size))
    row[0, coordinates] = sign * np.where(np.maximum(room.above, room.below) > 0, room.scale, 0.0)
    if not row.any():
        nothing = np.full(m, np.nan)
        silent = (NoiseKind.NOT_EXAMINED,) * m
        return OutputNoise(level=nothing, kind=silent, quantum=np.zeros(m), largest=np.abs(centre), apart=nothing)
    reading = yield from noise(base, row, room_along(base, row, domain), centre, apart=apart)
    return reading.of_outputs()
