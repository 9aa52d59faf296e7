"""The check of a gradient with many entries: along random directions, with the wrong entries found and named."""

import time
from dataclasses import replace

import numpy as np

from gradcheck.checks.asked_again import answered_again, second_answer
from gradcheck.checks.claimed import claimed_matrix
from gradcheck.checks.measure import Measure, measure_of
from gradcheck.checks.told import told
from gradcheck.claims.desk import Examined
from gradcheck.claims.directions import LEAST, Group
from gradcheck.claims.examination import examine
from gradcheck.claims.joint_examination import APART, Culprit, JointlyExamined, examine_jointly
from gradcheck.claims.policy import Rules
from gradcheck.claims.rule import Tolerance, judge
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.report import CheckReport, Coverage, DirectionChecks
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.finite_difference import SOURCE
from gradcheck.witnesses.steps import room_along
from gradcheck.wording import count, listed, number

#: Entries that are looked at one by one where directions do not settle which are wrong: claims that are no number,
#: examples from a claim that is wrong nearly everywhere.
EXAMPLES = 8
#: Names of entries that no direction covers.
NAMED = 5


def checked_directions(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int
) -> CheckReport:
    """The report on a gradient claim, looked at along random directions; `before` evaluations were spent on others."""
    began = time.perf_counter()
    subject = session.subject
    matrix, failure = claimed_matrix(session, function, kind, centre)
    claim = matrix[0]
    measure = measure_of(session, function, kind, rules)
    inquiry = examine_jointly(
        subject.start,
        claim,
        subject.domain,
        centre,
        rel_tol=measure.rel_tol,
        abs_tol=measure.abs_tol,
        unit_roundoff=measure.unit_roundoff,
        directions=rules.directions if isinstance(rules.directions, int) else None,
        seed=rules.seed,
        blocks=[slice(leaf.start, leaf.stop) for leaf in subject.layout.leaves],
    )
    joint = conduct_one(addressed(inquiry, function=function), session.gate)
    second = second_answer(session, function, kind)
    changed = _changed(claim, second, measure)
    columns, examined = _entries(session, function, claim, centre, joint, changed, measure, rules)
    if changed.size:  # entries were looked at in between
        second = second_answer(session, function, kind)
    repeated = answered_again(session, function, kind, examined, columns, measure, second)
    report = told(session, function, kind, repeated, columns, centre, measure, rules, failure)
    entries = report.entries
    directions = _direction_checks(subject, claim, joint, any(v == Verdict.REFUTED for v in entries.verdict))
    return replace(
        report,
        verdict=Verdict.overall([*entries.verdict, *directions.verdict]),
        directions=directions,
        notices=(*_everywhere(subject, joint), *report.notices),
        evaluations=session.ledger.evaluations - before,
        seconds=time.perf_counter() - began,
        text="",
    )


def _entries(
    session: Session,
    function: str,
    claim: Array,
    centre: Array,
    joint: JointlyExamined,
    changed: IntArray,
    measure: Measure,
    rules: Rules,
) -> tuple[IntArray, Examined]:
    """The entries that are told one by one, and what is known of them.

    Culprits that a second look agreed on are judged by what was measured; everything else by the whole examination.
    """
    culprits = sorted(joint.culprits, key=lambda culprit: culprit.place)
    if joint.agreed and culprits and changed.size == 0:
        columns = np.array([culprit.place for culprit in culprits], dtype=np.intp)
        measured = _measured(session.subject, claim, centre, culprits, joint, measure)
        if all(verdict == Verdict.REFUTED for verdict in measured.verdict[0]):
            return columns, measured
    columns = np.union1d(_examples(claim, joint, session.subject), changed)
    inquiry = examine(
        session.subject.start,
        columns,
        claim[None, columns],
        room_along(session.subject.start, columns, session.subject.domain),
        centre,
        session.subject.domain.scale[columns],
        rel_tol=measure.rel_tol,
        abs_tol=measure.abs_tol,
        unit_roundoff=measure.unit_roundoff,
        witnesses=rules.witnesses,
    )
    return columns, conduct_one(addressed(inquiry, function=function), session.gate)


def _changed(claim: Array, second: Array | None, measure: Measure) -> IntArray:
    """The first entries that the claim answers otherwise when it is asked again."""
    if second is None:
        return np.zeros(0, np.intp)
    with np.errstate(invalid="ignore"):
        apart = ~(np.abs(second[0] - claim) <= measure.abs_tol + measure.rel_tol * np.abs(claim))
    apart &= np.isfinite(claim) | np.isfinite(second[0])
    return np.flatnonzero(apart)[:EXAMPLES]


def _examples(claim: Array, joint: JointlyExamined, subject: Subject) -> IntArray:
    """Entries to be examined one by one: culprits in doubt, claims that are no number, entries of wrong parts."""
    chosen = [culprit.place for culprit in joint.culprits[:EXAMPLES]]
    broken = np.flatnonzero(~np.isfinite(claim) & ~subject.domain.integer)
    chosen += broken[:EXAMPLES].tolist()
    if joint.parts:
        wrong = np.zeros(claim.size, bool)
        for part in joint.parts:
            wrong[part.start : part.stop] = True
        for leaf in subject.layout.leaves:
            wrong[leaf.start : leaf.stop] &= joint.blocks.get(leaf.start, True)
        places = np.flatnonzero(wrong & (joint.moves.group != Group.LEFT_OUT))
        # At random: places in even steps may all lie in one row of a matrix.
        chosen += np.random.default_rng(0).permutation(places)[:EXAMPLES].tolist()
    if not joint.directions and not chosen:  # no variable has any room: entries tell the reason
        chosen = np.flatnonzero(~subject.domain.integer)[:EXAMPLES].tolist()
    return np.unique(np.array(chosen, dtype=np.intp))


