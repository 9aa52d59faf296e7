"""What does our own arithmetic cost, beside ten lines written by hand?

What counts how:

- The model holds a stopwatch; own time is the whole time less what the model took, per evaluation of the model. The
  stopwatch itself, some 0.1 µs, counts as own time on both sides.
- The ten lines are a central difference with one step and `numpy.allclose`, in the same run. They compare and know
  nothing: no bound, no second opinion, no cache, no look at failures, written-over inputs or warnings.
- Of several repeats the shortest counts: other work on the machine only ever adds.
- A goal is half of the median ratio at that size when it was first measured (16, 45 and 30, on an idle machine of two
  cores). A batch, which could not be asked for then, has none.
"""

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

import gradcheck
from benchmarks.figures import Figure, aligned

QUESTION = "What does our own arithmetic cost, beside ten lines written by hand?"
SLOW = 100e-6
HAND_STEP = 1e-6
GOALS = {10: 8.0, 1_000: 22.0, 20_000: 15.0}
#: Largest number of variables for which the ten lines for a batch, which hold (n, n) numbers, are run.
BATCH_MOST = 2_000


class Watched:
    """A model with a stopwatch.

    Attributes
    ----------
    seconds : float
        Spent inside the model.
    evaluations : int
        Points evaluated; a batch of k counts k.
    """

    def __init__(self, function: Callable[[Any], Any]) -> None:
        self.function = function
        self.seconds = 0.0
        self.evaluations = 0

    def __call__(self, x: Any) -> Any:
        began = time.perf_counter()
        value = self.function(x)
        self.evaluations += 1 if x.ndim == 1 else len(x)
        self.seconds += time.perf_counter() - began
        return value


def cheap(x: Any) -> float:
    """About 1 µs, and every variable counts; in one thread, which ``x @ x`` of many variables is not."""
    return float(np.einsum("i,i", x, x))


def slow(x: Any) -> float:
    """The same in 100 µs."""
    until = time.perf_counter() + SLOW
    value = cheap(x)
    while time.perf_counter() < until:
        pass
    return value


def chain(x: Any) -> Any:
    """Products of neighbours in vectorised numpy, at one point (n,) or at many (k, n)."""
    return np.sin(x[..., 1:] * x[..., :-1]).sum(axis=-1)


def double(x: Any) -> Any:
    """The gradient of `cheap` and `slow`."""
    return 2 * x


def chain_gradient(x: Any) -> Any:
    """The gradient of `chain`."""
    slope = np.cos(x[1:] * x[:-1])
    gradient = np.zeros_like(x)
    gradient[:-1] = slope * x[1:]
    gradient[1:] += slope * x[:-1]
    return gradient


def by_hand(model: Any, x: Any, gradient: Any) -> bool:
    """The ten lines: no more than what people write."""
    claim = gradient(x)
    slope = np.empty(x.size)
    for i in range(x.size):
        up, down = x.copy(), x.copy()
        up[i] += HAND_STEP
        down[i] -= HAND_STEP
        slope[i] = (model(up) - model(down)) / (2 * HAND_STEP)
    return np.allclose(slope, claim, rtol=1e-4, atol=1e-6)


def by_hand_at_once(model: Any, x: Any, gradient: Any) -> bool:
    """The ten lines where the model takes a batch."""
    moves = HAND_STEP * np.eye(x.size)
    slope = (model(x + moves) - model(x - moves)) / (2 * HAND_STEP)
    return np.allclose(slope, gradient(x), rtol=1e-4, atol=1e-6)


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """One model at one size, asked by one verb."""

    model: str
    n: int
    verb: str
    batched: bool = False


MODELS = {"1 µs": (cheap, double), "100 µs": (slow, double), "vectorised": (chain, chain_gradient)}

SCENES = tuple(
    Scene(model=model, n=n, verb=verb, batched=batched)
    for n, model, batched, verbs in (
        *((n, model, False, ("check", "estimate")) for n in (10, 1_000) for model in MODELS),
        *((n, "vectorised", True, ("check", "estimate")) for n in (10, 1_000)),
        (20_000, "1 µs", False, ("check",)),
    )
    for verb in verbs
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Run:
    """Seconds of one run: all in all, and in the model, which was evaluated at so many points."""

    whole: float
    model: float
    evaluations: int

    @property
    def own(self) -> float:
        """Own seconds per evaluation."""
        return (self.whole - self.model) / self.evaluations


def timed(work: Callable[[Watched], Any], function: Callable[[Any], Any]) -> Run:
    """`work` on a watched model, once."""
    model = Watched(function)
    began = time.perf_counter()
    work(model)
    whole = time.perf_counter() - began
    return Run(whole=whole, model=model.seconds, evaluations=model.evaluations)


def measured(scene: Scene, repeats: int, seed: int) -> tuple[Run, Run]:
    """The shortest run of ours, and of the ten lines; the two take turns."""
    function, gradient = MODELS[scene.model]
    x = 1.0 + 0.5 * np.random.default_rng(seed).random(scene.n)
    options = {"batched": True} if scene.batched else {}

    def ours(model: Watched) -> None:
        if scene.verb == "check":
            gradcheck.check(model, at=x, gradient=gradient, on_undecided="pass", **options)
        else:
            gradcheck.estimate(model, at=x, **options)

    def theirs(model: Watched) -> None:
        lines = by_hand_at_once if scene.batched and scene.n <= BATCH_MOST else by_hand
        if not lines(model, x, gradient):
            raise ArithmeticError("the ten lines do not confirm the right gradient")

    runs = [(timed(ours, function), timed(theirs, function)) for _ in range(repeats)]
    return min((run[0] for run in runs), key=lambda run: run.own), min(
        (run[1] for run in runs), key=lambda run: run.own
    )


def run(points: int, seed: int) -> str:
    """The table; `points` limits the repeats (up to 20 for the small sizes)."""
    rows = []
    for scene in SCENES:
        repeats = max(1, min(points, 20 if scene.n <= 100 else 3 if scene.n <= 1_000 else 1))
        ours, hand = measured(scene, repeats, seed)
        ratio = Figure(
            name="", value=ours.own / hand.own, goal=None if scene.batched else GOALS.get(scene.n), form=".2f"
        )
        rows.append(
            (
                f"{scene.verb}{' batched' if scene.batched else ''}, n = {scene.n:,}, {scene.model}",
                f"{ours.evaluations:,}",
                f"{ours.whole:.3g}",
                f"{1e6 * ours.own:.2f}",
                f"{1e6 * hand.own:.2f}",
                ratio.shown,
                ratio.goal_shown,
                f"{100 * ours.own * ours.evaluations / ours.whole:.1f}",
            )
        )
    heading = ("scene", "evaluations", "seconds", "own µs each", "by hand µs", "ratio", "goal", "own %")
    return aligned(heading, rows)
