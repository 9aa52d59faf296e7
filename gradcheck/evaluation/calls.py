"""Below the gate, requests are single calls: what budget, cache, journal, isolation and workers handle one by one."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

from numpy.typing import NDArray

from gradcheck.evaluation.protocol import Status


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Call:
    """One call of a callable of the subject.

    Attributes
    ----------
    run : str
        Which callable; several functions of a problem may come from one run.
    function : str
        For AD and claims: which function's derivative. Empty for plain evaluations, which give all outputs of the run.
    arithmetic, source, level, fresh
        As in `Request`.
    point : ndarray, shape (n,)
        Real or complex.
    rows : ndarray or None
        ``(d, n)`` tangents for ``"jvp"``, ``(d, m)`` cotangents for ``"vjp"``.
    """

    run: str
    point: NDArray[Any]
    function: str = ""
    arithmetic: str = "real"
    source: str = "model"
    level: int = 0
    fresh: bool = False
    rows: NDArray[Any] | None = None

    @property
    def kind(self) -> str:
        """Under which heading the ledger counts it."""
        if self.source != "model":
            return self.source.partition(":")[0]
        return "complex" if self.arithmetic == "complex" else "model"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Outcome:
    """What came of one call.

    Attributes
    ----------
    values : dict of function -> ndarray
        Flat values ``(m,)``, or ``(d, m)`` for a jvp, ``(d, n)`` for a vjp; a function that failed is missing.
    status : dict of function -> Status
    message : str
        The model's last words, if it failed.
    spent : int
        1, or 0 if the answer was in the cache or refused.
    """

    values: dict[str, NDArray[Any]] = field(default_factory=dict)
    status: dict[str, Status] = field(default_factory=dict)
    message: str = ""
    spent: int = 1


#: Budget, cache, journal, isolation, workers and the evaluator itself all have this shape and wrap one another.
Engine: TypeAlias = Callable[[Sequence[Call]], Sequence[Outcome]]

REFUSED = Outcome(message="budget or time spent", spent=0)
