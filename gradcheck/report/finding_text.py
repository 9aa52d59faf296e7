"""One finding as text: how bad and what kind, where, the fact, what to do, and the numbers behind it."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from gradcheck import wording
from gradcheck.records.finding import Finding, Location
from gradcheck.report.paragraphs import paragraph


@dataclass(frozen=True, slots=True, kw_only=True)
class Surroundings:
    """What a report knows about its variables: their units by name, and the start point (empty if unknown)."""

    units: Mapping[str, str] = field(default_factory=dict)
    start: Sequence[float] = ()


def finding_lines(
    finding: Finding, *, indent: int = 0, around: Surroundings | None = None, told: Sequence[str] = ()
) -> list[str]:
    """The finding as lines of at most 80 columns; a remedy among those `told` before is only pointed at."""
    place = where(finding.where, around or Surroundings())
    title = f"{finding.code} ({wording.FINDING_WORDS[finding.code]}){_subject(finding)}"
    lines = paragraph(title, indent, first=f"{finding.severity.upper()} ")
    remedy = f"as for {finding.code} above" if finding.remedy in told else finding.remedy
    parts = (("where: ", place), ("what:  ", finding.text), ("do:    ", remedy), ("seen:  ", evidence(finding)))
    return [*lines, *(line for first, text in parts if text for line in paragraph(text, indent + 2, first=first))]


def _subject(finding: Finding) -> str:
    """Of which function and variable; some findings belong to no single one."""
    function = wording.shortened(finding.function, 30)
    variable = f"variable {wording.shortened(finding.variable, 30)}" if finding.variable else ""
    told = ", ".join(part for part in (function, variable) if part)
    return f": {told}" if told else ""


def where(location: Location, around: Surroundings) -> str:
    """A place in words: a bracket along a line, the start point, or another point; empty where it names none."""
    if location.line:
        line = wording.shortened(location.line, 40)
        return f"along {line} {wording.bracket(location.lower, location.upper, around.units.get(location.line, ''))}"
    point = location.point.tolist()
    if point and point == list(around.start):
        return "at the start point"
    return f"at {wording.point(point)}" if point else ""


def evidence(finding: Finding) -> str:
    """The numbers of a finding by name: ``left slope 3, right slope 4``."""
    parts = []
    for name, value in finding.evidence.items():
        told = wording.clean(value) if isinstance(value, str) else wording.number(value)
        parts.append(f"{name.replace('_', ' ')} {told}")
    return ", ".join(parts)
