"""What `check` found, as plain text for someone in a hurry: verdict, likely mistake, worst entries, cost."""

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck import wording
from gradcheck.records.finding import FindingCode
from gradcheck.records.report import IDENTITY, CheckReport, Coverage, Diagnosis, Entries
from gradcheck.records.verdict import Verdict
from gradcheck.report.finding_text import finding_lines
from gradcheck.report.paragraphs import WIDTH, fits, paragraph, table
from gradcheck.report.sparse_text import sparse_lines, sparse_story

#: Rows of the table of worst entries.
WORST = 10

#: Likely mistakes and different reasons that are told; more of them help nobody in a hurry.
_MISTAKES, _REASONS = 4, 6

#: Digits of a claim that is not refuted; there is nothing to tell apart.
_DIGITS_ELSEWHERE = 6

#: How sentences call many entries at once (`claims/mistakes/where.py`).
_IN_WORDS = re.compile(
    r"\ball ([\d,]+ )?(entries|outputs|rows|columns)\b|\brows? \d|\bpoints? \d|\d+ entries\b|and [\d,]+ more\b"
)

#: Digits in a narrow headline, where claim and witness look different with so few.
_FEW_DIGITS = 3

_RANK = {Verdict.REFUTED: 0, Verdict.UNDECIDED: 1, Verdict.CONFIRMED: 2}


def check_text(report: CheckReport) -> str:
    """The report as text of at most 80 columns; the first line alone says what is wrong and where.

    Parameters
    ----------
    report : CheckReport
        Its own ``text`` is not looked at.

    Returns
    -------
    str
        Without a newline at the end. NaN and infinities appear as ``nan`` and ``inf``.

    Examples
    --------
    >>> import gradcheck
    >>> report = gradcheck.check(lambda x: x[0] ** 2, at=[3.0], gradient=lambda x: [x[0]], on_refuted="return")
    >>> print(check_text(report).partition(" ±")[0])
    gradient of model refuted: x[0] is claimed 3, found 6
    """
    if report.parts:
        return _several(report)
    return "\n".join([*headline(report), *check_details(report)])


def _several(report: CheckReport) -> str:
    """The claims of one call, worst first: what decides stands in the first line."""
    ordered = sorted(report.parts, key=lambda part: _RANK[part.verdict])
    texts = ["\n".join([*headline(part), *check_details(part)]) for part in ordered]
    verdicts = _tally([part.verdict for part in ordered])
    together = (
        f"{wording.count(len(ordered), 'claim')}, {verdicts}: {wording.cost(report.evaluations, report.seconds)}."
    )
    return "\n\n".join([*texts, *paragraph(together, 0)])


def headline(report: CheckReport, width: int = WIDTH) -> list[str]:
    """One line: which claim, of which model, the verdict, and the worst entry in words; a name too long for it follows
    in a second line.
    """
    whole = 10 * width
    # What gives way first: the bound, then digits, then the model's name; the entry's name comes last.
    ways = [(whole, whole, True, wording.MOST_DIGITS), (whole, whole, False, wording.MOST_DIGITS)]
    ways += [(function, whole, False, _FEW_DIGITS) for function in (whole, 40, 24, 16, 10)]
    ways += [
        (function, name, False, wording.MOST_DIGITS)
        for function, least in ((24, 24), (10, 16))
        for name in range(60, least - 1, -2)
    ]
    for function_width, name_width, bounded, digits in ways:
        function = wording.shortened(report.function, function_width)
        text = f"{report.kind} of {function} {report.verdict}: {_story(report, name_width, bounded, digits)}"
        if len(text) <= width:
            cut = name_width < whole and len(report.entries) > 0
            return [text, *([f"  {_worst_name(report, width - 2)}"] if cut else [])]
    # Figures too long for one line: the table below has them.
    counts = f"of {wording.count(len(report.entries), 'entry', 'entries')}, {_tally(report.entries.verdict)}"
    function = wording.shortened(report.function, 10)
    return [wording.shortened(f"{report.kind} of {function} {report.verdict}: {counts}", width)]


