"""The claims of a described problem as test items."""

from collections.abc import Iterator
from functools import cached_property
from typing import Any

import pytest

from gradcheck.errors import GradcheckError, UsageError
from gradcheck.plugin.items import Fault, Marked
from gradcheck.plugin.marks import MARK
from gradcheck.plugin.running import run_each
from gradcheck.problem.problem import Problem
from gradcheck.records.report import CheckReport


class Claims:
    """All claims of one problem. They are checked together, at the first that is asked for: the run is shared."""

    def __init__(self, problem: Problem, overrides: dict[str, Any]) -> None:
        self.problem = problem
        self.overrides = overrides

    def report(self, function: str, kind: str) -> CheckReport:
        """The report on one claim.

        Raises
        ------
        GradcheckError
            Where the problem could not be checked at all; the same for every claim.
        """
        if isinstance(self._outcome, GradcheckError):
            raise self._outcome
        return next(report for report in self._outcome if (report.function, report.kind) == (function, kind))

    @cached_property
    def _outcome(self) -> list[CheckReport] | GradcheckError:
        from gradcheck.checking import check_described

        try:
            return check_described(self.problem, **self.overrides)
        except GradcheckError as error:
            return error


class ClaimItem(Marked):
    """One claim of a problem."""

    def __init__(self, *, claims: Claims, function: str, kind: str, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.claims = claims
        self.function = function
        self.kind = kind
        self.add_marker(MARK)

    def runtest(self) -> None:
        run_each(self, self.source, [self._checked])

    def _checked(self) -> CheckReport:
        """The report, judged as `check` would."""
        from gradcheck.claims.policy import Policy

        return Policy.of().carry_out(self.claims.report(self.function, self.kind))


def claim_items(parent: pytest.Collector, name: str, problem: Problem) -> Iterator[pytest.Item]:
    """One item a claim: ``wing[gradcheck-stress-jacobian]``; none for a problem that claims no derivative."""
    from gradcheck.problem.subject import subject_of_problem

    try:
        targets = subject_of_problem(problem).targets
    except UsageError as error:
        yield Fault.from_parent(parent, name=name, source=problem, text=str(error))
        return
    tolerance = parent.config.getini("gradcheck_rel_tol")
    claims = Claims(problem, {"rel_tol": float(tolerance)} if tolerance else {})
    for function, target in targets.items():
        for kind in target.claims:
            rest = {"source": problem, "claims": claims, "function": function, "kind": kind}
            yield ClaimItem.labelled(parent, name, f"{MARK}-{function}-{kind}", **rest)
