"""Findings about the exactness of values: one a code and function, whoever saw it first."""

from collections.abc import Sequence

import numpy as np

from gradcheck.health.line_report import Irregularity, LineReport
from gradcheck.problem.subject import Subject
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.records.noise import FINDING_OF, NoiseKind
from gradcheck.witnesses.noise_reading import OutputNoise
from gradcheck.wording import number

Evidence = dict[str, float | int | str]

_CODES = tuple(FINDING_OF.values())
#: Where values are unrepeatable, no other kind can be told.
_EXCLUDES = {kind: {code for code in _CODES if code != FINDING_OF[kind]} for kind in FINDING_OF}


def noise_findings(
    subject: Subject, function: str, lines: Sequence[LineReport], heard: OutputNoise | None
) -> list[Finding]:
    """What is wrong with the exactness of a function's values.

    Parameters
    ----------
    subject, function
    lines : sequence of LineReport
        What was seen along lines: values far from the point may be worse than those around it.
    heard : OutputNoise or None
        The noise around the start point. Where it names a kind, lines cannot say another one of the same output.

    Returns
    -------
    list of Finding
        At most one a code: that of the output with the largest figure.
    """
    findings = []
    for code in _CODES:
        near = _near(heard, code)
        if near is not None:
            findings.append(_finding(subject, function, code, *near))
            continue
        seen = [one for line in lines for one in line.of_kind(code) if not _excluded(heard, one.output, code)]
        if seen:
            worst = max(seen, key=lambda one: abs(np.nan_to_num(one.size)))
            findings.append(_finding(subject, function, code, abs(worst.size), _of_line(worst)))
    return findings


def _near(heard: OutputNoise | None, code: FindingCode) -> tuple[float, Evidence] | None:
    """Size and evidence of the noise around the point, if it is of the kind that makes this code."""
    if heard is None:
        return None
    outputs = [i for i, kind in enumerate(heard.kind) if FINDING_OF.get(kind) == code]
    if not outputs:
        return None
    sizes = {FindingCode.COARSE_OUTPUT: heard.quantum, FindingCode.UNREPEATABLE: heard.apart}.get(code, heard.level)
    worst = max(outputs, key=lambda i: float(np.nan_to_num(sizes[i])))
    size, level, largest = float(sizes[worst]), float(heard.level[worst]), float(heard.largest[worst])
    evidence: Evidence = {"size": size, "relative_size": size / largest if largest > 0 else float("nan")}
    evidence |= {"standard_deviation": level, "kind": str(heard.kind[worst]), "output": worst, "outputs": len(outputs)}
    return size, evidence


def _excluded(heard: OutputNoise | None, output: int, code: FindingCode) -> bool:
    """Whether the noise around the point is of a kind that leaves no room for this code."""
    kind = NoiseKind.NOT_EXAMINED if heard is None else heard.kind[output]
    return code in _EXCLUDES.get(kind, ()) and code != FindingCode.UNREPEATABLE


def _of_line(worst: Irregularity) -> Evidence:
    return {"size": abs(worst.size), "relative_size": worst.relative, "output": worst.output, **worst.evidence}


def _finding(subject: Subject, function: str, code: FindingCode, size: float, evidence: Evidence) -> Finding:
    shown = number(size, digits=2)
    text, remedy, severity = {
        FindingCode.NOISE: (
            f"{function} carries noise of about {shown} (standard deviation of one value), far above rounding.",
            "Tighten the tolerance of the inner iteration, adaptive solver or mesh behind it, or fix its number of "
            "steps; if there is none, look for a difference of nearly equal numbers. Else take steps made for this "
            "noise (see Best steps) and stop no finer.",
            Severity.HAZARD,
        ),
        FindingCode.LOW_PRECISION: (
            f"{function} is computed in single precision somewhere: its values are good to about {shown}.",
            "Look for float32 arrays, casts and library defaults, and compute in double precision while optimizing; "
            "else take the larger steps given below.",
            Severity.HAZARD,
        ),
        FindingCode.COARSE_OUTPUT: (
            f"{function} comes in steps of {shown}: it is printed or rounded to few digits.",
            "Let the model pass on all its digits (print 17 of them, or write binary numbers); differences with small "
            "steps see nothing else than these steps.",
            Severity.HAZARD,
        ),
        FindingCode.UNREPEATABLE: (
            f"{function} gave values that differ by {shown} at one and the same point.",
            "Seed random numbers, reset hidden state between calls, and audit again: all other figures wait for this.",
            Severity.BLOCKER,
        ),
    }[code]
    return Finding(
        code=code,
        severity=severity,
        function=function,
        variable=None,
        where=Location(point=subject.start),
        evidence=evidence,
        text=text,
        remedy=remedy,
    )
