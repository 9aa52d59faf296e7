"""Does a check say the same whatever its seed is?

Ten claims of different kinds and sizes, each right and with one mistake that must be seen, are checked over and over;
only the seed changes, and with it every random direction, vector and place. Counted are the different verdicts, and the
checks whose refuted entries differ from those of the first. Fifty seeds a point: ``--points 20`` is a thousand.
"""

import math
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy.sparse

import gradcheck
from benchmarks.figures import Figure, aligned, side_by_side
from gradcheck import Verdict

QUESTION = "Does a check say the same whatever its seed is?"
SEEDS_A_POINT = 50


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One call of `check` without its seed, for a right and a wrong claim.

    Attributes
    ----------
    name : str
    function : callable
    at : array
    right, wrong : dict
        Claims, and other options.
    """

    name: str
    function: Callable[..., Any]
    at: Any
    right: dict[str, Any]
    wrong: dict[str, Any]


def run(points: int, seed: int) -> str:
    """All figures as text."""
    seeds = range(seed, seed + SEEDS_A_POINT * points)
    rows, worst = [], 0
    wrongly = 0
    for case in cases():
        for what, claim in (("right", case.right), ("wrong", case.wrong)):
            told = Counter(_told(case, claim, each) for each in seeds)
            verdicts = {verdict for verdict, _ in told}
            expected = Verdict.CONFIRMED if what == "right" else Verdict.REFUTED
            wrongly += sum(often for (verdict, _), often in told.items() if verdict != expected)
            worst = max(worst, len(verdicts))
            usual = told.most_common(1)[0][1]
            rows.append((f"{case.name}, {what}", ", ".join(sorted(verdicts)), str(len(seeds) - usual)))
    figures = [
        Figure(name="most different verdicts on one claim", value=worst, goal=1),
        Figure(name="checks with another verdict than is due", value=wrongly, goal=0),
    ]
    table = aligned(("claim", "verdicts", "checks that name other entries"), rows)
    return f"{side_by_side({f'{len(seeds)} seeds': figures})}\n\n{table}"


def _told(case: Case, claim: dict[str, Any], seed: int) -> tuple[Verdict, tuple[str, ...]]:
    report = gradcheck.check(case.function, case.at, **claim, seed=seed, on_refuted="return", on_undecided="pass")
    parts = report.parts or (report,)
    named = (
        name
        for part in parts
        for name, verdict in zip(part.entries.name, part.entries.verdict, strict=True)
        if verdict == Verdict.REFUTED and "random" not in name
    )
    return report.verdict, tuple(sorted(named))


def cases() -> tuple[Case, ...]:
    """The ten claims."""
    few, many, sparse = np.linspace(0.3, 1.7, 12), np.linspace(0.2, 2.0, 3000), np.linspace(0.4, 1.6, 200)
    return (
        _case("gradient, all entries", _bowl, few, "gradient", _bowl_gradient),
        _case("gradient, 3 directions", _bowl, few, "gradient", _bowl_gradient, directions=3),
        _case("gradient, n = 3,000", _bowl, many, "gradient", _bowl_gradient),
        _case("gradient, n = 3,000, box", _bowl, many, "gradient", _bowl_gradient, bounds=(many - 0.4, many + 0.01)),
        _case("jacobian, all entries", _chain, few, "jacobian", _chain_jacobian),
        _case("jacobian, sparse", _chain, sparse, "jacobian", _sparse_jacobian),
        _case("hessian", _bowl, few[:5], "hessian", _bowl_hessian),
        Case(
            name="jvp",
            function=_chain,
            at=few,
            right={"jvp": lambda x, v: _chain_jacobian(x) @ v},
            wrong={"jvp": lambda x, v: _spoilt(_chain_jacobian(x)) @ v},
        ),
        Case(
            name="vjp",
            function=_chain,
            at=few,
            right={"vjp": lambda x, w: w @ _chain_jacobian(x)},
            wrong={"vjp": lambda x, w: w @ _spoilt(_chain_jacobian(x))},
        ),
        Case(
            name="gradient and hvp",
            function=_bowl,
            at=few,
            right={"gradient": _bowl_gradient, "hvp": lambda x, v: _bowl_hessian(x) @ v},
            wrong={"gradient": _bowl_gradient, "hvp": lambda x, v: _spoilt(_bowl_hessian(x)) @ v},
        ),
    )


def _case(name: str, function: Callable[..., Any], at: Any, kind: str, claim: Callable[..., Any], **more: Any) -> Case:
    return Case(
        name=name,
        function=function,
        at=at,
        right={kind: claim, **more},
        wrong={kind: lambda x: _spoilt(claim(x)), **more},
    )


def _spoilt(claim: Any) -> Any:
    """The claim with its second entry (second of the second row) a thousandth off."""
    place = (1, 1) if claim.ndim == 2 else 1
    if scipy.sparse.issparse(claim):
        claim = claim.tolil()
    claim[place] *= 1.001
    return claim.tocsr() if scipy.sparse.issparse(claim) else claim


def _bowl(x: Any) -> float:
    return float(np.sum(np.exp(0.5 * x)) + np.sum(x[1:] * x[:-1]) + math.sin(x.mean()) * x.size)


def _bowl_gradient(x: Any) -> Any:
    gradient = 0.5 * np.exp(0.5 * x) + math.cos(x.mean())
    gradient[1:] += x[:-1]
    gradient[:-1] += x[1:]
    return gradient


def _bowl_hessian(x: Any) -> Any:
    hessian = np.diag(0.25 * np.exp(0.5 * x)) - math.sin(x.mean()) / x.size
    return hessian + np.eye(x.size, k=1) + np.eye(x.size, k=-1)


def _chain(x: Any) -> Any:
    return x**3 + np.sin(np.roll(x, -1)) * x


def _chain_jacobian(x: Any) -> Any:
    return _sparse_jacobian(x).toarray()


def _sparse_jacobian(x: Any) -> Any:
    n, following = x.size, np.roll(x, -1)
    i = np.arange(n)
    values = np.concatenate([3 * x**2 + np.sin(following), np.cos(following) * x])
    return scipy.sparse.csr_array((values, (np.tile(i, 2), np.concatenate([i, (i + 1) % n]))), shape=(n, n))
