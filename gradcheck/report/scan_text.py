"""The step-size curve as plain text, with a small plot of log10(error) over log10(step)."""

import math

import numpy as np

from gradcheck import wording
from gradcheck.records.arrays import Array
from gradcheck.records.estimate import Scan
from gradcheck.report.paragraphs import paragraph
from gradcheck.witnesses.difference_reasons import SPENT

#: Size of the plot's field in characters.
_COLUMNS, _LINES = 61, 15

_POINT, _BEST = "*", "O"


def scan_text(scan: Scan) -> str:
    """The scan as text of at most 80 columns.

    Parameters
    ----------
    scan : Scan
        Its own ``text`` is not looked at. Steps whose error is not finite are counted below the plot, not drawn;
        an error of zero stands at the bottom.

    Examples
    --------
    >>> import gradcheck
    >>> print(scan_text(gradcheck.scan(lambda x: x[0] ** 3, at=[3.0])).partition(" ±")[0])
    model along x[0]: 27
    """
    name = f"{wording.shortened(scan.function or 'derivative', 30)} along {wording.shortened(scan.along, 20)}"
    lines = paragraph(f"{name}: {wording.with_bound(scan.value, scan.bound)}")
    lines += paragraph(_best(scan), 2)
    lines += ["", *plot(scan.steps, scan.errors, scan.best_step), ""]
    lines += [line for notice in scan.notices for line in paragraph(notice, first="Note: ")]
    return "\n".join([*lines, *paragraph(_closing(scan))])


def brief_scan(scan: Scan) -> str:
    """The derivative and the best step, in one line.

    Examples
    --------
    >>> import gradcheck
    >>> brief_scan(gradcheck.scan(abs, at=0.0)).rpartition(", ")[2]
    'no best step'
    """
    step = f"best step {wording.number(scan.best_step, 2)}{_unit(scan)}" if math.isfinite(scan.best_step) else ""
    return f"{scan.text.partition(chr(10))[0]}, {step or 'no best step'}"


def _best(scan: Scan) -> str:
    if not np.isfinite(scan.errors).any():
        if SPENT in scan.notices:
            return "The budget ended before the curve could be looked at."
        return "No step gives a finite difference quotient."
    if not math.isfinite(scan.best_step):
        return "No step gives a derivative here."
    return (
        f"Best step for a {scan.formula}: {wording.number(scan.best_step, 2)}{_unit(scan)}, "
        f"which leaves an error of about {wording.number(error_left(scan), 2)}."
    )


def error_left(scan: Scan) -> float:
    """The error to be told for the best step: what was seen, what noise leaves, and what the reference hides."""
    # What the reference does not resolve is not known to be smaller.
    resolved = scan.bound if math.isfinite(scan.bound) and scan.bound <= abs(scan.value) else 0.0
    return max(scan.best_error, scan.floor, resolved)


def _unit(scan: Scan) -> str:
    return f" {wording.shortened(scan.unit, 20)}" if scan.unit else ""


def _branches(scan: Scan) -> str:
    """Where truncation begins to rule, and where noise does."""
    told = []
    if scan.truncation is not None:
        told.append(f"truncation from {wording.number(scan.truncation.lower, 2)} up")
    if scan.roundoff is not None:
        told.append(f"noise or rounding below {wording.number(scan.roundoff.upper, 2)}")
    return f"What rules the error: {' and '.join(told)}. " if told else ""


def _closing(scan: Scan) -> str:
    order = f"Observed truncation order: {wording.number(scan.order, 2)}. " if math.isfinite(scan.order) else ""
    known = wording.capitalised(wording.noise([scan.noise], [scan.noise_kind]))
    noise = f"{known}. " if known else ""
    return f"{_branches(scan)}{order}{noise}{wording.count(scan.evaluations, 'evaluation').capitalize()}."


def plot(steps: Array, errors: Array, best_step: float) -> list[str]:
    """Lines of a character plot of log10(error) over log10(step); the best step is marked ``O``.

    Parameters
    ----------
    steps, errors : ndarray, shape (k,)
        Only finite errors at finite, positive steps are drawn.
    best_step : float

    Returns
    -------
    list of str
        A single sentence if there are fewer than two points to draw.
    """
    drawn = np.isfinite(errors) & np.isfinite(steps) & (steps > 0) & (errors >= 0)
    missing = int(drawn.size - drawn.sum())
    positive = errors[drawn & (errors > 0)]
    if drawn.sum() < 2 or not positive.size:
        return ["  (no curve to draw: fewer than two steps with a finite error above zero)"]
    across = np.log10(steps[drawn])
    # An error of zero has no logarithm; the bottom of the field is as low as it goes.
    bottom = 10.0 ** math.floor(math.log10(positive.min()))
    up = np.log10(np.where(errors[drawn] > 0, errors[drawn], bottom))
    best = int(np.argmin(np.abs(steps[drawn] - best_step))) if math.isfinite(best_step) else None
    lines = _field(across, up, best)
    if missing:
        lines += paragraph(f"not drawn: {wording.count(missing, 'step')} without a finite error", 2)
    return lines


def _field(across: Array, up: Array, best: int | None) -> list[str]:
    left, right = math.floor(across.min()), max(math.ceil(across.max()), math.floor(across.min()) + 1)
    low, high = math.floor(up.min()), max(math.ceil(up.max()), math.floor(up.min()) + 1)
    columns = np.rint((across - left) / (right - left) * (_COLUMNS - 1)).astype(int)
    rows = np.rint((high - up) / (high - low) * (_LINES - 1)).astype(int)
    field = [[" "] * _COLUMNS for _ in range(_LINES)]
    for row, column in zip(rows, columns, strict=True):
        field[row][column] = _POINT
    if best is not None:
        field[rows[best]][columns[best]] = _BEST
    labels = {round((high - power) / (high - low) * (_LINES - 1)): f"1e{power}" for power in _ticks(low, high, 5)}
    lines = ["  error"]
    lines += [f"{labels.get(i, ''):>7} |{''.join(cells)}".rstrip() for i, cells in enumerate(field)]
    return [*lines, " " * 8 + "+" + "-" * _COLUMNS, *_scale(left, right)]


def _scale(left: int, right: int) -> list[str]:
    """Labels below the field, at their columns, and the name of the axis."""
    line = [" "] * (_COLUMNS + 18)
    for power in _ticks(left, right, 6):
        label = f"1e{power}"
        centre = 9 + round((power - left) / (right - left) * (_COLUMNS - 1))
        start = centre - len(label) // 2
        line[start : start + len(label)] = label
    return ["".join(line).rstrip(), f"{'step   (O: best)':>{_COLUMNS + 9}}"]


def _ticks(low: int, high: int, most: int) -> list[int]:
    """At most about `most` whole powers of ten from `low` to `high`, evenly spaced."""
    stride = max(1, math.ceil((high - low) / most))
    return list(range(low, high + 1, stride))
