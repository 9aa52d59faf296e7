"""Refining one output on one finite stretch of a line, until every cell is clean or its break is named."""

import numpy as np

from gradcheck.health.line_confirmation import confirmed
from gradcheck.health.line_descent import descended
from gradcheck.health.line_focus import GRAINS_BETWEEN_SAMPLES, NARROWEST, Focus, Ledger
from gradcheck.health.line_samples import Quest, Samples, jitter
from gradcheck.health.line_survey import Survey, surveyed
from gradcheck.health.line_zoom import JUMP_WIDTH, suspicion, zoomed
from gradcheck.records.arrays import Array, BoolArray

DEEP = 1.0 / 64.0  # of a cell of the grid: what is not clean then is steep, or no polynomial
EXTREME = 20.0  # times the variation on the grid: values that far out lead to a pole
MOST_DISAPPOINTMENTS = 3  # zooms in a row that found nothing
FEWEST_CELLS = 8
MOST_HALVED = 8  # cells a round
MOST_CELLS = 64  # a grid that is doubled once has this many
MANY_CELLS = 160  # even if each doubling helps
NEARLY_CLEAN = 3.0  # expected excess over the tolerance for which a doubling is worth its price
SPOTS = 6  # places of an unresolvable line that are looked at closely
DEEPEST = 6  # spots within spots


def refined(
    samples: Samples,
    focus: Focus,
    ledger: Ledger,
    lower: float,
    upper: float,
    *,
    depth: int = 0,
    to_the_noise: bool = False,
) -> Quest[Samples]:
    """Look at [lower, upper] until its cells are clean, enough is found, or only a closer look at spots makes sense.

    After some suspicions that came to nothing, something else is tried first: near a cusp every cell is suspicious.
    """
    disappointments, excess = 0, np.inf
    while not ledger.full:
        survey = surveyed(samples, focus, ledger, lower, upper, to_the_noise=to_the_noise)
        rough = _rough(survey, focus, ledger)
        bad = rough & (survey.width > NARROWEST)
        suspect = _strongest(survey, rough, ledger) if disappointments < MOST_DISAPPOINTMENTS else None
        if suspect is not None:
            samples, dismissed = yield from _examined(samples, focus, ledger, suspect)
            disappointments += dismissed
            continue
        if not bad.any():
            return samples
        disappointments = 0
        deep = None if to_the_noise else _deep(survey, bad, focus, ledger)
        if deep is not None:
            samples = yield from _followed_down(samples, focus, ledger, deep)
        elif bad.size < FEWEST_CELLS:
            samples = yield _filled(survey)
        elif survey.width[bad].sum() <= 0.5 * survey.width.sum():
            samples = yield _halves(survey, bad)
        elif depth == 0 and not to_the_noise and _worth_doubling(survey, bad, excess):
            excess = float(np.median(survey.excess[bad]))
            samples = yield _halves(survey, bad, most=bad.size)
        elif depth >= DEEPEST:
            return samples
        else:
            for ends in _spots(survey, bad, focus, SPOTS if depth == 0 and not to_the_noise else 1):
                samples = yield from refined(samples, focus, ledger, *ends, depth=depth + 1, to_the_noise=to_the_noise)
            return samples
    return samples


def looked_at_to_the_noise(
    samples: Samples, focus: Focus, ledger: Ledger, lower: float, upper: float
) -> Quest[Samples]:
    """One spot down to the noise, if most cells are clean but not as clean as the noise: a fine saw would be so."""
    survey = surveyed(samples, focus, ledger, lower, upper, to_the_noise=True)
    rough = survey.hidden > survey.tolerance
    if ledger.findings or rough.size < FEWEST_CELLS or rough.mean() < 0.5:
        return samples
    spot = survey.ends(int(focus.rng.choice(np.flatnonzero(rough))))
    return (yield from refined(samples, focus, ledger, *spot, to_the_noise=True))


