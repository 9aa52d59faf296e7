"""Can a gradient with a million entries be checked, and can it be told which of them are wrong?

The model couples all variables: neighbours by products, all of them by their mean. Claims are exact but for entries
that are made wrong: another sign, twice the value, zero, a thousandth off, several with one factor, wrong claims of
zero. Wrong entries are drawn among all but the smallest fiftieth, for which the report tells another size of what is
seen. For each case: the share of seeds in which exactly the wrong entries were named, the evaluations beside
2·k·log2(n/k) (what halving takes in directions), and innocent entries named. A last figure plants errors of the very
size that the report calls surely seen.
"""

import math
import time
import tracemalloc
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

import gradcheck
from benchmarks.figures import Figure, aligned, median, percent, side_by_side
from gradcheck import Verdict
from gradcheck.records.report import CheckReport

QUESTION = "Can a gradient with a million entries be checked, and wrong ones be named?"
LARGE, MEDIUM = 1_000_000, 100_000
Array = np.ndarray[tuple[int], np.dtype[np.float64]]


@dataclass(frozen=True, slots=True, eq=False)
class Model:
    """A scalar function of n variables and its gradient."""

    weights: Array

    def value(self, x: Array) -> float:
        """Products of neighbours, a rational function of each variable, and a wave of the mean."""
        mean = float(np.dot(self.weights, x)) / x.size
        each = self.weights / (1.0 + x * x)
        return float(np.dot(x[1:], x[:-1])) + float(each.sum()) + x.size * math.sin(mean)

    def gradient(self, x: Array) -> Array:
        """Its exact gradient."""
        mean = float(np.dot(self.weights, x)) / x.size
        gradient = -2.0 * self.weights * x / (1.0 + x * x) ** 2 + math.cos(mean) * self.weights
        gradient[1:] += x[:-1]
        gradient[:-1] += x[1:]
        return gradient


def _sign(claim: Array, places: Array, model: Model) -> None:
    claim[places] *= -1.0


def _double(claim: Array, places: Array, model: Model) -> None:
    claim[places] *= 2.0


def _zero(claim: Array, places: Array, model: Model) -> None:
    claim[places] = 0.0


def _thousandth(claim: Array, places: Array, model: Model) -> None:
    claim[places] *= 1.001


