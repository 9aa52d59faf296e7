"""A claim named after an AD library is tried under all that will be done to it; what breaks goes into its report."""

import time
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from gradcheck.checks.claimed import AD_SOURCES, claimed_matrix
from gradcheck.claims.entries import entry_name
from gradcheck.claims.policy import Rules
from gradcheck.claims.transforms import Tried, trials
from gradcheck.counsel.rule_findings import (
    lost_in_single,
    notice_of,
    reason_of,
    restriction,
    rule_diagnoses,
    short_diagnosis,
    short_finding,
    wrong_second,
)
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.protocol import Reply, Request, Status
from gradcheck.problem.layout import Leaf
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.finding import Finding
from gradcheck.records.report import CheckReport, Diagnosis, Entries
from gradcheck.records.verdict import DiagnosisCode, Verdict

#: Kinds of claims whose value is the whole derivative.
KINDS = ("gradient", "jacobian")
#: Parts of a nesting that are each put under vmap alone.
PARTS_MOST = 3
#: Matrices with more entries are not asked for as a whole.
ENTRIES_MOST = 4_000_000


def with_trials(
    session: Session, report: CheckReport, function: str, kind: str, centre: Array, rules: Rules
) -> CheckReport:
    """The report on a claim, with what the trials show if it is the name of an AD library."""
    source = session.subject.targets[function].claims[kind]
    if not rules.trials or kind not in KINDS or not isinstance(source, str) or source not in AD_SOURCES:
        return report
    if centre.size > 1 and centre.size * session.subject.layout.size > ENTRIES_MOST:
        return report
    claim, _ = claimed_matrix(session, function, kind, centre)
    return tried_claim(session, report, function, source, claim, centre, seed=rules.seed)


def tried_claim(
    session: Session, report: CheckReport, function: str, source: str, claim: Array, centre: Array, *, seed: int = 0
) -> CheckReport:
    """The report with what the trials show.

    Parameters
    ----------
    session : Session
    report : CheckReport
        What the comparison with the witnesses came to.
    function, source : str
    claim : ndarray, shape (m, n)
        The derivative that the source gives.
    centre : ndarray, shape (m,)
    seed : int

    Returns
    -------
    CheckReport
        Never better than before: entries that some transformation spoils are refuted.
    """
    began = time.perf_counter()
    subject = session.subject
    leaves = subject.layout.leaves
    words: dict[str, str] = {}

    def gate(requests: Sequence[Request]) -> Sequence[Reply]:
        replies = session.gate(requests)
        for request, reply in zip(requests, replies, strict=True):
            if int(reply.status[0, 0]) == Status.CRASH:
                words[request.arithmetic] = session.ledger.last_words.get((function, source), "")
        return replies

    inquiry = trials(
        subject.start,
        claim,
        centre,
        subject.domain,
        source,
        right=_known(report.entries, claim),
        parts=[slice(leaf.start, leaf.stop) for leaf in leaves[:PARTS_MOST]] if len(leaves) > 1 else (),
        second=source == "jax" and report.verdict != Verdict.REFUTED,
        single=source == "jax" and _single_by_default(),
        transforms=source == "jax",
        seed=seed,
    )
    tried = conduct_one(addressed(inquiry, function=function), gate)
    told = _Story(subject, function, source, leaves, report, tried, words).told()
    return replace(told, seconds=report.seconds + time.perf_counter() - began, text="")


def _single_by_default() -> bool:
    # imported when used: jax is an extra
    from gradcheck.evaluation.arithmetic.with_jax import is_double

    return not is_double()