def _measured(
    subject: Subject,
    claim: Array,
    centre: Array,
    culprits: list[Culprit],
    joint: JointlyExamined,
    measure: Measure,
) -> Examined:
    columns = np.array([culprit.place for culprit in culprits], dtype=np.intp)
    value = np.array([[culprit.value for culprit in culprits]])
    bound = np.array([[culprit.bound for culprit in culprits]])
    claimed = claim[None, columns]
    floor = measure.unit_roundoff * (abs(float(centre[0])) or 1.0)
    rounding = np.full(columns.size, min(max(floor, joint.noise), 1e3 * floor)) / subject.domain.scale[columns]
    tolerance = Tolerance(rel_tol=measure.rel_tol, abs_tol=measure.abs_tol, rounding=rounding[None, :])
    judged = judge(claimed, value, bound, tolerance)
    verdict = np.where(judged.refuted, Verdict.REFUTED, Verdict.UNDECIDED).astype(object)
    unknown = np.full(value.shape, np.nan)
    return Examined(
        claim=claimed,
        value=value,
        bound=bound,
        left=unknown,
        right=unknown,
        verdict=verdict,
        source=np.full(value.shape, SOURCE, dtype=object),
        reason=np.full(value.shape, "", dtype=object),
        noise=np.array([joint.noise]),
    )


def _direction_checks(subject: Subject, claim: Array, joint: JointlyExamined, refuted: bool) -> DirectionChecks:
    directions = joint.directions
    if joint.doubted and not refuted and not joint.parts:
        # What they are off was explained by entries, and these are not refuted one by one.
        directions = [
            replace(each, verdict=Verdict.UNDECIDED, reason=APART) if each.verdict == Verdict.REFUTED else each
            for each in directions
        ]
    suspects = [Verdict.REFUTED if refuted and d.suspect else d.verdict for d in directions]
    left_out = np.flatnonzero(joint.moves.group == Group.LEFT_OUT)
    coverage = tuple(_coverage(claim, joint))
    return DirectionChecks(
        claim=np.array([direction.claim for direction in directions]),
        witness=np.array([direction.witness for direction in directions]),
        bound=np.array([direction.bound for direction in directions]),
        verdict=tuple(suspects),
        smallest_visible=next((part.share for part in coverage if np.isfinite(part.share)), float("nan")),
        coverage=coverage,
        left_out=left_out.size,
        left_out_names=tuple(subject.layout.name(int(i)) for i in left_out[:NAMED]),
        reason=tuple(direction.reason for direction in directions),
    )


def _coverage(claim: Array, joint: JointlyExamined) -> list[Coverage]:
    """What a single error must be to be surely seen, for each kind of entries."""
    confirmed = [d for d in (*joint.directions, *joint.quiet) if d.verdict == Verdict.CONFIRMED]
    visible = {
        group: min(d.visible for d in confirmed if d.group == group) / LEAST
        for group in {direction.group for direction in confirmed}
    }
    moves, told = joint.moves, []
    if (seen := visible.get(Group.SCALED)) is not None:
        limited = int(np.count_nonzero(moves.limited(claim)))
        full = moves.count(Group.SCALED) - limited
        if full:
            told.append(Coverage(what="entries scaled by their claim", entries=full, share=seen / moves.level))
        if limited:
            level = number(moves.level, digits=2)
            what = f"entries with |claim| times size below {level}"
            told.append(Coverage(what=what, entries=limited, over_size=seen))
    if (seen := visible.get(Group.ZERO)) is not None:
        what = "entries claimed to be zero, or as good as zero"
        told.append(Coverage(what=what, entries=moves.count(Group.ZERO), over_size=seen))
    if (seen := visible.get(Group.INWARD)) is not None:
        inward = moves.group == Group.INWARD
        least = float((np.abs(moves.reach[inward]) / moves.typical[inward]).min())
        what = "entries close to a bound"
        told.append(Coverage(what=what, entries=moves.count(Group.INWARD), over_size=seen / least))
    return told


def _everywhere(subject: Subject, joint: JointlyExamined) -> tuple[str, ...]:
    """Where more is wrong than can be named: which parts."""
    if np.isfinite(joint.ratio):
        along = count(sum(d.group == joint.directions[0].group for d in joint.directions), "random direction")
        text = (
            f"along {along} over all {joint.moves.count(joint.directions[0].group):,} entries the claim is "
            f"{number(joint.ratio, digits=6)} times the derivative, so that nearly all entries are; those below are "
            "examples."
        )
        return (text,)
    if not joint.parts:
        return ()
    if any(joint.blocks.values()):
        named = {
            mark: [leaf.path for leaf in subject.layout.leaves if joint.blocks.get(leaf.start) is mark]
            for mark in (True, False)
        }
        right = f"; no error was seen in {listed(named[False])}" if named[False] else ""
        text = f"more entries are wrong than can be named one by one, in {listed(named[True])}{right}. The entries told"
        return (f"{text} are examples.",)
    runs: list[list[int]] = []
    for part in sorted(joint.parts, key=lambda part: part.start):
        if runs and part.start == runs[-1][1]:
            runs[-1][1] = part.stop
        else:
            runs.append([part.start, part.stop])
    name = subject.layout.name
    stretches = [f"{name(start)} to {name(stop - 1)}" for start, stop in runs[:4]]
    text = (
        f"more entries are wrong than can be named one by one: {count(len(joint.parts), 'part')} of the claim hold "
        f"wrong ones, {', '.join(stretches)}{' ...' if len(runs) > 4 else ''}; the entries below are examples."
    )
    return (text,)