Plant = Callable[[Any, Any, Model], None]
#: Names of cases, how many entries are wrong, and how.
CASES: tuple[tuple[str, int, Plant], ...] = (
    *((f"{k} sign", k, _sign) for k in (1, 3, 20)),
    *((f"{k} factor 2", k, _double) for k in (1, 2, 3, 4, 20)),
    *((f"{k} zero", k, _zero) for k in (1, 3, 20)),
    *((f"{k} 1e-3 off", k, _thousandth) for k in (1, 2, 3, 4, 20)),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What became of one wrong claim."""

    exact: bool
    refuted: bool
    innocent: int
    evaluations: int


def run(points: int, seed: int) -> str:
    """All figures as text; `points` seeds a case at n = 100,000, a fifth of them at n = 1,000,000."""
    right = _right_claims(seed)
    parts = [side_by_side({f"{LARGE:,}": right})]
    for n, seeds in ((MEDIUM, points), (LARGE, max(1, points // 5))):
        rows, innocents = [], 0
        for name, k, plant in CASES:
            outcomes = [wrong_claim(n, seed + number, k, plant) for number in range(seeds)]
            innocents += sum(outcome.innocent for outcome in outcomes)
            halving = 2 * k * math.log2(n / k)
            rows.append(
                (
                    name,
                    f"{percent([o.refuted for o in outcomes]):.0f}",
                    f"{percent([o.exact for o in outcomes]):.0f}",
                    f"{median([float(o.evaluations) for o in outcomes]):.0f}",
                    f"{halving:.0f}",
                )
            )
        heading = (f"wrong, n = {n:,}", "refuted %", "found exactly %", "evaluations", "2k log2(n/k)")
        parts += [aligned(heading, rows), f"innocent entries named: {innocents} (goal 0); {seeds} seeds a case"]
    seen = sum(smallest_visible_is_seen(MEDIUM, seed + number) for number in range(points))
    parts.append(f"errors of the size told as surely seen: {seen} of {points} seen (goal: all)")
    return "\n\n".join(parts)


def problem(n: int, seed: int) -> tuple[Model, Array, np.random.Generator]:
    """A model, a point, and the generator that drew them."""
    random = np.random.default_rng(seed)
    return Model(random.uniform(0.5, 2.0, n)), random.normal(size=n), random


def check(model: Model, x: Array, claim: Any, seed: int) -> CheckReport:
    """The report on a claim, whatever it says."""
    return gradcheck.check(model.value, x, gradient=claim, seed=seed, on_refuted="return", on_undecided="pass")


def _right_claims(seed: int) -> list[Figure]:
    model, x, _ = problem(LARGE, seed)
    own = _peak(lambda: model.value(x))
    claim = model.gradient(x)
    began = time.perf_counter()
    report = check(model, x, claim, seed)
    seconds = time.perf_counter() - began
    began = time.perf_counter()
    for _ in range(report.evaluations):
        model.value(x)
    alone = time.perf_counter() - began
    peak = _peak(lambda: check(model, x, claim, seed))
    assert report.directions is not None
    return [
        Figure(name="confirmed", value=float(report.verdict == Verdict.CONFIRMED), goal=1, at_least=True),
        Figure(name="evaluations", value=report.evaluations, goal=64),
        Figure(name="vectors of memory above the model's own", value=(peak - own) / (8 * LARGE), goal=12),
        Figure(name="smallest visible single error, share of the claim", value=report.directions.smallest_visible),
        Figure(name="time beside that of the evaluations alone", value=seconds / alone),
    ]


def _peak(action: Callable[[], Any]) -> int:
    tracemalloc.start()
    try:
        action()
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


def wrong_claim(n: int, seed: int, k: int, plant: Plant) -> Outcome:
    """A claim with k wrong entries, and what was found."""
    model, x, random = problem(n, seed)
    claim = model.gradient(x)
    places = _covered(claim, x, random, k)
    plant(claim, places, model)
    report = check(model, x, claim, seed)
    named = {
        int(i) for i, verdict in zip(report.entries.index, report.entries.verdict, strict=True) if verdict == "refuted"
    }
    wrong = set(places.tolist())
    return Outcome(
        exact=named == wrong,
        refuted=report.verdict == Verdict.REFUTED,
        innocent=len(named - wrong),
        evaluations=report.evaluations,
    )


#: Share of the entries, the smallest, that are left out of what is drawn.
SMALLEST = 0.02


def _covered(claim: Array, x: Array, random: np.random.Generator, k: int) -> Any:
    sizes = np.abs(claim * x)
    return random.choice(np.flatnonzero(sizes > np.quantile(sizes, SMALLEST)), k, replace=False)


def smallest_visible_is_seen(n: int, seed: int) -> bool:
    """Whether an error of the size that a confirmed report calls surely seen, in one entry, is seen."""
    model, x, random = problem(n, seed)
    claim = model.gradient(x)
    report = check(model, x, claim, seed)
    assert report.directions is not None
    place = int(_covered(claim, x, random, 1)[0])
    full = next(part for part in report.directions.coverage if np.isfinite(part.share))
    small = [part for part in report.directions.coverage if "below" in part.what]
    limit = float(small[0].what.rpartition(" ")[2]) * 1.01 if small else 0.0
    limited = abs(claim[place] * x[place]) < limit
    claim[place] += small[0].over_size / abs(x[place]) if limited else full.share * claim[place]
    return check(model, x, claim, seed + 1).verdict != Verdict.CONFIRMED
