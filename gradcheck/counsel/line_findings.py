"""Findings from the examination of lines: where along which variable the function is not smooth, and what to do."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_report import Irregularity, LineReport
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.wording import number

#: A break smaller than this share of what is typical of its line is a remark: an adaptive integration has many of them.
MATERIAL = {FindingCode.KINK: 1e-3, FindingCode.JUMP: 1e-6, FindingCode.STAIRCASE: 1e-6}
#: Breaks of one kind along one variable that are told one by one.
TOLD_EACH = 3

_BREAKS = (FindingCode.KINK, FindingCode.JUMP, FindingCode.STAIRCASE, FindingCode.CURVATURE_BREAK)
_DOMAIN = (FindingCode.NON_FINITE, FindingCode.CRASH, FindingCode.TIMEOUT)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Line:
    """A coordinate line through the start point: variable, ends in its units, and what was seen on it."""

    coordinate: int
    lower: float
    upper: float
    report: LineReport

    def value(self, t: float) -> float:
        """The variable at parameter t."""
        return self.lower + t * (self.upper - self.lower)


def line_findings(subject: Subject, function: str, lines: Sequence[Line]) -> list[Finding]:
    """What was found in places: what concerns the whole function is told by `noise_findings`."""
    return [finding for line in lines for finding in _on_line(subject, function, line)]


def _on_line(subject: Subject, function: str, line: Line) -> Iterable[Finding]:
    for kind in _BREAKS:
        found = line.report.of_kind(kind)
        # The same break is seen by every output that has it; the largest speaks for them.
        places = _apart(found)
        for irregularity in places[:TOLD_EACH]:
            yield _break(subject, function, line, irregularity, len(places))
    for kind in _DOMAIN:
        for irregularity in line.report.of_kind(kind)[:TOLD_EACH]:
            yield _stretch(subject, function, line, irregularity)


def _apart(found: Sequence[Irregularity]) -> list[Irregularity]:
    """One irregularity per place, largest first."""
    ordered = sorted(found, key=lambda i: -abs(np.nan_to_num(i.relative)))
    kept: list[Irregularity] = []
    for one in ordered:
        if all(one.lower > other.upper + 1e-6 or one.upper < other.lower - 1e-6 for other in kept):
            kept.append(one)
    return kept


def _break(subject: Subject, function: str, line: Line, found: Irregularity, places: int) -> Finding:
    variable = subject.layout.name(line.coordinate)
    lower, upper = line.value(found.lower), line.value(found.upper)
    per_unit = 1.0 / (line.upper - line.lower)
    place = f"{variable} = {number((lower + upper) / 2, digits=6)}"
    material = not abs(found.relative) < MATERIAL.get(FindingCode(found.kind), np.inf)
    severity = Severity.HAZARD if material else Severity.REMARK
    more = f" ({places} such places on this line)" if places > TOLD_EACH else ""
    evidence: dict[str, float | int | str] = {"relative_size": found.relative, "places": places}
    if found.kind == FindingCode.KINK:
        evidence |= {"left_slope": found.left * per_unit, "right_slope": found.right * per_unit}
        text = (
            f"the slope of {function} changes from {number(found.left * per_unit)} to {number(found.right * per_unit)} "
            f"at {place}{more}."
        )
        remedy = (
            "Replace the table or the max/min/abs behind it by a smooth one (a monotone cubic, a rounded maximum), or "
            "use a solver that stands kinks."
        )
    elif found.kind == FindingCode.CURVATURE_BREAK:
        severity = Severity.REMARK
        text = f"the curvature of {function} changes at once at {place}; the slope is continuous{more}."
        remedy = "First derivatives hold; methods that use second derivatives may slow down there."
    else:
        evidence |= {"height": found.size}
        word = "jumps" if found.kind == FindingCode.JUMP else "steps like a staircase, for example"
        text = f"{function} {word} by {number(abs(found.size))} at {place}{more}."
        remedy = (
            "Find the if, table edge, rounding or switch of regime behind it and blend it smoothly; an optimizer does "
            "not see a jump coming."
        )
    return Finding(
        code=FindingCode(found.kind),
        severity=severity,
        function=function,
        variable=variable,
        where=Location(point=_moved(subject, line, (lower + upper) / 2), line=variable, lower=lower, upper=upper),
        evidence=evidence,
        text=text,
        remedy=remedy,
    )


def _stretch(subject: Subject, function: str, line: Line, found: Irregularity) -> Finding:
    variable = subject.layout.name(line.coordinate)
    lower, upper = line.value(found.lower), line.value(found.upper)
    what = {
        FindingCode.NON_FINITE: "is not a finite number",
        FindingCode.CRASH: "raises",
        FindingCode.TIMEOUT: "does not come back",
    }[FindingCode(found.kind)]
    return Finding(
        code=FindingCode(found.kind),
        severity=Severity.HAZARD,
        function=function,
        variable=variable,
        where=Location(point=_moved(subject, line, (lower + upper) / 2), line=variable, lower=lower, upper=upper),
        text=(
            f"{function} {what} for {variable} between {number(lower, digits=6)} and {number(upper, digits=6)}, which "
            "the optimizer may try."
        ),
        remedy="Tighten the bounds to where the model works, or make it give finite values there.",
    )


def _moved(subject: Subject, line: Line, value: float) -> Array:
    point = np.array(subject.start)
    point[line.coordinate] = value
    return point
