"""A derivative from function values, as plain text."""

import numpy as np

from gradcheck import wording
from gradcheck.records.estimate import Estimate
from gradcheck.report.paragraphs import paragraph, table

#: All entries are shown up to this many, beyond it the least certain ones.
_ROWS = 20


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
    amount = int(estimate.value.size)
    lines = paragraph(f"derivative by {estimate.source}: {wording.count(amount, 'entry', 'entries')}")
    shown = _shown(estimate)
    if amount > len(shown):
        lines += paragraph(f"the {len(shown)} least certain ones:", 2)
    lines += _table(estimate, shown)
    reasons = list(estimate.reasons.items())
    lines += [line for name, reason in reasons[:_ROWS] for line in paragraph(f"{name}: {reason}", 2)]
    lines += [line for notice in estimate.notices for line in paragraph(notice, first="Note: ")]
    return "\n".join([*lines, *paragraph(_closing(estimate))])


def _shown(estimate: Estimate) -> list[int]:
    """Flat positions of the entries to show, in order of the vector; the least certain ones if there are many."""
    if estimate.value.size <= _ROWS:
        return list(range(estimate.value.size))
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.ravel(estimate.bound) / np.abs(np.ravel(estimate.value))
    relative = np.where(np.isnan(relative), np.inf, relative)
    return sorted(np.argsort(-relative, kind="stable")[:_ROWS].tolist())


def _table(estimate: Estimate, shown: list[int]) -> list[str]:
    value, bound, step = (np.ravel(part) for part in (estimate.value, estimate.bound, estimate.step))
    rows = [
        (
            _name(estimate, position),
            wording.with_bound(float(value[position]), float(bound[position]), digits=wording.MOST_DIGITS),
            wording.number(float(step[position]), 2) if position < step.size else "-",
        )
        for position in shown
    ]
    return table(("entry", "value ± bound", "step"), rows, right="--r")


def _name(estimate: Estimate, position: int) -> str:
    """Name of an entry, if there is one for each; else its index."""
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