def _worst_name(report: CheckReport, width: int) -> str:
    return wording.ends_kept(report.entries.name[int(worst_order(report.entries)[0])], width)


def check_details(report: CheckReport, *, indent: int = 0, rows: int = WORST, findings: bool = True) -> list[str]:
    """Everything below the headline, as lines; without the findings where they are told elsewhere."""
    inner = indent + 2
    confirmed = report.verdict == Verdict.CONFIRMED
    lines: list[str] = []
    words = _raised_words(report)
    # Several points often give the same explanation.
    mistakes = list({(diagnosis.code, diagnosis.text): diagnosis for diagnosis in report.diagnoses}.values())
    for diagnosis in mistakes[:_MISTAKES]:
        if words and words in diagnosis.text:
            lines += ["", *paragraph(f"{wording.capitalised(diagnosis.text)}.", indent)]
        else:
            lines += ["", *_diagnosis_lines(diagnosis, indent)]
    if len(mistakes) > _MISTAKES:
        more = wording.count(len(mistakes) - _MISTAKES, "other likely mistake")
        lines += paragraph(f"and {more}, in the report's diagnoses", indent)
    if report.sparsity is not None:
        lines += sparse_lines(report, indent)
    else:
        if len(report.entries) and not confirmed:
            lines += ["", *_worst_lines(report.entries, indent, rows)]
        lines += _direction_lines(report, indent)
    lines += _reason_lines(report.entries, indent)
    brief = _brief_reasons(report.entries, indent)
    lines += ["", *brief] if brief and not confirmed else brief
    for finding in report.findings if findings else ():
        lines += ["", *finding_lines(finding, indent=indent)]
    if confirmed:
        return [*lines, *_notes(report, inner), *paragraph(_closing(report), inner)]
    notes = _notes(report, indent)
    return [*lines, *([""] if notes else []), *notes, "", *paragraph(_closing(report), indent)]


def _notes(report: CheckReport, indent: int) -> list[str]:
    return [line for notice in report.notices for line in paragraph(notice, indent, first="Note: ")]


def worst_order(entries: Entries) -> np.ndarray:
    """Positions of the entries, worst first: by verdict, then by digits agreed, then by the size of the difference.

    What a claim says against itself comes after what a witness says against it.
    """
    rank = np.array([_RANK[verdict] for verdict in entries.verdict], dtype=int)
    # An unknown number of digits (a claim of NaN) is as bad as none; an unknown difference as bad as the largest.
    digits = np.where(np.isnan(entries.digits), -np.inf, entries.digits)
    with np.errstate(invalid="ignore"):
        difference = np.abs(entries.claim - entries.witness)
    difference = np.where(np.isnan(difference), np.inf, difference)
    itself = np.array([source == IDENTITY for source in entries.source], dtype=bool)
    return np.lexsort((-difference, digits, itself, rank))


@dataclass(frozen=True, slots=True)
class _Entry:
    """One row of the entries."""

    name: str
    claim: float
    witness: float
    bound: float
    digits: float
    verdict: Verdict
    reason: str

    @property
    def agrees(self) -> bool:
        """Whether claim and witness look alike; where such an entry is refuted, something else has refuted it."""
        return abs(self.claim - self.witness) <= max(self.bound, 1e-8 * abs(self.witness))


def _entry(entries: Entries, position: int) -> _Entry:
    return _Entry(
        name=entries.name[position],
        claim=float(entries.claim[position]),
        witness=float(entries.witness[position]),
        bound=float(entries.bound[position]),
        digits=float(entries.digits[position]),
        verdict=entries.verdict[position],
        reason=entries.reason[position],
    )


