"""What the faults of a sparse claim come to: diagnoses and findings with their sentences."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.claims.entry_table import EntryTable
from gradcheck.claims.fault_lists import SAME_VALUE, Faults, ratio_in_common
from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.naming import likely_mistakes
from gradcheck.claims.pattern_detection import Detected
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.records.report import Diagnosis
from gradcheck.records.sparsity import Repetition
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import count, listed, number

#: Name of the entry (row, column).
Named = Callable[[int, int], str]

#: Entries that a diagnosis names; more of them are counted.
NAMED_MOST = 1_000
#: Rows are off by the same factor if it agrees to this share; so many different factors are told.
SAME_ROW_FACTOR, ROW_STORIES_MOST = 1e-5, 4
#: Wrong entries beyond this many are too many to be looked at for a common mistake one by one.
EXPLAINED_MOST = 5_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judged:
    """How entries were judged: relative tolerance, absolute one with its share of rounding, and the point."""

    rel_tol: float
    floor: Callable[[IntArray], Array]
    start: Array


def diagnoses_of_faults(
    table: EntryTable,
    faults: Faults,
    repeated: Sequence[Repetition],
    name: Named,
    kind: str,
    judged: Judged,
    declared: bool,
) -> tuple[Diagnosis, ...]:
    """Likely mistakes: the whole claim transposed, or else what is misplaced, missing and wrong."""
    whole = _transposed(table, faults, name)
    if whole is not None:
        return (whole,)
    diagnoses = []
    if faults.misplaced.size:
        diagnoses.append(_misplaced(table, faults, repeated, name))
    explained = set(faults.misplaced.ravel().tolist())
    missing = np.array([at for at in faults.missing.tolist() if at not in explained], dtype=np.intp)
    if missing.size:
        diagnoses.append(_missing(table, missing, repeated, name, declared))
    wrong = np.array([at for at in faults.wrong.tolist() if at not in explained], dtype=np.intp)
    if wrong.size:
        diagnoses += _wrong(table, wrong, repeated, name, kind, judged)
    return tuple(diagnoses)


def _names(table: EntryTable, at: IntArray, name: Named) -> tuple[str, ...]:
    return tuple(name(int(table.row[i]), int(table.column[i])) for i in at[:NAMED_MOST])


def repetition_words(repetition: Repetition, name: Named) -> str:
    """Where a repeated fault stands: first, second and last entry, the steps, how many."""
    r, c, one = repetition.row, repetition.column, repetition
    last = name(r + (one.count - 1) * one.row_step, c + (one.count - 1) * one.column_step)
    steps = f"every {_nth(one.row_step)} row and {_nth(abs(one.column_step))} column"
    if one.row_step == 0:
        steps = f"one row, every {_nth(abs(one.column_step))} column"
    elif one.column_step == 0:
        steps = f"one column, every {_nth(one.row_step)} row"
    return f"{one.count:,} times, from {name(r, c)} to {last} ({steps})".replace("every 1st ", "every ")


def _nth(step: int) -> str:
    ending = "th" if step % 100 in (11, 12, 13) else {1: "st", 2: "nd", 3: "rd"}.get(step % 10, "th")
    return f"{step}{ending}"


def _where(table: EntryTable, at: IntArray, kind: str, repeated: Sequence[Repetition], name: Named) -> str:
    """The places of some faults in words: repetitions first, else by name."""
    own = [one for one in repeated if one.kind == kind]
    if not own:
        return listed(_names(table, at, name))
    rest = at.size - sum(one.count for one in own)
    words = "; ".join(repetition_words(one, name) for one in own[:4])
    others = len(own) - 4
    more = f"; and {count(others, 'other repetition')}" if others > 0 else ""
    return words + more + (f"; and {count(rest, 'single entry', 'single entries')}" if rest > 0 else "")


def _misplaced(table: EntryTable, faults: Faults, repeated: Sequence[Repetition], name: Named) -> Diagnosis:
    pairs = faults.misplaced
    first, second = int(pairs[0, 0]), int(pairs[0, 1])
    here = name(int(table.row[first]), int(table.column[first]))
    there = name(int(table.row[second]), int(table.column[second]))
    text = (
        f"the value {number(float(table.claim[first]))} claimed for {here} belongs to {there}: the derivative is zero "
        f"at the first and {number(float(table.value[second]))} at the second, where the claim has no entry"
    )
    if len(pairs) > 1:
        text += f"; so do the others: {_where(table, pairs[:, 0], 'misplaced', repeated, name)}"
    text += ". Look at how the row and column indices of the sparse matrix are made."
    return Diagnosis(code=DiagnosisCode.SHIFTED_ENTRIES, text=text, entries=_names(table, pairs.ravel(), name))


def _missing(
    table: EntryTable, missing: IntArray, repeated: Sequence[Repetition], name: Named, declared: bool
) -> Diagnosis:
    largest = int(missing[np.abs(table.value[missing]).argmax()])
    first = name(int(table.row[largest]), int(table.column[largest]))
    found = number(float(table.value[largest]))
    which = "declared pattern" if declared else "pattern of the claim"
    if missing.size == 1:
        text = (
            f"{first} lies outside the {which}, but the function depends on this variable there: found {found}. Add "
            "the entry, with its derivative."
        )
    else:
        text = (
            f"{missing.size:,} entries outside the {which}, where the function does depend on the variable: "
            f"{_where(table, missing, 'missing', repeated, name)}. The largest is {first}, found {found}. Add them "
            "to the pattern, with their derivatives."
        )
    return Diagnosis(code=DiagnosisCode.ZERO_ENTRY, text=text, entries=_names(table, missing, name))


def _wrong(
    table: EntryTable,
    wrong: IntArray,
    repeated: Sequence[Repetition],
    name: Named,
    kind: str,
    judged: Judged,
) -> list[Diagnosis]:
    """The usual families of mistakes, asked about the wrong entries alone, as if they stood in one row."""
    diagnoses = []
    for one in repeated:
        if one.kind == "wrong":
            steps = np.arange(one.count)
            chain = table.find(one.row + one.row_step * steps, one.column + one.column_step * steps)
            diagnoses.append(_repeated(table, chain, one, name))
            wrong = wrong[~np.isin(wrong, chain)]
    with np.errstate(invalid="ignore"):
        empty = wrong[(np.abs(table.value[wrong]) <= 3 * table.bound[wrong]) & np.isfinite(table.claim[wrong])]
    if empty.size:
        diagnoses.append(_without_effect(table, empty, name))
        wrong = wrong[~np.isin(wrong, empty)]
    if wrong.size > EXPLAINED_MOST:
        return [*diagnoses, _many(table, wrong, name)]
    if wrong.size == 0:
        return diagnoses
    return diagnoses + list(
        likely_mistakes(
            Case(
                kind=kind,
                claim=table.claim[None, wrong],
                value=table.value[None, wrong],
                bound=table.bound[None, wrong],
                refuted=np.ones((1, wrong.size), bool),
                confirmed=np.zeros((1, wrong.size), bool),
                rel_tol=judged.rel_tol,
                floor=judged.floor(wrong)[None, :],
                name=lambda i, j: name(int(table.row[wrong[j]]), int(table.column[wrong[j]])),
                x=judged.start[table.column[wrong]],
                whole=False,
            )
        )
    )


def _without_effect(table: EntryTable, empty: IntArray, name: Named) -> Diagnosis:
    """Values where the derivative is zero, which are missing nowhere else in their row or column."""
    names = _names(table, empty, name)
    claimed = f", claimed {number(float(table.claim[empty[0]]))}" if empty.size == 1 else ""
    text = (
        f"{listed(names)}{claimed}: the derivative is zero there. Look whether the function should depend on this "
        "variable (a term lost in the model), or the value belongs to another row or column."
    )
    return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=names)


def _repeated(table: EntryTable, chain: IntArray, repetition: Repetition, name: Named) -> Diagnosis:
    """Wrong values that repeat regularly, and the factor they have in common."""
    code, what = _in_common(table, chain)
    places = repetition_words(repetition, name)
    text = f"{what}: {places}. One formula makes them all; look at the line that fills this block."
    return Diagnosis(code=code, text=text, entries=_names(table, chain, name))


def _in_common(table: EntryTable, at: IntArray) -> tuple[DiagnosisCode, str]:
    ratio = ratio_in_common(table.claim[at], table.value[at])
    if abs(ratio + 1) < SAME_VALUE:
        return DiagnosisCode.SIGN_FLIPPED, "the claim is minus the derivative"
    if ratio == 0:
        return DiagnosisCode.ZERO_ENTRY, "claimed zero"
    if np.isfinite(ratio):
        return DiagnosisCode.CONSTANT_FACTOR, f"the claim is {number(ratio, digits=6)} times the derivative"
    return DiagnosisCode.UNKNOWN, "wrong values, by different factors"


def _many(table: EntryTable, wrong: IntArray, name: Named) -> Diagnosis:
    code, what = _in_common(table, wrong)
    text = f"{what}: {count(wrong.size, 'entry', 'entries')}, {listed(_names(table, wrong[:6], name))} and so on."
    return Diagnosis(code=code, text=text, entries=_names(table, wrong, name))


def diagnoses_of_rows(function: str, rows: IntArray, factor: Array) -> tuple[Diagnosis, ...]:
    """Likely mistakes in whole rows: those that are off by one factor."""
    diagnoses = []
    left = rows[np.isfinite(factor[rows])]
    while left.size:
        ratio = float(np.median(factor[left]))
        ratio = float(factor[left][np.abs(factor[left] - ratio).argmin()])
        alike = np.abs(factor[left] - ratio) <= SAME_ROW_FACTOR * abs(ratio)
        names = tuple(f"{function}[{row}]" for row in left[alike][:NAMED_MOST])
        minus = abs(ratio + 1) <= SAME_ROW_FACTOR
        what = "minus the derivative" if minus else f"{number(ratio, digits=6)} times the derivative"
        many = "the whole row" if len(names) == 1 else f"the whole of {count(int(alike.sum()), 'row')}"
        text = (
            f"{many} {listed(names)} is claimed {what}, along every random direction; look for a sign or a factor "
            "lost or doubled in this output."
        )
        code = DiagnosisCode.SIGN_FLIPPED if minus else DiagnosisCode.CONSTANT_FACTOR
        diagnoses.append(Diagnosis(code=code, text=text, entries=names))
        left = left[~alike]
        if len(diagnoses) >= ROW_STORIES_MOST:
            break
    return tuple(diagnoses)


def _transposed(table: EntryTable, faults: Faults, name: Named) -> Diagnosis | None:
    """Whether every fault is explained by the entry that stands across the diagonal."""
    m, n = table.shape
    at = np.union1d(faults.missing, faults.wrong)
    off_diagonal = at[table.row[at] != table.column[at]]
    if m != n or at.size < 2 or off_diagonal.size < at.size:
        return None
    across = table.find(table.column[at], table.row[at])
    mirrored = np.where(across >= 0, table.claim[np.maximum(across, 0)], 0.0)
    slack = 3 * table.bound[at] + 1e-6 * np.abs(table.value[at])
    if not bool((np.abs(mirrored - table.value[at]) <= slack).all()):
        return None
    # A pattern that is right but for its values is no proof: most off-diagonal entries have to be at fault.
    with np.errstate(invalid="ignore"):
        candidates = (table.row != table.column) & (table.claim != 0)
        partner = table.find(table.column[candidates], table.row[candidates])
        partner_claim = np.where(partner >= 0, table.claim[np.maximum(partner, 0)], 0.0)
        unequal = np.abs(partner_claim - table.claim[candidates]) > 1e-6 * np.abs(table.claim[candidates])
    if at.size < 0.9 * unequal.sum():
        return None
    return Diagnosis(
        code=DiagnosisCode.TRANSPOSED,
        text=(
            f"all {count(at.size, 'entry', 'entries')} at fault agree with the claim's transpose: rows are outputs, "
            "columns are variables; return `claim.T`, or exchange the row and column indices."
        ),
        entries=_names(table, at, name),
    )


def detection_words(detected: Detected) -> str:
    """What the detection of the pattern cost, and what it does not say."""
    cost = count(detected.evaluations, "evaluation")
    if not detected.complete:
        return f"the pattern of the function was looked for, but it is too full, or the budget too short ({cost})"
    return (
        f"which outputs depend on which variables was seen from values ({cost}): {count(detected.rows.size, 'place')}; "
        "an entry that is zero at this point may be nonzero elsewhere"
    )


def unused_finding(
    subject: Subject, function: str, table: EntryTable, unused: IntArray, repeated: Sequence[Repetition], name: Named
) -> Finding:
    """Entries of the pattern that are zero wherever one looks."""
    what = "entry of the pattern is" if unused.size == 1 else "entries of the pattern are"
    return Finding(
        code=FindingCode.DEAD_VARIABLE,
        severity=Severity.REMARK,
        function=function,
        variable=subject.layout.name(int(table.column[unused[0]])) if unused.size == 1 else None,
        where=Location(point=subject.start),
        text=(
            f"{unused.size:,} {what} zero here and did not change a bit of {function} far from the point, nor at "
            f"another point: {_where(table, unused, 'unused', repeated, name)}."
        ),
        remedy="Leave such entries out of the pattern if they are zero everywhere: a solver factorises them in vain.",
        evidence={"entries": int(unused.size)},
    )


def kinks_of_entries(subject: Subject, function: str, table: EntryTable, most: int = 10) -> list[Finding]:
    """Entries whose one-sided slopes part at the point itself."""
    findings = []
    for at in np.flatnonzero(np.isfinite(table.left))[:most].tolist():
        below, above = float(table.left[at]), float(table.right[at])
        row, variable = int(table.row[at]), subject.layout.name(int(table.column[at]))
        findings.append(
            Finding(
                code=FindingCode.KINK,
                severity=Severity.HAZARD,
                function=function,
                variable=variable,
                where=Location(point=subject.start),
                evidence={"left_slope": below, "right_slope": above, "output": row},
                text=(
                    f"output {row} of {function} has a kink in {variable} at the point itself: the slope is "
                    f"{number(below)} below it and {number(above)} above."
                ),
                remedy="Move the point off the kink, or smooth the model there; no derivative exists at a kink.",
            )
        )
    return findings
