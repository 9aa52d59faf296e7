"""A measured figure beside its goal, and tables of them."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """One measured number.

    Attributes
    ----------
    name : str
    value : float
        NaN if nothing was measured; that never meets a goal.
    goal : float or None
        None for what is told without a goal.
    at_least : bool
        Whether the goal is a lower limit; else an upper one.
    form : str
        Format of both numbers.
    """

    name: str
    value: float
    goal: float | None = None
    at_least: bool = False
    form: str = ".3g"

    @property
    def met(self) -> bool:
        """Whether the figure reaches its goal; without a goal it does."""
        if self.goal is None:
            return True
        return self.value >= self.goal if self.at_least else self.value <= self.goal

    @property
    def shown(self) -> str:
        """The number, with a mark where the goal is missed."""
        text = "-" if math.isnan(self.value) else format(self.value, self.form)
        return text if self.met else f"{text} !"

    @property
    def goal_shown(self) -> str:
        """The goal in words."""
        if self.goal is None:
            return ""
        return f"{'≥' if self.at_least else '≤'} {format(self.goal, self.form)}"


def side_by_side(columns: Mapping[str, Sequence[Figure]]) -> str:
    """A table of the same figures for several parts of the data; ``!`` marks a missed goal."""
    rows = zip(*columns.values(), strict=True)
    return aligned(
        ("figure", "goal", *columns),
        [(row[0].name, row[0].goal_shown, *(figure.shown for figure in row)) for row in rows],
    )


def aligned(heading: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Text columns: the first to the left, the others to the right."""
    widths = [max(map(len, column)) for column in zip(heading, *rows, strict=True)]

    def line(cells: Sequence[str]) -> str:
        first = cells[0].ljust(widths[0])
        return "  ".join([first, *(cell.rjust(width) for cell, width in zip(cells[1:], widths[1:], strict=True))])

    return "\n".join([line(heading), line(["-" * width for width in widths]), *map(line, rows)])


def median(numbers: Any) -> float:
    """The median of what is not NaN; NaN if nothing is."""
    kept = [number for number in numbers if not math.isnan(number)]
    # not numpy's, which warns where two infinities meet
    kept.sort()
    middle = len(kept) // 2
    if not kept:
        return math.nan
    return float(kept[middle] if len(kept) % 2 else kept[middle - 1] / 2 + kept[middle] / 2)


def percent(marks: Sequence[bool]) -> float:
    """Share of true ones; NaN if there are none at all."""
    return 100.0 * sum(map(bool, marks)) / len(marks) if len(marks) else math.nan
