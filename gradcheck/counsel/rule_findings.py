"""What the trials of an automatic derivative mean: likely mistakes, findings and reasons, with their sentences."""

from collections.abc import Callable, Mapping, Sequence

import numpy as np

from gradcheck.claims.transforms import Broken, Off, Scaling, Tried
from gradcheck.records.arrays import Array
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import count, listed, number, with_bound

Name = Callable[[int, int], str]
#: Entries that are named one by one; more are shown by nobody.
NAMES_MOST = 1000

_WAYS = {
    "reverse": "in reverse mode",
    "forward": "in forward mode",
    "jit": "under jit",
    "vmap points": "under vmap (a batch of points)",
    "vmap cotangents": "under vmap (a batch of cotangents at one point)",
    "vmap tangents": "under vmap (a batch of tangents at one point)",
    "scan": "inside scan",
    "checkpoint": "inside checkpoint",
    "between": "if another point is passed forward before the backward pass",
    "second": "in second order",
    "single": "in single precision",
}

_MENDS = {
    "jit": "Look for Python code that does something else while it is traced, and for numbers kept from an earlier "
    "call.",
    "vmap": "Look at the batching rule, and at host code that is handed the whole batch: sums, means and shapes there.",
    "scan": "Look for Python code that does something else while it is traced.",
    "checkpoint": "Look for what the rule keeps outside its residuals: the forward pass is run twice here.",
    "between": "The rule keeps its residuals outside (an attribute, a global); return them from the forward pass.",
    "forward": "Both modes must come from one rule; give the rule as custom_jvp, or mend the one for forward mode.",
    "reverse": "Both modes must come from one rule; look at the transposed or reverse rule.",
}

_RESTRICTIONS = {
    "forward": "Keep to reverse mode, or give the rule as custom_jvp, from which jax makes both modes.",
    "reverse": "Keep to forward mode (jvp, jacfwd); reverse mode needs loops whose length is known beforehand.",
    "jit": "Keep it out of compiled code, or put lax.cond and jnp.where where numbers are needed while it is traced.",
    "vmap": "Loop over the batch instead, or give the operation that has none a batching rule.",
    "second": "Take second derivatives by differences of the gradient, or write the rule with operations that have "
    "rules themselves.",
}


def way_in_words(way: str, parts: Sequence[str]) -> str:
    """A way of differentiating: ``under vmap over b alone``."""
    if way.startswith("vmap argument "):
        return f"under vmap over {parts[int(way.rpartition(' ')[2])]} alone"
    return _WAYS.get(way, f"under {way}")


def _listed(phrases: Sequence[str]) -> str:
    return listed(phrases, limit=len(phrases), width=80)


def reason_of(broken: Broken, parts: Sequence[str]) -> str:
    """Why entries that look right are refuted: ``right alone, wrong under jit: 0.5 where 1 is due``."""
    what = f"{'the value is ' if broken.place[1] < 0 else ''}{number(broken.got)} where {number(broken.due)} is due"
    if broken.way not in ("reverse", "forward"):
        return f"right alone, wrong {way_in_words(broken.way, parts)}: {what}"
    if not _of_size(broken):
        other = "forward" if broken.way == "reverse" else "reverse"
        if broken.claimed_right or broken.way == "reverse":
            return f"right in {other} mode, wrong {_WAYS[broken.way]}: {what}"
        return f"wrong {_WAYS[broken.way]} as well: {what}"
    size = "tangent" if broken.way == "forward" else "cotangent"
    times = number(broken.factor) if broken.factor else "zero"
    if size == "cotangent" and len(broken.wrong) == 1:
        return (
            f"right for a cotangent of 1, wrong for {times}: {what}"
            if broken.claimed_right
            else (f"wrong for a cotangent of {times}: {what}")
        )
    which = f"a random one{'' if broken.factor == 1 else f' times {times}'}"
    if broken.claimed_right:
        return f"right for unit {size}s, wrong for others ({which}): {what}"
    return f"wrong for other {size}s ({which}): {what}"


