"""Are traps in rules of automatic differentiation named, and honest rules left alone?

Measured on `tests.quality.rule_corpus`, in which jax and autograd are asked for derivatives whose rules have one known
trap each, or none. What counts how:

- A trap is named if the report has everything that its entry asks for: the verdict, one of the likely mistakes, the
  finding, the words. It is noticed if at least the verdict is refuted where it should be, or some finding tells it.
- An honest model is accused if it is refuted, or gets a finding worse than a remark that its entry does not allow.
- Seconds are those of a second check of the same model: the first one also compiles jax's own operations, which stay
  compiled. They hold for one process on a machine without other load.
- Sweeps are those that the trials took, apart from the claim itself.
"""

import math
import re
import time
import warnings
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import gradcheck
from benchmarks.figures import Figure, aligned, median, percent, side_by_side

if TYPE_CHECKING:
    from tests.quality.rule_corpus import Rule

QUESTION = "Are traps in rules of automatic differentiation named, and honest rules left alone?"


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What was said about one rule.

    Attributes
    ----------
    rule : Rule
    verdict : str
        ``"raises"`` where the check could not be carried out, empty where it ended in another exception.
    codes, findings : tuple of str
        Findings with their severity: ``"remark crash"``.
    text : str
        In lower case and one line.
    seconds : float
    sweeps : float
    """

    rule: "Rule"
    verdict: str
    codes: tuple[str, ...] = ()
    findings: tuple[str, ...] = ()
    text: str = ""
    seconds: float = math.nan
    sweeps: float = math.nan

    @property
    def missing(self) -> list[str]:
        """What the entry of a trap asks for and the report does not have."""
        rule = self.rule
        lacks = [] if self.verdict == rule.verdict else [f"{rule.verdict}, is {self.verdict or 'an exception'}"]
        if rule.codes and not set(rule.codes) & set(self.codes):
            lacks.append(f"one of {', '.join(rule.codes)}, has {', '.join(self.codes) or 'none'}")
        if rule.finding and not any(found.endswith(f" {rule.finding}") for found in self.findings):
            lacks.append(f"{rule.finding}, has {', '.join(self.findings) or 'none'}")
        return lacks + [f"the words {words!r}" for words in rule.says if words not in self.text]

    @property
    def noticed(self) -> bool:
        """Whether anything was said about a trap."""
        return self.verdict in ("refuted", "raises") or bool(self.findings)

    @property
    def accused(self) -> bool:
        """Whether an honest model was."""
        worse = [found for found in self.findings if not found.startswith("remark ")]
        allowed = set(self.rule.may)
        return self.verdict in ("refuted", "raises", "") or any(f.split()[1] not in allowed for f in worse)


@dataclass(slots=True)
class _Heard:
    """Two checks of the same rule."""

    rule: "Rule"
    seconds: list[float] = field(default_factory=list)

    def check(self) -> gradcheck.CheckReport:
        """The report of one."""
        began = time.perf_counter()
        rule = self.rule
        report = gradcheck.check(
            rule.model, at=rule.at, on_refuted="return", on_undecided="pass", **{rule.kind: rule.source}
        )
        self.seconds.append(time.perf_counter() - began)
        return report


def heard(rule: "Rule", times: int = 1) -> Outcome:
    """What `check` says about a rule, asked so often."""
    both = _Heard(rule)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            reports = [both.check() for _ in range(times)]
    except gradcheck.UsageError as error:
        return Outcome(rule=rule, verdict="raises", text=_plain(str(error)))
    except Exception as error:  # whatever it is, it counts against the library and must not end the measurement
        return Outcome(rule=rule, verdict="", text=f"{type(error).__name__}: {error}")
    report = reports[0]
    sweeps = re.search(r"(\d+) sweeps?", " ".join(report.notices))
    return Outcome(
        rule=rule,
        verdict=str(report.verdict),
        codes=tuple(str(diagnosis.code) for diagnosis in report.diagnoses),
        findings=tuple(f"{finding.severity} {finding.code}" for finding in report.findings),
        text=_plain(str(report)),
        seconds=both.seconds[-1],
        sweeps=float(sweeps[1]) if sweeps else math.nan,
    )


def _plain(text: str) -> str:
    return " ".join(text.split()).lower()


def figures(traps: Sequence[Outcome], honest: Sequence[Outcome]) -> list[Figure]:
    """All figures."""
    every = [*traps, *honest]
    seconds = [outcome.seconds for outcome in every]
    known = sorted(second for second in seconds if not math.isnan(second))
    return [
        Figure(name="traps", value=len(traps), form=".0f"),
        Figure(name="  noticed, %", value=percent([t.noticed for t in traps]), form=".1f"),
        Figure(
            name="  named as expected, %",
            value=percent([not t.missing for t in traps]),
            goal=95.0,
            at_least=True,
            form=".1f",
        ),
        Figure(name="honest models", value=len(honest), form=".0f"),
        Figure(name="  accused", value=sum(h.accused for h in honest), goal=0.0, form=".0f"),
        Figure(
            name="  with the verdict that is due, %",
            value=percent([h.verdict == h.rule.verdict for h in honest]),
            goal=95.0,
            at_least=True,
            form=".1f",
        ),
        Figure(name="exceptions", value=sum(not o.verdict for o in every), goal=0.0, form=".0f"),
        Figure(name="seconds a rule, median", value=median(seconds), goal=1.0, form=".2f"),
        Figure(name="  nine in ten below", value=known[int(0.9 * len(known))] if known else math.nan, form=".2f"),
        Figure(name="sweeps of the trials, median", value=median([o.sweeps for o in every]), form=".0f"),
    ]


def run(points: int, seed: int = 0) -> str:
    """The report; points and seed change nothing, each rule has one point."""
    # imported when used: jax and autograd are extras
    from tests.quality.rule_corpus import HONEST, TRAPS

    traps, honest = ([heard(rule, times=2) for rule in rules] for rules in (TRAPS, HONEST))
    missed = [(t.rule.name, "; ".join(t.missing)) for t in traps if t.missing]
    accused = [(h.rule.name, f"{h.verdict}: {', '.join(h.findings + h.codes)}") for h in honest if h.accused]
    parts = [
        f"{title}:\n{aligned(('rule', 'what'), rows) if rows else 'none'}"
        for title, rows in (("Traps that lack", missed), ("Honest models that were accused", accused))
    ]
    return "\n\n".join([*parts, side_by_side({"all": figures(traps, honest)})])
