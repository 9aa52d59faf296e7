"""Gradient-based or gradient-free, which solver, and why: a first advice from the evidence of an audit."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.counsel.solver_steps import steps_to_paste, table_to_paste
from gradcheck.problem.subject import Subject
from gradcheck.records.advice import Advice, Family
from gradcheck.records.arrays import Array
from gradcheck.records.finding import Finding, FindingCode, Severity
from gradcheck.records.report import CheckReport, Scaling, Steps, WitnessRecord
from gradcheck.records.verdict import Verdict
from gradcheck.wording import count, listed, number, seconds

CAUTION = (
    "A verified derivative is not a verified model: this report says whether derivatives fit the program, not whether "
    "the program fits the world. Where people can be hurt, local codes and licensed practice decide."
)
#: Noise beyond this share of the function's values drowns a gradient wherever the function changes little.
LOUD = 1e-3
#: A population method looks at about so many candidates a generation, for so many generations (common practice).
POPULATION, GENERATIONS = 10, 100


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Evidence:
    """What the advice is built from."""

    subject: Subject
    findings: Sequence[Finding]
    claims: Sequence[CheckReport]
    witnesses: Sequence[WitnessRecord]
    steps: Sequence[Steps]
    scaling: Scaling | None
    largest: float
    lines_examined: int
    seconds_per_evaluation: float

    def of(self, *codes: FindingCode, objective_only: bool = False) -> list[Finding]:
        """Findings of these codes that are more than remarks."""
        main = next(iter(self.subject.targets))
        return [
            f
            for f in self.findings
            if f.code in codes and f.severity != Severity.REMARK and (not objective_only or f.function in ("", main))
        ]


def advice(evidence: Evidence) -> Advice:
    """The advice: family, derivative sources, solvers, reasons, tolerances and a snippet."""
    family, reasons = _family(evidence)
    derivatives = tuple(_sources(evidence))
    reasons += _price(evidence)
    return Advice(
        family=family,
        derivatives=derivatives if family == Family.GRADIENT_BASED else (),
        solvers=tuple(_solvers(evidence, family)),
        reasons=tuple(reasons),
        tolerances=_tolerances(evidence),
        snippet=_snippet(evidence),
        caution=CAUTION,
    )


def _family(evidence: Evidence) -> tuple[Family, list[str]]:
    against = []
    unrepeatable = evidence.of(FindingCode.UNREPEATABLE)
    if unrepeatable:
        against.append(f"unrepeatable: {unrepeatable[0].text}")
    whole = set(np.flatnonzero(evidence.subject.domain.integer))
    smooth = [i for i in range(evidence.subject.layout.size) if i not in whole]
    if not smooth:
        against.append("integer-variable: every variable takes whole numbers only.")
    stairs = evidence.of(FindingCode.STAIRCASE, objective_only=True)
    if len({f.variable for f in stairs}) * 2 > max(len(smooth), 1):
        against.append(
            f"staircase: {stairs[0].function} moves in steps along {listed([f.variable or '' for f in stairs])}."
        )
    loud = [s for s in evidence.steps if evidence.largest and s.noise > LOUD * evidence.largest]
    if loud:
        against.append(f"noise: {number(loud[0].noise, digits=2)} in {loud[0].function} drowns small changes.")
    if against:
        return Family.GRADIENT_FREE, against
    looked = evidence.lines_examined > 0
    works = any(w.works for w in evidence.witnesses) or any(c.verdict == Verdict.CONFIRMED for c in evidence.claims)
    reasons = [
        (
            "the objective is smooth enough where it was looked at"
            if looked
            else "nothing speaks against gradients so far"
        )
        + (", and a derivative source works." if works else ", but no derivative source was seen to work.")
    ]
    if not looked:
        reasons.append("no line was looked at for kinks and jumps: the budget or the time ended before.")
    for finding in evidence.of(FindingCode.KINK, FindingCode.JUMP)[:3]:
        place = f" along {finding.variable}" if finding.variable else ""
        reasons.append(
            f"{finding.code}{place}: mend it or keep the run away from it; it does not forbid gradients elsewhere."
        )
    if whole:
        names = listed([evidence.subject.layout.name(int(i)) for i in whole])
        reasons.append(f"integer-variable: fix {names} and solve for each value, or branch and bound.")
    if evidence.of(FindingCode.NOISE, FindingCode.LOW_PRECISION, FindingCode.COARSE_OUTPUT):
        reasons.append("noise: take the steps given here and stop no finer than the tolerances below.")
    return Family.GRADIENT_BASED, reasons


def _first_order(claims: Sequence[CheckReport]) -> list[CheckReport]:
    """Claims that a solver can take its first derivatives from; a confirmed Hessian does not replace them."""
    return [claim for claim in claims if claim.kind not in ("hessian", "hvp")]


def _sources(evidence: Evidence) -> list[str]:
    """For each function the best derivative source, in words."""
    lines = []
    for name in evidence.subject.targets:
        claims = _first_order([c for c in evidence.claims if c.function == name])
        works = [w for w in evidence.witnesses if w.function == name and w.works]
        confirmed = next((c.kind for c in claims if c.verdict == Verdict.CONFIRMED), "")
        if confirmed:
            lines.append(f"{name}: your own {confirmed}, confirmed")
            continue
        wrong = any(c.verdict == Verdict.REFUTED for c in claims)
        best = min(works, key=lambda w: (_rank(w), w.evaluations), default=None)
        unheard = any(w.reason == "not looked at" for w in evidence.witnesses if w.function == name)
        none = "not looked at within the budget" if unheard else "none works; a gradient-free method is left"
        instead = best.source if best else none
        lines.append(
            f"{name}: your own {claims[0].kind} once it is mended; until then {instead}"
            if wrong
            else f"{name}: {instead}"
        )
    return lines


def _rank(witness: WitnessRecord) -> int:
    return ["jax", "autograd", "complex step", "finite difference"].index(witness.source)


def _solvers(evidence: Evidence, family: Family) -> list[str]:
    subject = evidence.subject
    constrained = any(target.limits for target in subject.targets.values())
    whole = subject.domain.integer.any()
    boxed = bool((np.isfinite(subject.domain.lower) | np.isfinite(subject.domain.upper)).any())
    n = subject.layout.size
    if family == Family.GRADIENT_FREE:
        local = "model-based derivative-free trust region" if n <= 50 else "pattern search"
        return [
            local,
            "CMA-ES",
            "Nelder-Mead" if n <= 10 else "particle swarm",
            *(["genetic algorithm"] if whole else []),
        ]
    kinks = evidence.of(FindingCode.KINK, objective_only=True)
    solvers = (
        ["SQP", "interior point"] if constrained else ["L-BFGS with bounds" if boxed else "L-BFGS", "truncated Newton"]
    )
    if kinks:
        solvers.append("gradient sampling or a bundle method, if the run ends at a kink")
    if whole:
        solvers.insert(0, "branch and bound over the whole numbers, with the next one inside")
    return solvers


def _price(evidence: Evidence) -> list[str]:
    """What a gradient costs here beside a population method, in evaluations and seconds."""
    n = evidence.subject.layout.size
    each = evidence.seconds_per_evaluation
    population = POPULATION * n * GENERATIONS
    return [
        f"price: a gradient by central differences takes {count(2 * n, 'evaluation')} ({seconds(2 * n * each)}); a "
        f"gradient method needs some tens of them, a population method about {population} evaluations "
        f"({seconds(population * each)})."
    ]


def _tolerances(evidence: Evidence) -> dict[str, float]:
    """What the noise leaves: differences of values and gradients below these say nothing."""
    main = next((s for s in evidence.steps if s.function == next(iter(evidence.subject.targets))), None)
    if main is None:
        return {}
    subject = evidence.subject
    # Steps leave out the whole-number variables, and some of very many.
    sizes = {subject.layout.name(i): subject.domain.scale[i] for i in range(subject.layout.size)}
    size = np.array([sizes[name] for name in main.names])

    def norm(left: Array) -> float:
        return float(10 * np.sqrt(np.nansum((left * size) ** 2)))

    return {
        "change_of_objective": float(10 * main.noise),
        "norm_of_scaled_gradient": norm(main.central_error),
        "norm_of_scaled_gradient_by_forward_differences": norm(main.forward_error),
    }


def _snippet(evidence: Evidence) -> str:
    """Steps, scaling and tolerances as Python to paste."""
    subject, lines = evidence.subject, []
    if evidence.scaling is not None:
        lines += table_to_paste("scale", "divide each variable by", evidence.scaling.names, evidence.scaling.variables)
    names = [subject.layout.name(i) for i in range(subject.layout.size)] if evidence.steps else []
    lines += steps_to_paste(evidence.steps, names, subject.start)
    for name, value in _tolerances(evidence).items():
        lines.append(f"{name} = {value:.1e}  # stop no finer")
    return "\n".join(lines)