def _story(report: CheckReport, name_width: int, bounded: bool, most: int) -> str:
    entries = report.entries
    if report.sparsity is not None:
        return sparse_story(report, name_width, bounded=bounded)
    if not len(entries):
        return _direction_story(report)
    if report.verdict == Verdict.CONFIRMED:
        return _direction_story(report) if report.directions else _agreement(entries, brief=not bounded)
    position = int(worst_order(entries)[0])
    worst = _entry(entries, position)
    if worst.verdict != report.verdict:  # the directions decided, and no single entry carries the verdict
        return _direction_story(report)
    words = _raised_words(report)
    if words and np.isnan(worst.claim):
        taken = len(f"{report.kind} of {report.function} {report.verdict}: ") + 2
        return wording.shortened_end(f"the {report.kind} raised {words}", max(WIDTH - taken, 32))
    if entries.source[position] == IDENTITY:
        return _contradiction(worst, name_width)
    name = wording.ends_kept(worst.name, name_width)
    if worst.verdict == Verdict.REFUTED and worst.agrees and worst.reason:
        return f"{name} is {worst.reason if bounded else worst.reason.partition(':')[0].partition(' (')[0]}"
    claim, witness = _figures(worst, most)
    if worst.verdict == Verdict.UNDECIDED and not np.isfinite([worst.witness, worst.bound]).all():
        return f"{name} is claimed {claim}, and no witness can tell"
    if worst.verdict == Verdict.UNDECIDED and worst.digits >= 1:
        return f"{name} agrees to {wording.count(int(worst.digits), 'digit')} only"
    return f"{name} is claimed {claim}, found {witness if bounded else witness.partition(' ± ')[0]}"


def _raised_words(report: CheckReport) -> str:
    """What the claim itself raised, in its own words; empty if it did not."""
    opening = f"the {report.kind} of {report.function} raised at the point: "
    told = (finding.text for finding in report.findings if finding.code == FindingCode.CRASH)
    return next((text.removeprefix(opening) for text in told if text.startswith(opening)), "")


def _contradiction(entry: _Entry, name_width: int = 10 * WIDTH) -> str:
    """A broken identity as a sentence: of an asymmetric Hessian, the two entries that differ."""
    left, right = wording.number(entry.claim), wording.number(entry.witness)
    if left == right:
        left, right = (wording.number(side, wording.MOST_DIGITS) for side in (entry.claim, entry.witness))
    half = (len(entry.name) - 3) // 2
    if entry.reason.startswith("asymmetric") and entry.name[half : half + 3] == " = " and entry.name.startswith("H["):
        one, other = (wording.ends_kept(side, name_width) for side in (entry.name[:half], entry.name[half + 3 :]))
        return f"asymmetric, {one} is {left}, {other} is {right}"
    return f"{wording.ends_kept(entry.name, name_width)} fails, {left} against {right}"


def _agreement(entries: Entries, *, brief: bool) -> str:
    """How well confirmed entries agree; a true zero agrees absolutely, where digits say nothing."""
    many = len(entries)
    subject = f"all {wording.count(many, 'entry', 'entries')} agree" if many > 1 else "the entry agrees"
    counted = entries.digits[entries.digits >= 1]
    if brief:
        return subject
    if not counted.size:
        return f"{subject} within the bounds"
    digits = wording.agreed_digits(float(counted.min()))
    if counted.size < many:
        return f"all {many:,} agree to {digits} digits or within bounds"
    return f"{subject} to {digits} digits" + (" or more" if many > 1 and digits != "all" else "")


def _direction_story(report: CheckReport) -> str:
    if report.directions is None or not report.directions.verdict:
        return "no entry was looked at"
    verdicts = report.directions.verdict
    directions = wording.count(len(verdicts), "random direction")
    covered = sum(part.entries for part in report.directions.coverage)
    if report.verdict == Verdict.CONFIRMED and covered:
        return f"{covered:,} entries along {directions}"
    if report.verdict == Verdict.CONFIRMED and len(report.entries):  # products, whose entries stand for them
        digits = report.entries.digits[report.entries.digits >= 1]
        to = f" to {wording.agreed_digits(float(digits.min()))} digits or more" if digits.size else " within the bounds"
        return f"along {directions}{to}"
    if report.verdict == Verdict.REFUTED and Verdict.REFUTED not in verdicts:
        return "right as it stands, but see below"
    return f"of {directions}, {_tally(verdicts)}"