def _of_size(broken: Broken) -> bool:
    """Whether it is the size of the cotangent or tangent that the rule does not follow."""
    return broken.way in ("reverse", "forward") and (broken.scaling != Scaling.LINEAR or broken.factor == 0)


def rule_diagnoses(every: Sequence[Broken], name: Name, parts: Sequence[str], source: str) -> list[Diagnosis]:
    """The likely mistakes: one for the cotangent, one for the tangent, and one for all transformations that break."""
    modes = [broken for broken in every if broken.way in ("reverse", "forward")]
    others = [broken for broken in every if broken.way not in ("reverse", "forward")]
    diagnoses = [_of_mode(broken, name, parts, source) for broken in modes]
    if others:
        first = others[0]
        names = _names(others, name)
        also = list(dict.fromkeys(way_in_words(broken.way, parts) for broken in others[1:]))
        more = f" It goes wrong {_listed(also)} as well." if also else ""
        mend = _MENDS[first.way.partition(" ")[0]]
        text = f"{listed(names)}: {reason_of(first, parts)}.{more} {mend}"
        diagnoses.append(Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=names))
    return diagnoses


def _of_mode(broken: Broken, name: Name, parts: Sequence[str], source: str) -> Diagnosis:
    names = _names([broken], name)
    told = f"{listed(names)}: {reason_of(broken, parts)}"
    if not _of_size(broken):
        return Diagnosis(code=DiagnosisCode.UNKNOWN, text=f"{told}. {_MENDS[broken.way]}", entries=names)
    size = "cotangent" if broken.way == "reverse" else "tangent"
    text = (
        f"{told}. {_of_scaling(broken, size)} Multiply the local derivative by the incoming {size}, once: {source} "
        f"hands the rule other {size}s as soon as it stands inside a larger model."
    )
    code = DiagnosisCode.IGNORES_COTANGENT if size == "cotangent" else DiagnosisCode.UNKNOWN
    return Diagnosis(code=code, text=text, entries=names)


def _names(every: Sequence[Broken], name: Name) -> tuple[str, ...]:
    wrong = np.logical_or.reduce([broken.wrong for broken in every])
    return tuple(name(int(i), int(j)) for i, j in np.argwhere(wrong)[:NAMES_MOST])


def _of_scaling(broken: Broken, size: str) -> str:
    rule = f"The {'reverse' if broken.way == 'reverse' else 'forward'} rule"
    if broken.scaling == Scaling.CONSTANT:
        return f"{rule} gives the same for every {size}."
    if broken.scaling == Scaling.LINEAR:
        return f"{rule} divides by its {size}, or by something that vanishes with it."
    if broken.scaling == Scaling.POWER and broken.power == 1:
        return f"{rule} loses the sign of its {size}."
    if broken.scaling == Scaling.POWER and broken.power == 0:
        return f"{rule} takes only the sign of its {size}."
    if broken.scaling == Scaling.POWER:
        return f"{rule} grows with the power {number(broken.power)} of its {size}."
    return f"{rule} does not scale with its {size}: a part of it does not see the {size}, or sees it changed."


def short_diagnosis(names: tuple[str, ...], source: str) -> Diagnosis:
    """The reverse rule gives single precision in a model of double precision."""
    text = (
        f"{listed(names)}: {source}'s rule returns numbers of single precision (float32) where the model computes in "
        "double precision, so the gradient has about 7 digits; look for a dtype or a cast inside the rule."
    )
    return Diagnosis(code=DiagnosisCode.SINGLE_PRECISION, text=text, entries=names)


def short_finding(names: tuple[str, ...], function: str, point: Array, source: str) -> Finding:
    """The same where the digits are enough for the tolerance."""
    return Finding(
        code=FindingCode.LOW_PRECISION,
        severity=Severity.HAZARD,
        function=function,
        variable=names[0] if len(names) == 1 else None,
        where=Location(point=point),
        text=short_diagnosis(names, source).text,
        remedy="Let the rule's results follow the precision of its arguments.",
    )


