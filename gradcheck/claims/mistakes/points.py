"""Likely mistakes of a claim that was checked at several points: those of each point, and those that only all show."""

from collections.abc import Sequence

from gradcheck.claims.mistakes.region import divided, region_story
from gradcheck.claims.mistakes.stale_point import stale_points, stale_story
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import listed


def at_point(name: str, place: int) -> str:
    """An entry's name at one of several points."""
    return f"{name} @ point {place}"


def mistakes_at_points(reports: Sequence[CheckReport], labels: Sequence[str] = ()) -> tuple[Diagnosis, ...]:
    """Diagnoses of reports on the same claim, one a point; names of entries say at which."""
    if len({(report.function, report.kind) for report in reports}) > 1:
        # Claims about different functions, which say nothing about one another.
        return tuple(diagnosis for report in reports for diagnosis in report.diagnoses)
    stale = stale_points(reports)
    names = {k: _refuted_names(report, k) for k, report in enumerate(reports)}
    told = [stale_story(stale, names)] if stale else []
    others = [k for k in range(len(reports)) if k not in stale]
    parts = divided(reports) if not stale else None
    if parts is not None:
        every = tuple(name for k in parts.wrong for name in names[k])
        told.append(region_story(reports, parts, every, labels or _variables(reports[0])))
        # What stays unknown at each point has its story now.
        return (*told, *_together(reports, others, leave_out=DiagnosisCode.UNKNOWN))
    return (*told, *_together(reports, others))


def _together(
    reports: Sequence[CheckReport], which: Sequence[int], leave_out: DiagnosisCode | None = None
) -> list[Diagnosis]:
    """The same story at several points once."""
    groups: dict[tuple[DiagnosisCode, tuple[str, ...]], list[tuple[int, Diagnosis]]] = {}
    for k in which:
        for diagnosis in reports[k].diagnoses:
            # Reports of changing answers keep their story: nothing but a second call could show it.
            if diagnosis.code != leave_out or "at the same point" in diagnosis.text:
                groups.setdefault((diagnosis.code, diagnosis.entries), []).append((k, diagnosis))
    return [_one_story(found) for found in groups.values()]


def _one_story(found: list[tuple[int, Diagnosis]]) -> Diagnosis:
    first_place, first = found[0]
    places = [str(k) for k, _ in found]
    start = f"At point{'s' if len(places) > 1 else ''} {listed(places)}: "
    text = first.text if len({d.text for _, d in found}) == 1 else f"{first.text} (figures of point {first_place})"
    entries = tuple(at_point(name, k) for k, diagnosis in found for name in diagnosis.entries)
    return Diagnosis(code=first.code, text=start + text, entries=entries)


def _refuted_names(report: CheckReport, place: int) -> tuple[str, ...]:
    pairs = zip(report.entries.name, report.entries.verdict, strict=True)
    return tuple(at_point(name, place) for name, verdict in pairs if verdict == Verdict.REFUTED)


def _variables(report: CheckReport) -> list[str]:
    """Names of all variables: those of a gradient's entries where each has one."""
    if report.entries.index.ndim == 1 and len(report.entries) == report.point.size:
        return list(report.entries.name)
    return [f"x[{i}]" for i in range(report.point.size)]
