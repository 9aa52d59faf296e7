"""A derivative from function values, as plain text."""

from collections.abc import Mapping

import numpy as np

from gradcheck import wording
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.estimate import Estimate
from gradcheck.report.paragraphs import paragraph, table

#: All entries are shown up to this many, beyond it the least certain ones.
_ROWS = 20
#: Entries that share a reason are named up to this many.
_NAMES = 6


def estimate_text(estimate: Estimate) -> str:
    """The estimate as text of at most 80 columns.

    Parameters
    ----------
    estimate : Estimate
        Its own ``text`` is not looked at.

    Examples
    --------
    >>> import gradcheck
    >>> print(estimate_text(gradcheck.estimate(lambda x: x[0] ** 2, at=[3.0])).splitlines()[0])
    derivative by finite difference: 1 entry
    """
    lines = paragraph(f"{_heading(estimate)} by {estimate.source}: {_amount(estimate)}")
    shown = _shown(estimate)
    if len(_different(estimate)) > len(shown):
        lines += paragraph(f"the {len(shown)} least certain ones:", 2)
    lines += _table(estimate, shown)
    reasons = _gathered(estimate.reasons)
    lines += [line for names, reason in reasons[:_ROWS] for line in paragraph(f"{names}: {reason}", 2)]
    lines += [line for notice in estimate.notices for line in paragraph(notice, first="Note: ")]
    return "\n".join([*lines, *paragraph(_closing(estimate))])


def _heading(estimate: Estimate) -> str:
    return "second derivative" if estimate.order == 2 else "derivative"


def _amount(estimate: Estimate) -> str:
    amount, different = int(estimate.value.size), len(_different(estimate))
    told = wording.count(amount, "entry", "entries")
    return told if amount == different else f"{told}, {different} of them different"


def _variables(estimate: Estimate) -> int:
    """Number n of variables if the entries are a Hessian of several variables, (n, n) once flattened; else 0."""
    n = round(float(np.sqrt(estimate.value.size)))
    return n if estimate.order == 2 and estimate.value.ndim >= 2 and n > 1 and n * n == estimate.value.size else 0


def _different(estimate: Estimate) -> IntArray:
    """Flat positions of the entries; of a Hessian, which is symmetric, those of the upper triangle."""
    n = _variables(estimate)
    every = np.arange(estimate.value.size)
    return every[every // n <= every % n] if n else every


def _gathered(reasons: Mapping[str, str]) -> list[tuple[str, str]]:
    """Names of all entries that share a reason, and the reason."""
    names: dict[str, list[str]] = {}
    for name, reason in reasons.items():
        names.setdefault(reason, []).append(name)
    told = []
    for reason, several in names.items():
        more = [f"and {len(several) - _NAMES:,} more"] if len(several) > _NAMES else []
        # names of entries may hold commas
        told.append(("; ".join([*several[:_NAMES], *more]), reason))
    return told


def _shown(estimate: Estimate) -> list[int]:
    """Flat positions of the entries to show, in order of the vector; the least certain ones if there are many."""
    places = _different(estimate)
    if places.size <= _ROWS:
        return [int(place) for place in places]
    value, bound = np.abs(np.ravel(estimate.value)[places]), np.ravel(estimate.bound)[places]
    # A zero is as certain as its bound is small beside the other entries.
    size = np.where(value > 0, value, np.max(value[np.isfinite(value)], initial=0.0))
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = bound / size
    relative = np.where(np.isnan(relative), np.inf, relative)
    return sorted(places[np.argsort(-relative, kind="stable")[:_ROWS]].tolist())


def _table(estimate: Estimate, shown: list[int]) -> list[str]:
    value, bound, step = (np.ravel(part) for part in (estimate.value, estimate.bound, estimate.step))
    rows = [
        (
            _name(estimate, position),
            wording.with_bound(float(value[position]), float(bound[position]), digits=wording.MOST_DIGITS),
            _step(step, position),
        )
        for position in shown
    ]
    return table(("entry", "value ± bound", "step"), rows, right="--r")


def _step(steps: Array, position: int) -> str:
    """The step of an entry, or a dash where no interval decided it."""
    known = position < steps.size and np.isfinite(steps[position])
    return wording.number(float(steps[position]), 2) if known else "-"


def _name(estimate: Estimate, position: int) -> str:
    """Name of an entry, if there is one for each; else its index."""
    n = _variables(estimate)
    if n and len(estimate.names) == n:
        return f"{estimate.names[position // n]}, {estimate.names[position % n]}"
    if len(estimate.names) == estimate.value.size:
        return estimate.names[position]
    index = np.unravel_index(position, estimate.value.shape) if estimate.value.shape else ()
    if len(index) == 2 and len(estimate.names) == estimate.value.shape[1]:
        return f"[{index[0]}] {estimate.names[int(index[1])]}"
    return f"[{', '.join(str(int(i)) for i in index)}]"


def _closing(estimate: Estimate) -> str:
    noise = wording.capitalised(wording.noise(np.ravel(estimate.noise).tolist(), estimate.noise_kind))
    told = f"{noise}. " if noise else ""
    return f"{told}{wording.capitalised(wording.cost(estimate.evaluations, estimate.seconds))}."
