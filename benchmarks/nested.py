"""What does it cost to take a nesting apart and to fill it again?

What counts how:

- Own time per evaluation is that of a request through the whole gate (cache, budget, evaluator) with a model that
  returns a constant, so nothing of it is the model's; the shortest of several repeats.
- A goal is a twentieth of a model of 100 µs for small nestings, and for a long vector three: the one that
  the model receives, and two that stand for a whole request (the point, and what the input must look like afterwards).
- Seconds for many leaves are those of reading the nesting, filling it once, and taking a claim apart.
"""

import time
import tracemalloc
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from benchmarks.figures import Figure, side_by_side
from gradcheck.evaluation.pipeline import open_session
from gradcheck.evaluation.protocol import Request
from gradcheck.problem.layout import layout_of
from gradcheck.problem.subject import subjects_of_function

QUESTION = "What does it cost to take a nesting apart and to fill it again?"
LONG = 1_000_000
MANY = 100_000
REPEATS = 5


@dataclass(frozen=True)
class Wing:
    """Five fields, as a small design has them."""

    chord: Any
    twist: Any
    spar: Any
    sweep: float
    tip: Any


SMALL = {
    "array (9,)": np.linspace(1.0, 2.0, 9),
    "dict of 3 arrays": {"a": np.ones(3), "b": np.ones((2, 2)), "c": np.ones(2)},
    "dataclass of 5": Wing(np.ones(3), np.ones(2), np.ones((2, 2)), 0.5, np.ones(2)),
}


def run(points: int, seed: int) -> str:
    """The report; `points` counts repeats of a thousand evaluations."""
    small = {
        name: [Figure(name="µs an evaluation", value=own_time(at, points), goal=5.0)] for name, at in SMALL.items()
    }
    long = {
        "array": figures_of_long(np.ones(LONG), seed),
        "dict of 2": figures_of_long({"a": np.ones(LONG // 2), "b": np.ones(LONG // 2)}, seed),
        "Fortran (1000, 1000)": figures_of_long(np.asfortranarray(np.ones((1000, 1000))), seed),
    }
    return "\n\n".join([side_by_side(small), side_by_side(long), side_by_side({f"{MANY:,} leaves": many()})])


def own_time(at: Any, points: int) -> float:
    """Microseconds per evaluation, outside the model."""
    session = open_session(subjects_of_function(lambda x: 1.0, at, claims={})[0])
    session.start_values()
    directions = np.arange(session.subject.start.size)
    best = np.inf
    for repeat in range(REPEATS):
        offsets = np.ones((directions.size, 1)) * (np.arange(1, 1000) * 1e-6 + (repeat + points) * 1e-3)
        request = Request(
            base=session.subject.start,
            directions=directions,
            offsets=offsets,
            function=next(iter(session.subject.targets)),
        )
        best = min(best, seconds_of(lambda request=request: session.gate([request])) / offsets.size)
    return best * 1e6


def figures_of_long(at: Any, seed: int) -> list[Figure]:
    """Vectors that live beside the model while it runs, along axes and along random directions."""
    shown = []
    for name, directions in (
        ("axes", np.arange(3)),
        ("random directions", np.random.default_rng(seed).normal(size=(3, LONG))),
    ):
        live: list[int] = []

        def model(x: Any, live: list[int] = live) -> float:
            live.append(tracemalloc.get_traced_memory()[0])
            return 1.0

        session = open_session(subjects_of_function(model, at, claims={})[0])
        session.start_values()
        live.clear()
        tracemalloc.start()
        session.gate(
            [
                Request(
                    base=session.subject.start,
                    directions=directions,
                    offsets=np.ones((3, 1)) * [1e-3, 2e-3],
                    function="model",
                )
            ]
        )
        tracemalloc.stop()
        shown.append(Figure(name=f"vectors live, {name}", value=max(live) / (8 * LONG), goal=3.01))
    return shown


def many() -> list[Figure]:
    """Seconds for many small leaves."""
    at = {f"k{i}": np.ones(2) for i in range(MANY)}
    layout, vector = layout_of(at)
    return [
        Figure(name="seconds to read", value=seconds_of(lambda: layout_of(at))),
        Figure(name="seconds to fill", value=seconds_of(lambda: layout.restore(vector))),
        Figure(name="seconds for a claim", value=seconds_of(lambda: layout.flatten(at, "the claim"))),
        Figure(name="µs for a name", value=1e6 * seconds_of(lambda: layout.name(MANY))),
    ]


def seconds_of(action: Callable[[], Any]) -> float:
    """How long it takes."""
    began = time.perf_counter()
    action()
    return time.perf_counter() - began
