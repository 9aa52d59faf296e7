"""Are right claims confirmed, and planted mistakes refuted, at the right entries and with the right story?

Measured on `tests.quality.mistake_corpus`. What counts how:

- A right claim counts as confirmed only if the verdict on the whole claim is `confirmed`; undecided is no success. An
  entry that is refuted there is an accusation.
- A wrong claim is named exactly if the refuted entries are those whose error is visible, and besides them only such as
  are wrong by less than can be seen. It has the right story if some diagnosis has the planted mistake's code and names
  no entry that is right.
- On noisy models `digits seen` are those of entries that make up at least a tenth of what the function amounts to.
- An exception is counted, and is no verdict.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

import gradcheck
from benchmarks.figures import Figure, aligned, percent, side_by_side
from gradcheck import CheckReport, Verdict
from tests.quality.mistake_corpus import MISTAKES, PLAIN, Claim, noisy_claims, planted, right_claims

QUESTION = "Are right claims confirmed, and planted mistakes named?"
LONGEST_SHOWN = 90
LISTED_MOST = 30


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Told:
    """What `check` said about one claim; `report` is None if it raised."""

    claim: Claim
    report: CheckReport | None = None
    failure: str = ""

    @property
    def verdict(self) -> str:
        """The overall verdict; empty after an exception."""
        return "" if self.report is None else str(self.report.verdict)

    def entries(self, verdict: Verdict) -> np.ndarray:
        """Where the entries have this verdict, in the shape of the claim; nowhere after an exception."""
        marks = np.zeros(self.claim.right.shape, dtype=bool)
        if self.report is not None:
            for place, found in zip(self.report.entries.index, self.report.entries.verdict, strict=True):
                marks[tuple(np.atleast_1d(place))] = found == verdict
        return marks

    @property
    def digits(self) -> np.ndarray:
        """Digits that are seen to agree, in the shape of the claim; NaN where nothing was said."""
        digits = np.full(self.claim.right.shape, math.nan)
        if self.report is not None:
            for place, found in zip(self.report.entries.index, self.report.entries.digits, strict=True):
                digits[tuple(np.atleast_1d(place))] = found
        return digits

    @property
    def named_exactly(self) -> bool:
        """Whether every entry that is visibly wrong is refuted, and none that is right."""
        refuted = self.entries(Verdict.REFUTED)
        allowed = self.claim.wrong | self.claim.hidden
        return bool(refuted[self.claim.wrong].all() and not refuted[~allowed].any())

    @property
    def told_rightly(self) -> bool:
        """Whether a diagnosis with the mistake's code names entries, and only wrong ones."""
        if self.report is None:
            return False
        wrong = {self.report.entries.name[k] for k in np.flatnonzero(np.ravel(self.claim.wrong | self.claim.hidden))}
        return any(d.code == self.claim.code and d.entries and set(d.entries) <= wrong for d in self.report.diagnoses)

    @property
    def believed(self) -> bool:
        """Whether an entry that is visibly wrong was confirmed."""
        return bool((self.entries(Verdict.CONFIRMED) & self.claim.wrong).any())


def ask(claims: Sequence[Claim]) -> list[Told]:
    """What `gradcheck.check` says about each claim."""
    return [_asked(claim) for claim in claims]


def _asked(claim: Claim) -> Told:
    options = {claim.kind: claim.claimed, "on_refuted": "return", "on_undecided": "pass"}
    try:
        return Told(claim=claim, report=gradcheck.check(claim.function, claim.x, **options))
    except Exception as fault:  # whatever it is, it counts against the library and must not end the measurement
        return Told(claim=claim, failure=f"{type(fault).__name__}: {fault}")


def right_figures(told: Sequence[Told]) -> list[Figure]:
    """Of right claims about smooth models."""
    entries = [mark for each in told for mark in np.ravel(each.entries(Verdict.CONFIRMED))]
    accused = sum(bool(each.entries(Verdict.REFUTED).any()) for each in told)
    spent = [each.report.evaluations / each.claim.x.size for each in told if each.report is not None]
    return [
        Figure(name="claims", value=len(told), form=".0f"),
        Figure(
            name="confirmed, %",
            value=percent([each.verdict == Verdict.CONFIRMED for each in told]),
            goal=99.0,
            at_least=True,
            form=".2f",
        ),
        Figure(name="entries", value=len(entries), form=".0f"),
        Figure(name="entries confirmed, %", value=percent(entries), goal=99.0, at_least=True, form=".2f"),
        Figure(name="accused", value=accused, goal=0.0),
        Figure(name="evaluations a variable, median", value=float(np.median(spent)) if spent else math.nan, goal=6.5),
        Figure(name="exceptions", value=sum(bool(each.failure) for each in told), goal=0.0),
    ]


