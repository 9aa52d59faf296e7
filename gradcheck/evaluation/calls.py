"""Below the gate, requests are calls of one callable at many points: what budget, cache, journal, isolation, workers
and the evaluator hand on to one another.
"""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from gradcheck.evaluation.moves import Moves
from gradcheck.evaluation.protocol import Status
from gradcheck.records.arrays import IntArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Call:
    """One callable of the subject at k points; a claim or an AD library at one point.

    Attributes
    ----------
    run : str
        Which callable; several functions of a problem may come from one run.
    moves : Moves
        The points, real or complex.
    function : str
        For AD and claims: which function's derivative. Empty for plain evaluations, which give all outputs of the run.
    arithmetic, source, level, fresh
        As in `Request`.
    rows : ndarray or None
        ``(d, n)`` tangents for ``"jvp"``, ``(d, m)`` cotangents for ``"vjp"``.
    until : float or None
        A moment of `time.monotonic` from which on no further point is begun; such points are refused.
    """

    run: str
    moves: Moves
    function: str = ""
    arithmetic: str = "real"
    source: str = "model"
    level: int = 0
    fresh: bool = False
    rows: NDArray[Any] | None = None
    until: float | None = None

    def __len__(self) -> int:
        return len(self.moves)

    def at(self, part: slice | IntArray) -> "Call":
        """The same call at some of its points."""
        return replace(self, moves=self.moves[part])

    @property
    def kind(self) -> str:
        """Under which heading the ledger counts it."""
        if self.source != "model":
            return self.source.partition(":")[0]
        return "complex" if self.arithmetic == "complex" else "model"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Outcome:
    """What came of a call at its k points.

    Attributes
    ----------
    values : dict of function -> ndarray
        Flat values ``(k, m)``, or ``(1, d, m)`` for a jvp, ``(1, d, n)`` for a vjp; NaN at points that failed. A
        function that failed everywhere may be missing. A claim: ``(1, m, n)``; a sparse one its stored entries
        ``(1, k)``, see `problem.sparse_claim`.
    status : dict of function -> ndarray of int8, shape (k,)
        A `Status` each; a function that is missing was refused everywhere.
    spent : int
        Points that were evaluated: neither remembered nor refused.
    """

    values: dict[str, NDArray[Any]] = field(default_factory=dict)
    status: dict[str, NDArray[np.int8]] = field(default_factory=dict)
    spent: int = 0


#: Budget, cache, journal, isolation, workers and the evaluator itself all have this shape and wrap one another.
Engine: TypeAlias = Callable[[Sequence[Call]], Sequence[Outcome]]

#: Some points of an outcome, and where they stand in another one.
Piece: TypeAlias = tuple[Outcome, IntArray, IntArray]


def assembled(pieces: Iterable[Piece], size: int, spent: int) -> Outcome:
    """The outcome of `size` points from pieces of others; what no piece holds was refused."""
    values: dict[str, NDArray[Any]] = {}
    status: dict[str, NDArray[np.int8]] = {}
    for outcome, theirs, mine in pieces:
        for name, states in outcome.status.items():
            if name not in status:
                status[name] = np.full(size, Status.REFUSED, dtype=np.int8)
            status[name][mine] = states[theirs]
        for name, found in outcome.values.items():
            if name not in values:
                # The stored entries of a sparse claim are records, and know no NaN.
                unknown = np.nan if found.dtype.names is None else 0
                values[name] = np.full((size, *found.shape[1:]), unknown, dtype=found.dtype)
            values[name][mine] = found[theirs]
    return Outcome(values=values, status=status, spent=spent)
