"""What the check of a sparse Jacobian found, as text: counts, and three lists of faults."""

from collections.abc import Sequence

import numpy as np

from gradcheck import wording
from gradcheck.records.report import CheckReport, Entries
from gradcheck.records.sparsity import SparsityChecks
from gradcheck.records.verdict import Verdict
from gradcheck.report.paragraphs import fits, paragraph, table

#: Entries that are shown of each list.
SHOWN = 6
_DIGITS = 6
_UNUSED = "In the pattern, but zero wherever one looks"


def sparse_story(report: CheckReport, name_width: int, *, bounded: bool) -> str:
    """The headline's second half: how many faults of which kind, and the first of them."""
    checks = report.sparsity
    assert checks is not None  # asked only for such reports
    if report.verdict == Verdict.CONFIRMED:
        return _confirmed(checks)
    moved = len(checks.misplaced)
    lists = [
        (len(checks.wrong) - moved, "wrong"),
        (moved, "misplaced"),
        (len(checks.missing) - moved, "outside the pattern"),
    ]
    told = [f"{size:,} {what}" for size, what in lists if size]
    if len(checks.unexplained_rows):
        told.append(f"{wording.count(len(checks.unexplained_rows), 'row')} refuted as a whole")
    if report.verdict == Verdict.UNDECIDED or not told:
        return _undecided(checks)
    refuted = [i for i, verdict in enumerate(report.entries.verdict) if verdict == Verdict.REFUTED]
    if not refuted:
        return ", ".join(told)
    name = wording.ends_kept(report.entries.name[refuted[0]], name_width)
    if len(refuted) == 1:
        claim, digits = (
            report.entries.claim[refuted[0]],
            wording.digits_to_tell_apart(report.entries.digits[refuted[0]]),
        )
        found = wording.with_bound(report.entries.witness[refuted[0]], report.entries.bound[refuted[0]], max(digits, 4))
        found = found if bounded else found.partition(" ± ")[0]
        return f"{name} is claimed {wording.number(claim, digits)}, found {found}"
    # In a narrow line the first name gives way.
    return f"{', '.join(told)}; first {name}" if bounded else ", ".join(told)


def _undecided(checks: SparsityChecks) -> str:
    parts = [f"{checks.undecided:,} of {_looked_at(checks):,} entries undecided"] if checks.undecided else []
    if len(checks.undecided_rows):
        parts.append(f"{wording.count(len(checks.undecided_rows), 'row')} undecided as a whole")
    return ", ".join(parts) or "nothing could be decided"


def _confirmed(checks: SparsityChecks) -> str:
    whole = wording.count(checks.whole_rows_confirmed, "whole row") if checks.whole_rows else ""
    entries = f"all {checks.confirmed:,} entries" if checks.confirmed > 1 else "the entry" if checks.confirmed else ""
    one = checks.confirmed + checks.whole_rows_confirmed == 1
    return " and ".join(part for part in (entries, whole) if part) + (" agrees" if one else " agree")


def _looked_at(checks: SparsityChecks) -> int:
    return checks.confirmed + checks.refuted + checks.undecided


def sparse_lines(report: CheckReport, indent: int) -> list[str]:
    """Counts, the three lists, and what the random directions can see."""
    checks = report.sparsity
    assert checks is not None
    if report.verdict == Verdict.CONFIRMED:
        lines = paragraph(_counts(checks), indent + 2)
        visible = paragraph(_visible(report, checks), indent + 2) if np.isfinite(checks.smallest_visible) else []
        return lines + _list_lines(report.entries, checks.unused, _UNUSED, indent + 2) + visible
    lines = ["", *paragraph(_counts(checks), indent)]
    for places, head in (
        (checks.missing, "Outside the pattern, where the function depends on the variable"),
        (checks.wrong, "Wrong values"),
        (checks.unused, _UNUSED),
    ):
        lines += _list_lines(report.entries, places, head, indent)
    if len(checks.unexplained_rows):
        rows = wording.listed([f"{report.function}[{row}]" for row in checks.unexplained_rows[:20]])
        lines += ["", *paragraph(f"Refuted as wholes, the entries at fault not told: {rows}", indent)]
    if len(checks.undecided_rows):
        rows = wording.listed([f"{report.function}[{row}]" for row in checks.undecided_rows[:20]])
        lines += ["", *paragraph(f"Undecided as wholes: {rows}", indent)]
    if np.isfinite(checks.smallest_visible):
        lines += ["", *paragraph(_visible(report, checks), indent)]
    return lines


def _counts(checks: SparsityChecks) -> str:
    m, n = checks.shape
    parts = []
    if _looked_at(checks):
        parts.append(
            f"{_looked_at(checks):,} entries looked at one by one, in {wording.count(checks.groups, 'group')} of "
            f"columns that share no row: {checks.confirmed:,} confirmed, {checks.refuted:,} refuted, "
            f"{checks.undecided:,} undecided"
        )
    if checks.whole_rows:
        parts.append(
            f"{wording.count(checks.whole_rows, 'row')} judged as a whole along random directions: "
            f"{checks.whole_rows_confirmed:,} confirmed"
        )
    return f"{m:,} × {n:,} with {checks.stored:,} entries in its pattern. " + "; ".join(parts) + "."


def _visible(report: CheckReport, checks: SparsityChecks) -> str:
    many = 0 if report.directions is None else len(report.directions.verdict)
    what = "outside the pattern" if not checks.whole_rows else "outside the pattern, or in a row judged as a whole"
    return (
        f"An entry {what} would have been seen by {wording.count(many, 'random direction')} if it changes its row by "
        f"more than {wording.number(checks.smallest_visible, 2)} of the row's largest term."
    )


def _list_lines(entries: Entries, places: np.ndarray, head: str, indent: int) -> list[str]:
    if not len(places):
        return []
    known = {(int(row), int(column)): i for i, (row, column) in enumerate(entries.index.reshape(-1, 2))}
    shown = [known[int(row), int(column)] for row, column in places[: 4 * SHOWN] if (int(row), int(column)) in known]
    lines = ["", " " * indent + f"{head} ({len(places):,}):", *_table(entries, shown[:SHOWN], indent + 2)]
    others = len(places) - len(shown[:SHOWN])
    if others:
        lines += paragraph(f"and {others:,} more", indent + 2)
    return lines


def _table(entries: Entries, shown: Sequence[int], indent: int) -> list[str]:
    lines: list[str] = []
    for most in range(wording.MOST_DIGITS, 3, -1):
        rows = []
        for i in shown:
            refuted = entries.verdict[i] == Verdict.REFUTED
            digits = min(wording.digits_to_tell_apart(float(entries.digits[i])) if refuted else _DIGITS, most)
            witness = wording.with_bound(float(entries.witness[i]), float(entries.bound[i]), max(digits, 4))
            rows.append(
                (entries.name[i], wording.number(float(entries.claim[i]), digits), witness, str(entries.verdict[i]))
            )
        lines = table(("entry", "claim", "witness ± bound", "verdict"), rows, right="----", indent=indent)
        if fits(lines):
            break
    return lines
