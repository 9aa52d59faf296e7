"""Holds an audit of the demonstration against what was planted: what was found, what was missed, what is surplus."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck import wording
from gradcheck.demo.scenario import Planted
from gradcheck.records.finding import Finding, FindingCode
from gradcheck.records.report import AuditReport
from gradcheck.records.verdict import Verdict
from gradcheck.report.paragraphs import bullets

#: A place counts as found if it lies within the bracket widened by this share of its value: brackets are narrow, and
#: the planted places are computed from the data by other formulas than the model's.
_SLACK = 1e-6

_CLAIM_CODES = {Verdict.REFUTED: FindingCode.CLAIM_REFUTED, Verdict.UNDECIDED: FindingCode.CLAIM_UNDECIDED}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Outcome:
    """What an audit made of the planted faults.

    Attributes
    ----------
    found, missed : tuple of Planted
        Of those that any audit must find; the others appear in `found` only.
    surplus : tuple of str
        What was found although it is not planted, in words.
    """

    found: tuple[Planted, ...]
    missed: tuple[Planted, ...]
    surplus: tuple[str, ...]

    @property
    def exact(self) -> bool:
        """Whether exactly what is planted was found."""
        return not self.missed and not self.surplus


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Fact:
    """A finding, or an entry of a claim that is not confirmed, in the words of a planted fault."""

    code: FindingCode
    function: str
    variable: str
    lower: float = float("nan")
    upper: float = float("nan")


def held_against(report: AuditReport, planted: Sequence[Planted]) -> Outcome:
    """The outcome of `report` for the scenario in which `planted` is everything that is wrong."""
    facts = [*_facts_of_claims(report), *map(_fact_of, report.findings)]
    found = [item for item in planted if any(_is(fact, item) for fact in facts)]
    surplus = [_told(fact) for fact in facts if not any(_is(fact, item) for item in planted)]
    return Outcome(
        found=tuple(found),
        missed=tuple(item for item in planted if item.certain and item not in found),
        surplus=tuple(dict.fromkeys(surplus)),
    )


def outcome_text(outcome: Outcome) -> str:
    """The outcome as a list: each planted fault found or not, and what was found beyond them."""
    lines = ["Planted in this demonstration"]
    lines += bullets([f"found: {_planted(item)}" for item in outcome.found])
    lines += bullets([f"NOT FOUND: {_planted(item)}" for item in outcome.missed])
    lines += bullets([f"FOUND, BUT NOT PLANTED: {text}" for text in outcome.surplus])
    if outcome.exact:
        lines += ["Exactly what is planted was found."]
    return "\n".join(lines)


def _facts_of_claims(report: AuditReport) -> list[_Fact]:
    return [
        _Fact(code=_CLAIM_CODES[verdict], function=claim.function, variable=_variable_of(name))
        for claim in report.claims
        for name, verdict in zip(claim.entries.name, claim.entries.verdict, strict=True)
        if verdict in _CLAIM_CODES
    ]


def _variable_of(entry: str) -> str:
    """The variable of an entry: a Jacobian's are named ``velocity[2] by diameter_3``."""
    return entry.rpartition(" by ")[2]


def _fact_of(finding: Finding) -> _Fact:
    return _Fact(
        code=finding.code,
        function=finding.function,
        variable=finding.variable or "",
        lower=finding.where.lower,
        upper=finding.where.upper,
    )


def _is(fact: _Fact, item: Planted) -> bool:
    """Whether a fact is this planted fault; a fact without a variable or a place matches any."""
    if fact.code != item.kind or (item.function and fact.function != item.function):
        return False
    if item.variable and fact.variable and fact.variable != item.variable:
        return False
    if not item.places or not fact.variable or not np.isfinite([fact.lower, fact.upper]).all():
        return True
    slack = _SLACK * max(abs(fact.lower), abs(fact.upper))
    return any(fact.lower - slack <= place <= fact.upper + slack for place in item.places)


def _planted(item: Planted) -> str:
    return _sentence(item.kind, item.function, item.variable)


def _told(fact: _Fact) -> str:
    place = f" {wording.bracket(fact.lower, fact.upper)}" if np.isfinite([fact.lower, fact.upper]).all() else ""
    return _sentence(fact.code, fact.function, fact.variable) + place


def _sentence(code: FindingCode, function: str, variable: str) -> str:
    where = f" in {function}" if function else ""
    along = f", variable {variable}" if variable else ""
    return f"{wording.FINDING_WORDS[code]} ({code}){where}{along}"
