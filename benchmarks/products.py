"""Are right Hessians and products with vectors confirmed, wrong ones refuted, and is the planted mistake named?

Models: the published least-squares problems of More, Garbow & Hillstrom (1981) with Jacobians written by hand. Their
sums of squares have Hessians by the complex step of the gradient written by hand, exact to rounding, where that takes
complex numbers. Points: the standard start, then random ones around it.
"""

import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

import gradcheck
from benchmarks.figures import Figure, aligned, side_by_side
from gradcheck import DiagnosisCode as Code
from gradcheck import Verdict
from tests.problem_sets.more_garbow_hillstrom import RESIDUALS, SUMS_OF_SQUARES

QUESTION = "Are right Hessians and products confirmed, wrong ones refuted, and is the mistake named?"
#: A planted mistake that changes no entry by more than this share of the largest one is none.
MATERIAL = 1e-5
#: Points of each problem at most: each gets some forty claims.
POINTS_MOST = 3
#: How far random points are from the standard start, in sizes of the variables.
AROUND = 0.1

Planted = tuple[str, Callable[..., Any], frozenset[Code]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What was said about one claim: `planted` is empty for a right one."""

    way: str
    planted: str
    verdict: Verdict
    named: bool
    model: str
    codes: tuple[str, ...]


def run(points: int, seed: int) -> str:
    """The report as text."""
    points = min(points, POINTS_MOST)
    outcomes = [*_hessians(points, seed), *_products(points, seed)]
    ways = list(dict.fromkeys(outcome.way for outcome in outcomes))
    summary = side_by_side({way: _figures([o for o in outcomes if o.way == way]) for way in ways})
    return f"{summary}\n\n{_by_mistake(outcomes)}\n\n{_confusions(outcomes)}"


def _figures(outcomes: list[Outcome]) -> list[Figure]:
    right = [o for o in outcomes if not o.planted]
    wrong = [o for o in outcomes if o.planted]

    def share(of: list[Outcome], verdict: Verdict) -> float:
        return 100 * sum(o.verdict == verdict for o in of) / max(len(of), 1)

    return [
        Figure(name="right claims", value=len(right), form="d"),
        Figure(name="of these confirmed, %", value=share(right, Verdict.CONFIRMED), form=".1f"),
        Figure(name="of these refuted", value=sum(o.verdict == Verdict.REFUTED for o in right), goal=0, form="d"),
        Figure(name="wrong claims", value=len(wrong), form="d"),
        Figure(name="of these refuted, %", value=share(wrong, Verdict.REFUTED), goal=100, at_least=True, form=".1f"),
        Figure(
            name="of these named right, %",
            value=100 * sum(o.named for o in wrong) / max(len(wrong), 1),
            goal=95,
            at_least=True,
            form=".1f",
        ),
    ]


def _by_mistake(outcomes: list[Outcome]) -> str:
    rows = []
    for way, planted in dict.fromkeys((o.way, o.planted) for o in outcomes if o.planted):
        own = [o for o in outcomes if (o.way, o.planted) == (way, planted)]
        refuted = sum(o.verdict == Verdict.REFUTED for o in own)
        rows.append((f"{way}: {planted}", str(len(own)), str(refuted), str(sum(o.named for o in own))))
    return aligned(("planted", "claims", "refuted", "named"), rows)


def _confusions(outcomes: list[Outcome]) -> str:
    """What was said instead, where the mistake was not named."""
    missed = Counter(
        (o.way, o.planted, ", ".join(o.codes) or str(o.verdict), o.model)
        for o in outcomes
        if (o.planted and not o.named) or (not o.planted and o.verdict == Verdict.REFUTED)
    )
    rows = [(f"{way}: {planted or 'right'}", said, model, str(n)) for (way, planted, said, model), n in missed.items()]
    return aligned(("not named", "said instead", "model", "times"), rows) if rows else "Nothing was named wrongly."


# --- Hessians --------------------------------------------------------------------------------------------------------


def _hessians(points: int, seed: int) -> Iterator[Outcome]:
    for problem in SUMS_OF_SQUARES:
        hessian = _complex_step(problem.gradient, problem.x0)
        if hessian is None or problem.x0.size > 12:
            continue
        for x in _points(problem.x0, points, seed):
            if not np.isfinite(problem.function(x)):
                continue
            for planted, change, codes in [("", lambda h, g: h, frozenset()), *HESSIAN_MISTAKES]:
                claim = _changed(hessian, problem.gradient, change)
                if planted and not _material(claim(x), hessian(x)):
                    continue
                for way, more in (("by gradient", {"gradient": problem.gradient}), ("by values", {})):
                    if way == "by values" and problem.x0.size > 6:
                        continue
                    yield _asked(way, planted, codes, problem, x, {"hessian": claim} | more)


def _changed(hessian: Callable[..., Any], gradient: Callable[..., Any], change: Callable[..., Any]) -> Any:
    return lambda x: change(hessian(x).copy(), np.asarray(gradient(x)))


def _complex_step(gradient: Callable[..., Any], x0: Any) -> Callable[..., Any] | None:
    def hessian(x: Any) -> Any:
        moved = x + 1e-25j * np.eye(x.size)
        found = np.array([np.imag(np.asarray(gradient(row), dtype=complex)) / 1e-25 for row in moved])
        return (found + found.T) / 2

    with warnings.catch_warnings():
        warnings.simplefilter("error")
        try:
            return hessian if np.isfinite(hessian(x0)).all() else None
        except Exception:  # its Jacobian is written into a real array
            return None


def _entry(i: int, j: int, factor: float, *, both: bool = True) -> Callable[..., Any]:
    def change(h: Any, g: Any) -> Any:
        h[i, j] *= factor
        if both:
            h[j, i] = h[i, j]
        return h

    return change


HESSIAN_MISTAKES: tuple[Planted, ...] = (
    ("sign of all", lambda h, g: -h, frozenset({Code.SIGN_FLIPPED})),
    ("all doubled", lambda h, g: 2 * h, frozenset({Code.CONSTANT_FACTOR})),
    ("diagonal doubled", lambda h, g: h + np.diag(np.diag(h)), frozenset({Code.CONSTANT_FACTOR})),
    ("mixed terms doubled", lambda h, g: 2 * h - np.diag(np.diag(h)), frozenset({Code.CONSTANT_FACTOR})),
    ("mixed terms left out", lambda h, g: np.diag(np.diag(h)), frozenset({Code.ZERO_ENTRY})),
    ("upper triangle only", lambda h, g: np.triu(h), frozenset({Code.ZERO_ENTRY})),
    ("lower triangle only", lambda h, g: np.tril(h), frozenset({Code.ZERO_ENTRY})),
    ("one mixed entry halved", _entry(0, 1, 0.5), frozenset({Code.CONSTANT_FACTOR})),
    ("sign of one entry", _entry(0, 0, -1.0), frozenset({Code.SIGN_FLIPPED})),
    ("one entry of one side", _entry(0, 1, -1.0, both=False), frozenset({Code.SIGN_FLIPPED})),
    ("outer product", lambda h, g: np.outer(g, g), frozenset({Code.MISSING_PATH})),
)

# --- products --------------------------------------------------------------------------------------------------------


def _products(points: int, seed: int) -> Iterator[Outcome]:
    for problem in RESIDUALS:
        for x in _points(problem.x0, points, seed):
            jacobian = np.asarray(problem.jacobian(x), dtype=float)
            if not np.isfinite(jacobian).all():
                continue
            for kind, matrix in (("jvp", jacobian), ("vjp", jacobian.T)):
                for planted, change, codes in [("", lambda p, v, m: p, frozenset()), *PRODUCT_MISTAKES]:
                    if planted == "other side" and (matrix.shape[0] != matrix.shape[1] or _alike(matrix)):
                        continue
                    claim = _product(matrix, change)
                    yield _asked(kind, planted, codes, problem, x, {kind: claim})


def _product(matrix: Any, change: Callable[..., Any]) -> Any:
    return lambda x, v: change(matrix @ v, v, matrix)


def _alike(matrix: Any) -> bool:
    return not _material(matrix, matrix.T)


def _first_zero(product: Any, v: Any, matrix: Any) -> Any:
    row = int(np.argmax(np.abs(matrix).max(axis=1)))
    product = product.copy()
    product[row] = 0.0
    return product


PRODUCT_MISTAKES: tuple[Planted, ...] = (
    ("vector ignored", lambda p, v, m: m.sum(axis=1), frozenset({Code.IGNORES_COTANGENT})),
    ("vector normalised", lambda p, v, m: p / (np.linalg.norm(v) or 1.0), frozenset({Code.IGNORES_COTANGENT})),
    ("other side", lambda p, v, m: m.T @ v, frozenset({Code.TRANSPOSED})),
    ("sign", lambda p, v, m: -p, frozenset({Code.SIGN_FLIPPED})),
    ("doubled", lambda p, v, m: 2 * p, frozenset({Code.CONSTANT_FACTOR})),
    ("one entry zero", _first_zero, frozenset({Code.ZERO_ENTRY})),
    ("constant added", lambda p, v, m: p + 0.1 * np.abs(m).max(), frozenset({Code.UNKNOWN})),
    ("absolute value", lambda p, v, m: m @ np.abs(v), frozenset({Code.UNKNOWN})),
)


def _material(changed: Any, right: Any) -> bool:
    return bool(np.abs(changed - right).max() > MATERIAL * np.abs(right).max())


def _points(x0: Any, points: int, seed: int) -> list[Any]:
    rng = np.random.default_rng(seed)
    size = np.where(x0 != 0, np.abs(x0), 1.0)
    return [np.array(x0), *(x0 + AROUND * size * rng.uniform(-1, 1, x0.size) for _ in range(points - 1))]


def _asked(way: str, planted: str, codes: frozenset[Code], problem: Any, x: Any, claims: dict[str, Any]) -> Outcome:
    report = gradcheck.check(problem.function, x, on_refuted="return", on_undecided="pass", **claims)
    part = next((p for p in report.parts if p.kind == "hessian"), report)
    found = {diagnosis.code for diagnosis in part.diagnoses}
    return Outcome(
        way=way,
        planted=planted,
        verdict=part.verdict,
        named=bool(found) and found <= codes,
        model=problem.name,
        codes=tuple(sorted(map(str, found))),
    )
