"""Gates for tests: what stands between an inquiry and a plain Python function."""

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from gradcheck.evaluation.moves import Moves
from gradcheck.evaluation.protocol import Reply, Request, Status


class CountingGate:
    """Answers requests by calling a function, point by point, and counts the calls.

    Attributes
    ----------
    evaluations : int
        Calls made so far.
    rounds : int
        Times that the gate was asked.
    limit : int or None
        Points beyond this number are refused.
    """

    def __init__(self, function: Callable[[Any], Any], limit: int | None = None) -> None:
        self.function = function
        self.limit = limit
        self.evaluations = 0
        self.rounds = 0
        self.outputs = 1

    def __call__(self, requests: Sequence[Request]) -> list[Reply]:
        self.rounds += 1
        return [self._answer(request) for request in requests]

    def _answer(self, request: Request) -> Reply:
        before = self.evaluations
        moves, (d, k) = Moves.of(request), request.offsets.shape
        rows = [[self._evaluate(moves.point(row * k + i)) for i in range(k)] for row in range(d)]
        wide = [value.size for row in rows for value, status in row if status <= Status.NONFINITE]
        self.outputs = max([self.outputs, *wide])
        values = np.full((*request.offsets.shape, self.outputs), np.nan)
        status = np.zeros(request.offsets.shape, dtype=np.int8)
        for i, row in enumerate(rows):
            for j, (value, state) in enumerate(row):
                values[i, j], status[i, j] = value, state
        return Reply(values=values, status=status, spent=self.evaluations - before)

    def _evaluate(self, x: Any) -> tuple[Any, Status]:
        if self.limit is not None and self.evaluations >= self.limit:
            return np.array([np.nan]), Status.REFUSED
        self.evaluations += 1
        try:
            with np.errstate(all="ignore"):  # a NaN is an answer, not a warning
                value = np.atleast_1d(np.asarray(self.function(x), dtype=float))
        except Exception:  # whatever a model raises is a crash
            return np.array([np.nan]), Status.CRASH
        return value, Status.OK if np.isfinite(value).all() else Status.NONFINITE


def gate_of(function: Callable[[Any], Any], limit: int | None = None) -> CountingGate:
    """A gate in front of `function`, which takes x ``(n,)`` and returns a number or ``(m,)``.

    An exception becomes the status CRASH; a non-finite output NONFINITE with its values kept; points beyond `limit`
    REFUSED.
    """
    return CountingGate(function, limit)