def _tally(verdicts: Sequence[Verdict]) -> str:
    return wording.tally(str(verdict) for verdict in sorted(verdicts, key=lambda verdict: _RANK[verdict]))


def _figures(entry: _Entry, most: int) -> tuple[str, str]:
    """Claim, and witness ± bound: where refuted, with enough digits to look different, but at most `most`."""
    # What something else than the witness refutes looks like it; digits would not tell it apart.
    refuted = entry.verdict == Verdict.REFUTED and not (entry.agrees and entry.reason)
    apart = wording.digits_to_tell_apart(entry.digits) if refuted else _DIGITS_ELSEWHERE
    # Fewer digits than tell the two apart would be no story.
    digits = min(apart, most) if most > _FEW_DIGITS or not entry.digits >= 1 else apart
    return wording.number(entry.claim, digits), wording.with_bound(
        entry.witness, entry.bound, max(digits, min(most, 4))
    )


def _diagnosis_lines(diagnosis: Diagnosis, indent: int) -> list[str]:
    lines = paragraph(f"{wording.DIAGNOSIS_WORDS[diagnosis.code]} ({diagnosis.code})", indent, first="Likely mistake: ")
    lines += paragraph(diagnosis.text, indent + 2)
    if not _placed(diagnosis):
        lines += paragraph(wording.listed(diagnosis.entries), indent + 2, first="where: ")
    return lines


def _placed(diagnosis: Diagnosis) -> bool:
    """Whether the sentence itself says which entries: by their names, or by the part that they fill."""
    return bool(_IN_WORDS.search(diagnosis.text)) or all(name in diagnosis.text for name in diagnosis.entries)


def _worst_lines(entries: Entries, indent: int, rows: int) -> list[str]:
    every = worst_order(entries)
    order = [int(position) for position in every if entries.source[position] != IDENTITY]
    itself = [_entry(entries, int(position)) for position in every if entries.source[position] == IDENTITY]
    lines = _table_of_worst(entries, order, indent, rows) if order else []
    if itself:
        lines += [*([""] if order else []), " " * indent + "The claim contradicts itself:"]
        for entry in itself:
            lines += paragraph(f"{_contradiction(entry)}.", indent + 2)
    return lines


def _table_of_worst(entries: Entries, order: Sequence[int], indent: int, rows: int) -> list[str]:
    shown = [_entry(entries, position) for position in order[:rows]]
    if len(order) == 1:
        head = "The only entry:"
    elif len(order) <= rows:
        head = "All entries, worst first:"
    else:
        head = f"The {len(shown)} worst of {len(order):,} entries, worst first:"
    lines = [" " * indent + head, *_entry_table(shown, indent + 2)]
    others = [entries.verdict[position] for position in order[rows:]]
    if others:
        lines += paragraph(f"The other {len(others):,}: {_tally(others)}.", indent + 2)
    return lines


def _entry_table(shown: Sequence[_Entry], indent: int) -> list[str]:
    # Figures are never cut, so they give way digit by digit until the table fits.
    for most in range(wording.MOST_DIGITS, 3, -1):
        rows = [
            (entry.name, *_figures(entry, most), wording.agreed_digits(entry.digits), str(entry.verdict))
            for entry in shown
        ]
        lines = table(("entry", "claim", "witness ± bound", "digits", "verdict"), rows, right="---r", indent=indent)
        if fits(lines):
            break
    return lines


