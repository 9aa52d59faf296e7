"""Where the start point stands beside the limits of the constraints."""

from collections.abc import Mapping
from typing import Any

import numpy as np

from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array
from gradcheck.wording import listed, number

#: Values of one function, and functions, that are shown.
SHOWN = 4


def start_notes(subject: Subject, values: Mapping[str, Array]) -> tuple[str, ...]:
    """One line with the values at the start point, one for each constraint that is broken there or limits nothing."""
    shown = [f"{name} = {_values(value)}" for name, value in values.items()]
    notes = [f"at the start point: {', '.join(shown[:SHOWN])}" + (" ..." if len(shown) > SHOWN else "")]
    for name, target in list(subject.targets.items())[1:]:
        if not target.limits:
            notes.append(f"{name} stands among the constraints but has no limit: give lower=, upper= or equal=")
        broken = _broken(values[name], target.limits)
        if broken:
            notes.append(f"the start point breaks {name}: {_values(values[name])}, where {listed(broken)} is asked")
    return tuple(notes)


def _values(value: Array) -> str:
    numbers = [number(float(v)) for v in value[:SHOWN]]
    if value.size == 1:
        return numbers[0]
    return f"({', '.join(numbers)}{', ...' if value.size > SHOWN else ''})"


def _broken(value: Array, limits: Mapping[str, Any]) -> list[str]:
    broken = []
    for side, limit in limits.items():
        asked = np.asarray(limit, dtype=float).ravel()
        over = {"lower": value < asked, "upper": value > asked, "equal": ~np.isclose(value, asked)}[side]
        if np.any(over):
            broken.append(f"{side} {number(float(asked[0]))}" + (" ..." if asked.size > 1 else ""))
    return broken