class _Story:
    """Puts what was tried into a report."""

    def __init__(
        self,
        subject: Subject,
        function: str,
        source: str,
        leaves: Sequence[Leaf],
        report: CheckReport,
        tried: Tried,
        words: dict[str, str],
    ) -> None:
        self.subject, self.function, self.source = subject, function, source
        self.report, self.tried, self.words = report, tried, words
        self.parts = [leaf.path for leaf in leaves]
        self.broken = tried.broken

    def told(self) -> CheckReport:
        report = self.report
        entries = report.entries
        for broken in self.broken:
            entries = _refuted(entries, broken.wrong, reason_of(broken, self.parts))
        diagnoses = rule_diagnoses(self.broken, self._name, self.parts, self.source)
        short = self._short()
        diagnoses += [short] if short else []
        verdict = Verdict.REFUTED if self.broken else report.verdict
        notices = [notice_of(self.tried, self.source)]
        if self.tried.second:
            notices.append(
                f"the verdict is on the gradient; its second derivative by {self.source} is wrong, see there"
            )
        return replace(
            report,
            verdict=verdict,
            entries=entries,
            diagnoses=(*diagnoses, *_unexplained(report.diagnoses, diagnoses)),
            findings=(*report.findings, *self._findings(short is not None)),
            notices=(*report.notices, *filter(None, notices)),
        )

    def _name(self, row: int, column: int) -> str:
        return entry_name(self.subject, self.function, len(self.broken[0].wrong), row, column)

    def variables(self, marks: BoolArray) -> tuple[str, ...]:
        return tuple(self.subject.layout.name(int(j)) for j in marks.nonzero()[0])

    def _short(self) -> Diagnosis | None:
        """Single precision of the rule as the mistake behind entries that are off by its rounding."""
        if not self.tried.short.any():
            return None
        names = [
            entry
            for entry, index, verdict in zip(
                self.report.entries.name, self.report.entries.index, self.report.entries.verdict, strict=True
            )
            if verdict != Verdict.CONFIRMED and self.tried.short[int(np.ravel(index)[-1])]
        ]
        off = np.abs(self.report.entries.claim - self.report.entries.witness)
        size = np.abs(self.report.entries.witness)
        slight = bool(np.all(off <= 1e-5 * size.max(initial=0.0)))
        return short_diagnosis(tuple(names), self.source) if names and slight else None

    def _findings(self, short_told: bool) -> list[Finding]:
        point, tried = self.subject.start, self.tried
        about = {"function": self.function, "point": point, "source": self.source}
        findings = [] if self.broken else self._restrictions()
        if tried.second:
            findings.append(wrong_second(tried.second, names=self.variables(tried.second.wrong), **about))  # type: ignore[arg-type]
        if tried.single:
            findings.append(lost_in_single(tried.single, names=self.variables(tried.single.wrong), **about))  # type: ignore[arg-type]
        if tried.short.any() and not short_told and not self.broken:
            findings.append(short_finding(self.variables(tried.short), **about))  # type: ignore[arg-type]
        return findings

    def _restrictions(self) -> list[Finding]:
        """One finding for all ways that fail for the same reason: what cannot be compiled cannot be scanned either."""
        if self.source != "jax":  # few rules of autograd know forward mode, and nobody misses it
            return []
        groups: dict[str, list[str]] = {}
        for way in dict.fromkeys(self.tried.raised):
            groups.setdefault(self._words(way).partition(":")[0], []).append(way)
        return [
            restriction(ways, self._words(ways[0]), self.function, self.subject.start, self.parts, self.source)
            for ways in groups.values()
        ]

    def _words(self, way: str) -> str:
        forward = way.replace("vmap", "vmap forward")
        for each in (f"jit {way}", way, forward, *(("jit reverse", "jit forward") if way == "jit" else ())):
            if each in self.words:
                return self.words[each]
        return "it raised"


def _known(entries: Entries, claim: Array) -> Array:
    """The derivative as far as it is known: the witness where it has refuted the claim, else the claim."""
    index = np.asarray(entries.index)
    rows, columns = (np.zeros(len(index), dtype=np.intp), index) if index.ndim == 1 else index.T
    refuted = np.array([verdict == Verdict.REFUTED for verdict in entries.verdict], dtype=bool)
    refuted &= np.isfinite(entries.claim)  # of NaN the other mode makes NaN as well
    known = claim.copy()
    known[rows[refuted], columns[refuted]] = entries.witness[refuted]
    return known


def _refuted(entries: Entries, wrong: BoolArray, reason: str) -> Entries:
    """The entries with these refuted; what was refuted before keeps its reason."""
    index = np.asarray(entries.index)
    hit = wrong[0, index] if index.ndim == 1 else wrong[index[:, 0], index[:, 1]]
    verdicts, reasons = list(entries.verdict), list(entries.reason)
    for k in np.flatnonzero(hit).tolist():
        if verdicts[k] != Verdict.REFUTED:
            verdicts[k], reasons[k] = Verdict.REFUTED, reason
    return replace(entries, verdict=tuple(verdicts), reason=tuple(reasons))


def _unexplained(before: Sequence[Diagnosis], now: Sequence[Diagnosis]) -> list[Diagnosis]:
    """Earlier diagnoses, without those whose entries a stronger one explains: a cotangent lost looks like a factor."""
    named = (DiagnosisCode.IGNORES_COTANGENT, DiagnosisCode.SINGLE_PRECISION)
    explained = {entry for diagnosis in now if diagnosis.code in named for entry in diagnosis.entries}
    return [diagnosis for diagnosis in before if not set(diagnosis.entries) <= explained]
