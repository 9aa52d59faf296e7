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


def sparse_story(report: CheckReport, name_width: int, *, bounded: bool) -> str:
    """The headline's second half: how many faults of which kind, and the first of them."""
    checks = report.sparsity
    assert checks is not None  # asked only for such reports
    if report.verdict == Verdict.CONFIRMED:
        return _confirmed(checks)
    lists = [
        (len(checks.wrong), "wrong"),
        (len(checks.missing), "outside the pattern"),
        (len(checks.unexplained_rows), "disagreeing as a whole"),
    ]
    told = [f"{size:,} {what}" for size, what in lists if size]
    if report.verdict == Verdict.UNDECIDED or not told:
        open_rows = len(checks.undecided_rows)
        rows = f"{wording.count(open_rows, 'row')} undecided" if open_rows else ""
        entries = f"{checks.undecided:,} of {_looked_at(checks):,} entries undecided" if checks.undecided else ""
        return ", ".join(part for part in (entries, rows) if part)
    entries = "row" if told[0].endswith("whole") else "entry"
    size = next(size for size, _ in lists if size)
    plural = {"row": "rows", "entry": "entries"}[entries]
    head = told[0].replace(" ", f" {entries if size == 1 else plural} ", 1)
    story = ", ".join([head, *told[1:]])
    first = _first(report, name_width)
    return f"{story}; {first}" if bounded and first else story


def _first(report: CheckReport, name_width: int) -> str:
    entries = report.entries
    refuted = [i for i, verdict in enumerate(entries.verdict) if verdict == Verdict.REFUTED]
    if not refuted:
        return ""
    name = wording.shortened(entries.name[refuted[0]], name_width)
    return f"first {name}"


def _confirmed(checks: SparsityChecks) -> str:
    whole = f"{checks.whole_rows_confirmed:,} rows as wholes" if checks.whole_rows else ""
    entries = f"all {checks.confirmed:,} entries, one by one" if checks.confirmed else ""
    return " and ".join(part for part in (entries, whole) if part) + ", agree"


def _looked_at(checks: SparsityChecks) -> int:
    return checks.confirmed + checks.refuted + checks.undecided


def sparse_lines(report: CheckReport, indent: int) -> list[str]:
    """Counts, the three lists, and what the random directions can see."""
    checks = report.sparsity
    assert checks is not None
    lines = ["", *paragraph(_counts(checks), indent)]
    for places, head in (
        (checks.missing, "Outside the pattern, where the function depends on the variable"),
        (checks.wrong, "Wrong values"),
        (checks.unused, "In the pattern, but zero wherever one looks"),
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
            f"{_looked_at(checks):,} entries looked at one by one, in {wording.count(checks.groups, 'group')} of columns "
            f"that share no row: {checks.confirmed:,} confirmed, {checks.refuted:,} refuted, {checks.undecided:,} undecided"
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
            rows.append((entries.name[i], wording.number(float(entries.claim[i]), digits), witness, str(entries.verdict[i])))
        lines = table(("entry", "claim", "witness ± bound", "verdict"), rows, right="----", indent=indent)
        if fits(lines):
            break
    return lines