def restriction(
    ways: Sequence[str], words: str, function: str, point: Array, parts: Sequence[str], source: str
) -> Finding:
    """Ways in which the model cannot be differentiated at all: they limit the use of the derivative, no more."""
    phrases = list(dict.fromkeys(way_in_words(way, parts) for way in ways))
    return Finding(
        code=FindingCode.CRASH,
        severity=Severity.REMARK,
        function=function,
        variable=None,
        where=Location(point=point),
        text=f"{source} cannot differentiate {function} {_listed(phrases)}: {words}",
        remedy=_RESTRICTIONS.get(ways[0].partition(" ")[0], f"Do without {ways[0]} around it."),
    )


def wrong_second(second: Off, function: str, names: Sequence[str], point: Array, source: str) -> Finding:
    """A right gradient with a wrong second derivative."""
    return Finding(
        code=FindingCode.WITNESS_CONFLICT,
        severity=Severity.HAZARD,
        function=function,
        variable=names[0] if len(names) == 1 else None,
        where=Location(point=point),
        evidence={"by_" + source: second.got, "by_differences": second.due, "bound": second.bound},
        text=(
            f"the gradient of {function} is not refuted, but its second derivative by {source} is wrong for "
            f"{listed(names)}: along a random direction it is {number(second.got)} where differences of the gradient "
            f"give {with_bound(second.due, second.bound)}."
        ),
        remedy=(
            "Look for stop_gradient, constants or wrong second rules inside the rule; until then take no Hessian, "
            "Hessian-vector product or Newton step through it."
        ),
    )


def lost_in_single(single: Off, function: str, names: Sequence[str], point: Array, source: str) -> Finding:
    """What single precision, the default, makes of a derivative that is right in double precision."""
    overflow = not abs(single.got) < float("inf")
    what = (
        f"is {number(single.got)} in single precision, {source}'s default, where double precision gives "
        f"{number(single.due)}"
        if overflow
        else f"has hardly a digit left in single precision, {source}'s default: {number(single.got)} where double "
        f"precision gives {number(single.due)}"
        if abs(single.got - single.due) > 0.1 * abs(single.due)
        else f"keeps few digits in single precision, {source}'s default: {number(single.got, 8)} where double "
        f"precision gives {number(single.due, 8)}"
    )
    return Finding(
        code=FindingCode.NON_FINITE if overflow else FindingCode.LOW_PRECISION,
        severity=Severity.HAZARD,
        function=function,
        variable=names[0] if len(names) == 1 else None,
        where=Location(point=point),
        evidence={"single": single.got, "double": single.due},
        text=f"the derivative of {function} by {listed(names)} {what}.",
        remedy=(
            "Compute this part in double precision, or in a form that keeps its digits (logaddexp, log1p, expm1, "
            "centred sums, scaled units); the model was checked in double precision."
        ),
    )


def notice_of(tried: Tried, source: str) -> str:
    """What was tried, in one line."""
    groups: Mapping[str, str] = {
        "reverse": "other cotangents",
        "forward": "tangents",
        "jit reverse": "jit",
        "vmap": "vmap",
        "scan": "scan and checkpoint",
        "second": "second order",
        "single": "single precision",
    }
    ways = [way if way == "jit reverse" else way.removeprefix("jit ") for way in tried.ways]
    done = [word for key, word in groups.items() if any(way == key or way.startswith(f"{key} ") for way in ways)]
    if not done:
        return ""
    rest = "" if tried.complete else "; the budget or the time ended before more could be tried"
    if tried.equations:
        rest += (
            f"; the other transformations were left out, because the program is large "
            f"({count(tried.equations, 'equation')}): check rules of your own apart"
        )
    return f"{source} was also tried with {listed(done, limit=len(done))}: {count(tried.sweeps, 'sweep')}{rest}"