def _rough(survey: Survey, focus: Focus, ledger: Ledger) -> BoolArray:
    """(c,): cells that are not clean and not too narrow to be looked into."""
    left = survey.view.t[survey.cell]
    narrowest = np.maximum(2.0 * JUMP_WIDTH, 4.0 * GRAINS_BETWEEN_SAMPLES * focus.line.grain(left))
    rough = (survey.hidden > survey.tolerance) & (survey.width > narrowest)
    return np.asarray(rough & ~ledger.in_a_shadow(left))


def _strongest(survey: Survey, rough: BoolArray, ledger: Ledger) -> tuple[float, float] | None:
    """Ends of the cell whose sides part most clearly, among the rough ones that were not yet dismissed."""
    index = np.flatnonzero(rough)
    if index.size == 0:
        return None
    strength = suspicion(survey.view, survey.cell[index])
    for place in np.argsort(-strength):
        ends = survey.ends(int(index[place]))
        if strength[place] > 0.0 and ledger.worth_a_zoom(*ends):
            return ends
    return None


def _deep(survey: Survey, bad: BoolArray, focus: Focus, ledger: Ledger) -> tuple[float, float] | None:
    """Ends of the roughest cell, or of that with an extreme value, if it is small and no descent began near it."""
    extreme = survey.extreme(EXTREME * focus.scale)
    place = survey.roughest(bad) if extreme is None else extreme
    ends = survey.ends(place)
    if survey.width[place] > DEEP * focus.cell or not ledger.worth_a_descent(*ends):
        return None
    return ends


def _examined(samples: Samples, focus: Focus, ledger: Ledger, cell: tuple[float, float]) -> Quest[tuple[Samples, bool]]:
    """Zoom in on a suspicious cell, and confirm what is there or dismiss it; True if it was dismissed."""
    piece = ledger.piece_around(cell)
    ledger.dismissed.append(cell)
    samples, suspect = yield from zoomed(samples, focus, piece, *cell)
    if suspect is None:
        return samples, True
    samples, found = yield from confirmed(samples, focus, piece, suspect)
    if found is not None:
        ledger.findings.append(found)
    return samples, found is None


def _followed_down(samples: Samples, focus: Focus, ledger: Ledger, cell: tuple[float, float]) -> Quest[Samples]:
    """Ask whether a small cell that will not come clean hides a break with a fractional power."""
    ledger.descents.append(cell)
    samples, found = yield from descended(samples, focus, ledger.piece_around(cell), *cell)
    if found is not None:
        ledger.findings.append(found)
    return samples


def _worth_doubling(survey: Survey, bad: BoolArray, before: float) -> bool:
    """Whether halving all bad cells is likely to clean them: the first time, or if the last one brought them far."""
    if survey.cell.size < MOST_CELLS:
        return True
    excess = float(np.median(survey.excess[bad]))
    return survey.cell.size < MANY_CELLS and excess * (excess / before) < NEARLY_CLEAN


def _halves(survey: Survey, chosen: BoolArray, most: int = MOST_HALVED) -> Array:
    """A sample near the middle of each chosen cell, worst cells first."""
    index = np.flatnonzero(chosen)
    index = index[np.argsort(-survey.excess[index], kind="stable")][:most]
    left = survey.view.t[survey.cell[index]]
    width = survey.width[index]
    return np.asarray(left + width * (0.5 + 0.04 * jitter(left, left + width)))


def _filled(survey: Survey) -> Array:
    """Samples that divide a region of few cells into at least eight."""
    parts = int(np.ceil(FEWEST_CELLS / survey.cell.size))
    part = survey.width[:, None] / parts
    middle = survey.view.t[survey.cell][:, None] + part * np.arange(1, parts)
    return np.asarray(middle + 0.2 * part * jitter(middle, middle + part)).ravel()


def _spots(survey: Survey, bad: BoolArray, focus: Focus, count: int) -> list[tuple[float, float]]:
    """Cells worth a close look: the roughest, that which hides most, and random ones."""
    most_hidden = int(np.where(bad, survey.excess, 0.0).argmax())
    others = focus.rng.permutation(np.flatnonzero(bad))
    chosen = dict.fromkeys([survey.roughest(bad), most_hidden, *map(int, others)])
    return [survey.ends(cell) for cell in list(chosen)[:count]]
