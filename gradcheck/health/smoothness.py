"""Is the model smooth along a line, and if not: what breaks, where, and how badly?

The plan: a jittered grid and two fine stencils; bisection of the edges of what is finite; divided differences that
bound what could hide in each cell; zooms into cells whose two sides predict differently; belief only in what keeps its
size down to the noise.
"""

import numpy as np

from gradcheck.evaluation.protocol import Inquiry
from gradcheck.health.line_gathering import Gathering
from gradcheck.health.line_noise import STENCIL_SPACING, StencilReading, read_stencil, stencil
from gradcheck.health.line_output import OutputExamination
from gradcheck.health.line_report import LineReport
from gradcheck.health.line_samples import Line, line_through
from gradcheck.records.arrays import Array

GRID = 33
JITTER = 0.25  # of a cell: full mantissas, so that the digits of the values mean something
STENCIL_PLACES = (0.15, 0.45), (0.55, 0.85)
STENCIL_GRAINS = 64.0
REPEATED = (0, GRID // 2)  # points of the grid that are evaluated twice


def examine_line(
    start: Array,
    direction: Array | tuple[int, float],
    *,
    budget: int = 400,
    worth: float = 1.0,
    seed: int = 0,
) -> Inquiry[LineReport]:
    """Find what keeps a model from being smooth and exact along ``start + t·direction``, t in [0, 1].

    Parameters
    ----------
    start : ndarray, shape (n,)
    direction : ndarray, shape (n,), or (int, float)
        A row, or a coordinate and a length along it.
    budget : int
        Largest number of evaluations; 50 to 300 are usual.
    worth : float
        Passed on with every request.
    seed : int
        Of the jitter; the same seed asks for the same points.

    Returns
    -------
    LineReport
        What was found by the time that the cells were clean, or enough was found, or the budget ended. A refusal is
        no error: what was not looked at is counted in `unresolved`. Values that are not finite, crashes and time-outs
        are stretches of the line; each side of them is examined by itself.

    Notes
    -----
    Edge detection by divided differences: Harten, J. Comput. Phys. 83 (1989); Archibald, Gelb & Yoon, SIAM J. Numer.
    Anal. 43 (2005). What cannot be told apart: a jump and a transition narrower than 1e-11 of the line; a kink and a
    rounding that the noise hides; anything narrower than a cell of a wave that was not resolved.

    Examples
    --------
    >>> import numpy as np
    >>> inquiry = examine_line(np.zeros(1), np.ones(1))
    >>> next(inquiry).offsets.shape
    (1, 47)
    """
    line = line_through(start, direction)
    gathering = Gathering(line=line, budget=budget, worth=worth)
    rng = np.random.default_rng(seed)
    grid = line.realised(_grid(rng))
    stencils = [line.realised(t) for t in _stencils(line, rng)]
    yield from gathering.sampled(np.concatenate([grid, *stencils]))
    if gathering.samples.t.size < grid.size:
        return _nothing_said(gathering)
    gaps = yield from _repeat_gaps(gathering, grid)
    readings = [_reading(gathering, line, t) for t in stencils]
    examinations = [
        OutputExamination(line=line, output=output, grid=grid, readings=readings, repeat_gap=float(gap), seed=seed)
        for output, gap in enumerate(gaps)
    ]
    first = _begun(gathering, examinations)
    yield from gathering.pursued({e.output: e.quest(gathering.samples) for e in first})
    return _reported(gathering, examinations)


def _grid(rng: np.random.Generator) -> Array:
    """(33,): the ends, and inner points moved by up to a quarter of a cell."""
    grid = np.linspace(0.0, 1.0, GRID)
    grid[1:-1] += rng.uniform(-JITTER, JITTER, GRID - 2) / (GRID - 1)
    return grid


def _stencils(line: Line, rng: np.random.Generator) -> list[Array]:
    spacing = max(STENCIL_SPACING, STENCIL_GRAINS * float(line.grain(np.ones(1))[0]))
    return [stencil(float(rng.uniform(*place)), spacing, rng) for place in STENCIL_PLACES]


def _reading(gathering: Gathering, line: Line, t: Array) -> StencilReading:
    samples = gathering.samples
    values = np.stack([samples.at(t, output)[1] for output in range(samples.values.shape[1])], axis=1)
    with np.errstate(all="ignore"):  # values that are not finite have no noise
        return read_stencil(t, values, float(line.grain(t)[0]))


def _repeat_gaps(gathering: Gathering, grid: Array) -> Inquiry[Array]:
    """(m,): largest difference between two evaluations of the same point; infinite if only one of them was finite."""
    places = grid[list(REPEATED)]
    before = gathering.samples.values[np.searchsorted(gathering.samples.t, places)]
    if not gathering.affords(places.size):
        return np.zeros(before.shape[1])
    after, answered = yield from gathering.repeated(places)
    before, after = before[answered], after[answered]
    with np.errstate(invalid="ignore"):
        gap = np.abs(after - before)
    gap[np.isnan(before) & np.isnan(after) | (before == after)] = 0.0
    return np.asarray(np.nan_to_num(gap, nan=np.inf).max(axis=0, initial=0.0))


def _begun(gathering: Gathering, examinations: list[OutputExamination]) -> list[OutputExamination]:
    """All examinations, begun. The budget may end before many outputs had their turn: the most suspicious go first."""
    with np.errstate(all="ignore"):
        suspicions = [e.begun(gathering.samples) for e in examinations]
    return [examinations[i] for i in np.argsort(-np.array(suspicions), kind="stable")]


def _reported(gathering: Gathering, examinations: list[OutputExamination]) -> LineReport:
    samples = gathering.samples
    with np.errstate(all="ignore"):
        unresolved = max((e.unresolved(samples) for e in examinations), default=1.0)
    return LineReport(
        irregularities=tuple(
            found.in_units(int(exponent))
            for e, exponent in zip(examinations, gathering.known_exponents(), strict=True)
            for found in e.irregularities(samples)
        ),
        noise=np.ldexp([e.noise for e in examinations], gathering.known_exponents()),
        evaluations=gathering.evaluations,
        unresolved=unresolved,
        repeatable=all(e.repeat_gap == 0.0 for e in examinations),
        complete=gathering.complete,
    )


def _nothing_said(gathering: Gathering) -> LineReport:
    """The report of a line of which not even the grid was evaluated."""
    return LineReport(
        irregularities=(),
        noise=np.full(gathering.samples.values.shape[1], np.nan),
        evaluations=gathering.evaluations,
        unresolved=1.0,
        repeatable=True,
        complete=False,
    )
