"""Are wrong, misplaced and missing entries of a sparse Jacobian told apart, and at what price?

What counts how:

- In each claim three mistakes are planted at random places: a wrong value (a factor of 2, −1 or 0.3, or 1e-3 off), one
  value that stands a few columns beside its place, one entry that is left out.
- Told apart: the three lists of the report hold these places and no others. A false accusation is any other place in
  the lists, or refuted.
- A right entry that happens to be nearly zero beside the terms it consists of (1e-6 of them, say) cannot be told to a
  relative 1e-8 by any difference: it is undecided, and with 500,000 entries there are some of these in every claim.
- Evaluations are those of the model, the one at the point itself included; seconds are of the whole check, on the
  machine at hand, and have no goal.
"""

import time
from dataclasses import dataclass
from typing import Any

import numpy as np

import gradcheck
from benchmarks.figures import Figure, median, percent, side_by_side
from benchmarks.sparse_corpus import SHAPES, Planted, model_of, planted

QUESTION = "Are wrong, misplaced and missing entries of a sparse Jacobian told apart, and at what price?"
FACTORS = (2.0, -1.0, 0.3)
SLIGHT = 1.001
OF_RIGHT = "evaluations, right claim"
#: Evaluations for a right claim of band 5, and for one with three mistakes.
RIGHT_MOST, WRONG_MOST = 40, 300


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What one check of a claim with planted mistakes, or of a right one, came to."""

    verdict: str
    told_apart: bool
    false: int
    entries: int
    undecided: int
    evaluations: int
    seconds: float


def outcome_of(model: Any, claim: Any, mistakes: Planted | None, seed: int) -> Outcome:
    """Check, and compare the lists with what was planted."""
    began = time.perf_counter()
    report = gradcheck.check(
        model.function, at=model.x0, jacobian=claim, seed=seed, on_refuted="return", on_undecided="pass"
    )
    seconds = time.perf_counter() - began
    found = report.sparsity
    assert found is not None  # every claim here is sparse
    places = {tuple(place) for part in (found.wrong, found.missing) for place in part.tolist()}
    told = mistakes is None or (
        mistakes.wrong in {tuple(place) for place in found.wrong.tolist()}
        and [tuple(place) for place in found.misplaced.tolist()] == [mistakes.misplaced]
        and mistakes.missing in {tuple(place) for place in found.missing.tolist()}
        and places == mistakes.places
    )
    planted_places = set() if mistakes is None else mistakes.places
    return Outcome(
        verdict=str(report.verdict),
        told_apart=told,
        false=len(places - planted_places) + len(found.unexplained_rows),
        entries=found.stored,
        undecided=found.undecided,
        evaluations=report.evaluations,
        seconds=seconds,
    )


def column(shape: str, n: int, seeds: int, seed: int, limits: bool) -> list[Figure]:
    """Figures of one shape at one size."""
    right, wrong, slight = [], [], []
    for k in range(seeds):
        model = model_of(shape, SHAPES[shape](n, seed + k), seed + k)
        jacobian = model.jacobian(model.x0)
        if k < max(1, seeds // 4):
            right.append(outcome_of(model, jacobian, None, k))
        mistakes = planted(jacobian, FACTORS[k % len(FACTORS)], 1000 + seed + k)
        wrong.append(outcome_of(model, mistakes.claim, mistakes, k))
        if k < max(1, seeds // 2):
            mistakes = planted(jacobian, SLIGHT, 2000 + seed + k)
            slight.append(outcome_of(model, mistakes.claim, mistakes, k))
    everything = right + wrong + slight
    return [
        Figure(name="claims", value=len(everything), form="d"),
        Figure(
            name="right claims confirmed, %",
            value=percent([o.verdict == "confirmed" for o in right]),
            goal=100.0,
            at_least=True,
        ),
        Figure(name="told apart (factors), %", value=percent([o.told_apart for o in wrong]), goal=100.0, at_least=True),
        Figure(
            name="told apart (1e-3 off), %", value=percent([o.told_apart for o in slight]), goal=100.0, at_least=True
        ),
        Figure(
            name="right entries undecided, per million",
            value=1e6 * sum(o.undecided for o in right) / sum(o.entries for o in right),
            form=".1f",
        ),
        Figure(name="innocents accused", value=sum(o.false for o in everything), goal=0, form="d"),
        Figure(
            name=OF_RIGHT,
            value=median(o.evaluations for o in right),
            goal=RIGHT_MOST if limits else None,
        ),
        Figure(
            name="evaluations, three mistakes",
            value=median(o.evaluations for o in wrong),
            goal=WRONG_MOST if limits else None,
        ),
        Figure(name="evaluations, at most", value=max(o.evaluations for o in everything), form="d"),
        Figure(name="seconds, right claim", value=median(o.seconds for o in right), form=".2f"),
        Figure(name="seconds, three mistakes", value=median(o.seconds for o in wrong), form=".2f"),
    ]


def run(points: int, seed: int) -> str:
    """All tables as text; `points` claims of each kind and size, fewer of the largest."""
    sizes = {f"n = {n:,}": column("band 5", n, min(points, most), seed, True) for n, most in SIZES}
    shapes = {shape: column(shape, 2_500, max(1, points // 3), seed, False) for shape in SHAPES if shape != "band 5"}
    right = [next(one.value for one in figures if one.name == OF_RIGHT) for figures in sizes.values()]
    growth = right[-1] / right[0]
    constant = Figure(name="evaluations at the largest n over those at the smallest", value=growth, goal=1.1)
    return "\n\n".join(
        [
            "A band of 5 diagonals:",
            side_by_side(sizes),
            f"{constant.name}: {constant.shown} ({constant.goal_shown})",
            "Other shapes, n = 2,500:",
            side_by_side(shapes),
        ]
    )


#: Sizes of the band, with how many claims of each kind are checked at most.
SIZES = ((1_000, 1_000), (10_000, 12), (100_000, 4))
assert np.all(np.diff([n for n, _ in SIZES]) > 0)
