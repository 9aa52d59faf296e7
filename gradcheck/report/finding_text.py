"""One finding as text: how bad and what kind, where, the fact, what to do, and the numbers behind it."""

from collections.abc import Mapping

from gradcheck import wording
from gradcheck.records.finding import Finding, Location
from gradcheck.report.paragraphs import paragraph


def finding_lines(finding: Finding, *, indent: int = 0, units: Mapping[str, str] | None = None) -> list[str]:
    """The finding as lines of at most 80 columns; `units` holds the unit of a variable by its name."""
    place = where(finding.where, units or {})
    title = f"{finding.code} ({wording.FINDING_WORDS[finding.code]}): {_subject(finding)}"
    lines = paragraph(title, indent, first=f"{finding.severity.upper()} ")
    if place:
        lines += paragraph(place, indent + 2, first="where: ")
    if finding.text:
        lines += paragraph(finding.text, indent + 2, first="what:  ")
    if finding.remedy:
        lines += paragraph(finding.remedy, indent + 2, first="do:    ")
    if finding.evidence:
        lines += paragraph(evidence(finding), indent + 2, first="seen:  ")
    return lines


def _subject(finding: Finding) -> str:
    function = wording.shortened(finding.function, 30)
    if finding.variable is None:
        return function
    return f"{function}, variable {wording.shortened(finding.variable, 30)}"


def where(location: Location, units: Mapping[str, str]) -> str:
    """A place in words: a bracket along a line, or a point; empty where the location names neither."""
    if location.line:
        line = wording.shortened(location.line, 40)
        return f"along {line} {wording.bracket(location.lower, location.upper, units.get(location.line, ''))}"
    return f"at {wording.point(location.point.tolist())}" if location.point.size else ""


def evidence(finding: Finding) -> str:
    """The numbers of a finding by name: ``left slope 3, right slope 4``."""
    parts = []
    for name, value in finding.evidence.items():
        told = wording.clean(value) if isinstance(value, str) else wording.number(value)
        parts.append(f"{name.replace('_', ' ')} {told}")
    return ", ".join(parts)