def wrong_figures(told: Sequence[Told]) -> list[Figure]:
    """Of claims with a planted mistake."""

    def share(name: str, marks: Sequence[bool], goal: float | None) -> Figure:
        return Figure(name=name, value=percent(marks), goal=goal, at_least=True, form=".1f")

    return [
        Figure(name="claims", value=len(told), form=".0f"),
        share("refuted, %", [each.verdict == Verdict.REFUTED for each in told], 100.0),
        share("exactly the wrong entries, %", [each.named_exactly for each in told], 100.0),
        share("the right story, %", [each.told_rightly for each in told], 95.0),
        Figure(name="a wrong entry confirmed", value=sum(each.believed for each in told), goal=0.0),
        Figure(name="exceptions", value=sum(bool(each.failure) for each in told), goal=0.0),
    ]


def noisy_figures(told: Sequence[Told]) -> list[Figure]:
    """Of right claims about noisy models."""
    seen = [
        digits > 0
        for each in told
        for digits in each.digits[(each.claim.share >= PLAIN) & each.entries(Verdict.UNDECIDED)]
    ]
    return [
        Figure(name="claims", value=len(told), form=".0f"),
        Figure(name="accused", value=sum(bool(e.entries(Verdict.REFUTED).any()) for e in told), goal=0.0),
        Figure(name="undecided, %", value=percent([e.verdict == Verdict.UNDECIDED for e in told]), form=".1f"),
        Figure(name="with digits seen, %", value=percent(seen), goal=100.0, at_least=True, form=".1f"),
        Figure(name="exceptions", value=sum(bool(e.failure) for e in told), goal=0.0),
    ]


def kinds_of_noise(told: Sequence[Told]) -> dict[str, list[Told]]:
    """Parts of the noisy claims, by what makes the noise."""
    parts: dict[str, list[Told]] = {}
    for each in told:
        _, comma, noise = each.claim.name.rpartition(", ")
        parts.setdefault(noise if comma else "inner iteration", []).append(each)
    return parts


def flipped(claims: Sequence[Claim]) -> list[Claim]:
    """The claims with the sign of their largest entry turned; those that are zero in all entries are left out."""
    wrong = []
    for claim in claims:
        if not (claim.share >= PLAIN).any():
            continue
        place = int(np.argmax(claim.share))
        claimed = claim.right.copy()
        claimed[place] *= -1.0
        wrong.append(replace(claim, claimed=claimed, mistake="sign of one entry", code="sign-flipped"))
    return wrong


def shortcomings(told: Sequence[Told]) -> str:
    """Claims that did not end as they should, each in a line."""
    rows = [(_label(each), each.verdict or "-", _complaint(each)[:LONGEST_SHOWN]) for each in told if _complaint(each)]
    if not rows:
        return "none"
    rest = f"\n... and {len(rows) - LISTED_MOST} more" if len(rows) > LISTED_MOST else ""
    return aligned(("claim", "verdict", "what"), rows[:LISTED_MOST]) + rest


def _label(each: Told) -> str:
    claim = each.claim
    return f"{claim.name} ({claim.kind}{', ' + claim.mistake if claim.mistake else ''})"


def _complaint(each: Told) -> str:
    claim = each.claim
    if each.report is None:
        return each.failure
    refuted = each.entries(Verdict.REFUTED)
    if (refuted & ~(claim.wrong | claim.hidden)).any():
        return "accuses right entries: " + _places(refuted & ~(claim.wrong | claim.hidden))
    if (claim.wrong & ~refuted).any():
        return "does not refute: " + _places(claim.wrong & ~refuted)
    if claim.mistake and not each.told_rightly:
        return f"{claim.code} expected, told: {', '.join(d.code for d in each.report.diagnoses)}"
    if not claim.mistake and each.verdict != Verdict.CONFIRMED:
        return "undecided: " + _places(each.entries(Verdict.UNDECIDED))
    return ""


def _places(marks: np.ndarray) -> str:
    return ", ".join(
        str(tuple(map(int, place))) if place.size > 1 else str(int(place[0])) for place in np.argwhere(marks)
    )


def run(points: int, seed: int = 0) -> str:
    """The report on `gradcheck.check`."""
    right = ask(right_claims(points, seed))
    wrong = ask(planted(points, seed))
    noisy = noisy_claims(points, seed)
    parts = kinds_of_noise(ask(noisy))
    turned = kinds_of_noise(ask(flipped(noisy)))
    by_mistake = {name: [each for each in wrong if each.claim.mistake == name] for name in MISTAKES}
    return "\n\n".join(
        (
            f"Right claims that were not confirmed:\n{shortcomings(right)}",
            f"Planted mistakes that were not named as they should:\n{shortcomings(wrong)}",
            "Right claims about smooth models:\n" + side_by_side({"all": right_figures(right)}),
            "Planted mistakes:\n"
            + side_by_side(
                {"all": wrong_figures(wrong), **{name: wrong_figures(part) for name, part in by_mistake.items()}}
            ),
            "Right claims about models with errors of 1e-6:\n"
            + side_by_side({name: noisy_figures(part) for name, part in parts.items()}),
            "The same with the largest entry's sign turned:\n"
            + side_by_side({name: wrong_figures(part)[:3] for name, part in turned.items()}),
        )
    )