def _direction_lines(report: CheckReport, indent: int) -> list[str]:
    directions = report.directions
    if directions is None or not directions.verdict:
        return []
    confirmed = report.verdict == Verdict.CONFIRMED
    inner = indent + 2 if confirmed else indent
    lines = [] if confirmed else [""]
    told = f"{wording.count(len(directions.verdict), 'random direction')}: {_tally(directions.verdict)}."
    if np.isfinite(directions.smallest_visible) and not directions.coverage:
        told += (
            f" The smallest single error that they would have seen: {wording.number(directions.smallest_visible, 2)}."
        )
    lines += paragraph(told, inner)
    if directions.coverage:
        beside = "Beside what is told above, a" if report.verdict == Verdict.REFUTED else "A"
        lines += paragraph(f"{beside} single error would surely have been seen", inner)
    for coverage in directions.coverage:
        lines += paragraph(_coverage(coverage), inner, first="  * ")
    if directions.left_out:
        names = wording.listed(directions.left_out_names)
        many = directions.left_out > len(directions.left_out_names)
        which = f"{wording.count(directions.left_out, 'entry', 'entries')} ({names}{' ...' if many else ''})"
        lines += paragraph(f"Not covered: {which}, for they are no number, or their variables cannot move.", inner)
    for reason in dict.fromkeys(filter(None, directions.reason)):
        lines += paragraph(reason, inner, first="because: ")
    return lines


def _coverage(coverage: Coverage) -> str:
    where = f"in {coverage.what} ({wording.count(coverage.entries, 'entry', 'entries')})"
    if np.isfinite(coverage.share):
        return f"{where}: from {wording.number(100 * coverage.share, 2)} % of the claimed value"
    return f"{where}: from {wording.number(coverage.over_size, 2)} over the size of its variable"


def _reason_lines(entries: Entries, indent: int) -> list[str]:
    """Why entries are undecided, or refuted otherwise than by the plain rule; each reason once, with its entries."""
    groups = _by_reason(entries, (Verdict.UNDECIDED, Verdict.REFUTED))
    lines: list[str] = []
    for (verdict, reason), names in groups[:_REASONS]:
        lines += ["", *paragraph(f"{wording.capitalised(str(verdict))}: {wording.listed(names)}", indent)]
        lines += paragraph(reason, indent + 2, first="because: ")
    if len(groups) > _REASONS:
        lines += paragraph(f"and {len(groups) - _REASONS:,} other reasons, in the report's entries", indent)
    return lines


def _brief_reasons(entries: Entries, indent: int) -> list[str]:
    """What is to be said about confirmed entries, in as few lines as possible."""
    groups = _by_reason(entries, (Verdict.CONFIRMED,))[:_REASONS]
    return [
        line
        for (_, reason), names in groups
        for line in paragraph(f"{wording.listed(names, limit=3)}: {reason}", indent + 2)
    ]


def _by_reason(entries: Entries, verdicts: Sequence[Verdict]) -> list[tuple[tuple[Verdict, str], list[str]]]:
    """Names of the entries with these verdicts by their reason; in the order of the verdicts, the commonest first."""
    groups: dict[tuple[Verdict, str], list[str]] = {}
    for name, verdict, reason in zip(entries.name, entries.verdict, entries.reason, strict=True):
        if reason and verdict in verdicts:
            groups.setdefault((verdict, reason), []).append(name)
    return sorted(groups.items(), key=lambda group: (verdicts.index(group[0][0]), -len(group[1])))


def _closing(report: CheckReport) -> str:
    witnesses = [source for source in dict.fromkeys(report.entries.source) if source]
    against = f" against {wording.listed(witnesses)}" if witnesses else ""
    spent = f": {wording.cost(report.evaluations, report.seconds)}" if report.evaluations else ""
    others = len({name.rpartition(" @ ")[2] for name in report.entries.name if " @ point " in name}) - 1
    where = wording.point(report.point.tolist())
    more = f" and {wording.count(others, 'other point')}" if others > 0 else ""
    return f"Checked at {where}{more}{against}{spent}."
