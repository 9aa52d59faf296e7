"""The layers between a gate and the user's functions, and their order."""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import ModelFailure, UsageError
from gradcheck.evaluation.budget import budgeted, evaluations_of, seconds_of
from gradcheck.evaluation.cache import cached
from gradcheck.evaluation.calls import Call, Engine, Outcome
from gradcheck.evaluation.evaluator import MATRIX_CLAIMS, SLOPE, Evaluator
from gradcheck.evaluation.ledger import Ledger
from gradcheck.evaluation.moves import BATCH_BYTES, Moves
from gradcheck.evaluation.protocol import Gate, Reply, Request, Status
from gradcheck.problem.sparse_claim import is_stored
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array

#: How far the companion of the start point is moved, in units of a variable's size; values of a point in company and
#: alone may differ by this share of the largest output, for sums may be taken in another order.
COMPANION, SAME = 0.1, 1e-6
#: Points of one call, and about as many handed to the layers at once.
POINTS_AT_ONCE = 16_384


@dataclass(frozen=True, slots=True, eq=False)
class Session:
    """An open gate to one subject, with its account.

    Attributes
    ----------
    subject : Subject
    gate : Gate
    ledger : Ledger
    evaluator : Evaluator
        Knows the output shapes, once the model has been evaluated.
    """

    subject: Subject
    gate: Gate
    ledger: Ledger
    evaluator: Evaluator

    def start_values(self) -> dict[str, Array]:
        """Values of every function at the start point.

        Raises
        ------
        ModelFailure
            If the model raises there or gives a value that is not finite: which function, and its own last words.
        UsageError
            If what it returns is no array of real numbers.
        """
        self.ledger.begin_point()
        values = {}
        for name in self.subject.targets:
            request = Request(
                base=self.subject.start,
                directions=np.zeros(1, dtype=np.intp),
                offsets=np.zeros((1, 1)),
                function=name,
                worth=np.inf,
            )
            reply = self.gate([request])[0]
            if reply.refused[0, 0]:
                runs = len({target.run for target in self.subject.targets.values()})
                raise UsageError(
                    f"the budget or the time ended before every function had its value at the start point; at least "
                    f"{runs} {'evaluation is' if runs == 1 else 'evaluations are'} needed for that, and about "
                    f"{7 * self.subject.layout.size} more for each claim"
                )
            if not reply.finite.all():
                raise self._failure(name, Status(reply.status[0, 0]), reply.values[0, 0])
            values[name] = reply.values[0, 0]
        if self.subject.batched:
            self._refuse_company(values)
        return values

    def _refuse_company(self, alone: dict[str, Array]) -> None:
        """The start point once more, beside another point: its values must not depend on the company.

        Raises
        ------
        UsageError
            If they do: every difference would be one of the company. A model that never answers alike is told
            elsewhere, and a model that fails beside the start point as well.
        """
        start, domain = self.subject.start, self.subject.domain
        place = int(np.argmax(domain.upper - domain.lower))
        room = min(domain.upper[place] - start[place], COMPANION * domain.scale[place])
        step = room if room > 0 else -min(start[place] - domain.lower[place], COMPANION * domain.scale[place])
        for name, value in alone.items():
            request = Request(
                base=start,
                directions=np.array([place], dtype=np.intp),
                offsets=np.array([[0.0, step]]),
                function=name,
                fresh=True,
            )
            reply = self.gate([request])[0]
            if not reply.finite.all():
                continue
            together = reply.values[0, 0]
            i = int(np.argmax(np.abs(together - value)))
            if abs(together[i] - value[i]) <= SAME * float(np.abs(value).max()) or self._never_alike(name, value):
                continue
            raise UsageError(
                f"batched=True: {name} gives {together[i]:.10g} at the start point beside another point, and "
                f"{value[i]:.10g} there alone, so its rows depend on one another (a mean or a norm over the batch?); "
                "mend the model, or leave batched out"
            )

    def _never_alike(self, name: str, value: Array) -> bool:
        """Whether the model gives other values at the start point when it is asked alone once more."""
        request = Request(
            base=self.subject.start,
            directions=np.zeros(1, dtype=np.intp),
            offsets=np.zeros((1, 1)),
            function=name,
            fresh=True,
        )
        return not np.array_equal(self.gate([request])[0].values[0, 0], value)

    def _failure(self, name: str, status: Status, values: Array) -> ModelFailure:
        point = np.array2string(self.subject.start, threshold=8, precision=6)
        words = next((f.message for f in self.ledger.failures if f.function == name), "budget or time spent")
        if status == Status.NONFINITE:
            bad = np.flatnonzero(~np.isfinite(values))
            layout = self.subject.outputs.get(name)
            nested = layout is not None and layout.single is None
            which = self.subject.output_name(name, int(bad[0])) if nested else f"output {bad[0]}"
            which = f"{which} is" if values.size > 1 else "the value is"
            return ModelFailure(
                f"{name} could not be evaluated at its start point x = {point}: {which} {values[bad[0]]}. "
                "Start where the model is defined, or mend the model there.",
                reason="non-finite",
                last_words=words,
            )
        return ModelFailure(
            f"{name} could not be evaluated at its start point x = {point}: it raised {words}. "
            f"{self._by_hand()} to see the whole traceback.",
            reason="crash",
            last_words=words,
        )

    def _by_hand(self) -> str:
        """How to see the failure again."""
        single = self.subject.layout.single
        if not self.subject.batched or single is None:
            return "Call the model by hand at this point"
        shape = "(1,)" if single.scalar else f"(1, {self.subject.layout.size})"
        return f"With batched=True it is given x of shape {shape}, one row a point: call it by hand like that"

    def shape_of(self, function: str) -> tuple[int, ...]:
        """Shape of what the function returns; known after `start_values`."""
        return self.evaluator.shapes[function]


def open_session(subject: Subject, *, budget: int | None = None, time_limit: float | str | None = None) -> Session:
    """A session on `subject`. The order of layers: gate, cache, budget, evaluator.

    Journal, workers and isolation have the same shape (`Engine`) and their place is between cache and budget (journal)
    and between budget and evaluator (workers, isolation).
    """
    ledger = Ledger(notices=list(subject.layout.notices))
    evaluator = Evaluator(subject, ledger)
    engine = cached(budgeted(evaluator, ledger, evaluations_of(budget), seconds_of(time_limit)), subject.start)
    return Session(subject, gate_over(engine, subject, evaluator), ledger, evaluator)


def gate_over(engine: Engine, subject: Subject, evaluator: Evaluator) -> Gate:
    """The gate: requests in, calls of many points each (of one per sweep for AD), replies out."""

    def width(request: Request) -> int:
        outputs = math.prod(evaluator.shapes.get(request.function, (1,)))
        return outputs * subject.layout.size if request.source.startswith(SLOPE) else outputs

    def gate(requests: Sequence[Request]) -> list[Reply]:
        calls = (
            (place, call)
            for place, request in enumerate(requests)
            for call in _calls_of(request, subject, most=_most_points(width(request)))
        )
        outcomes: list[list[tuple[int, Outcome]]] = [[] for _ in requests]
        for batch in _batches(calls):
            for (place, call), outcome in zip(batch, engine([call for _, call in batch]), strict=True):
                outcomes[place].append((len(call), outcome))
        return [_reply(request, own, width(request), subject) for request, own in zip(requests, outcomes, strict=True)]

    return gate


def _most_points(width: int) -> int:
    """Points of one call: few where each gives many numbers."""
    return max(1, min(POINTS_AT_ONCE, BATCH_BYTES // (8 * width)))


def _batches(calls: Iterator[tuple[int, Call]]) -> Iterator[list[tuple[int, Call]]]:
    """Calls that are handed to the layers together: what one request asks for may be more than fits into the memory."""
    batch: list[tuple[int, Call]] = []
    points = 0
    for place, call in calls:
        batch.append((place, call))
        points += len(call)
        if points >= POINTS_AT_ONCE:
            yield batch
            batch, points = [], 0
    if batch:
        yield batch


def _calls_of(request: Request, subject: Subject, most: int) -> Iterator[Call]:
    run = subject.targets[request.function].run
    moves = Moves.of(request)
    if _at_every_point(request):
        function = "" if request.source == "model" else request.function
        for first in range(0, len(moves), most):
            part = moves if len(moves) <= most else moves[first : first + most]
            yield Call(
                run=run,
                function=function,
                moves=part,
                arithmetic=request.arithmetic,
                source=request.source,
                level=request.level,
                fresh=request.fresh,
            )
        return
    matrix = request.source in MATRIX_CLAIMS
    yield Call(
        run=run,
        function=request.function,
        moves=Moves(np.array(request.base, dtype=float), np.zeros(1, np.intp), np.zeros(1, np.intp), np.zeros(1)),
        arithmetic=request.arithmetic,
        source=request.source,
        fresh=request.fresh,
        rows=None if matrix else _rows_of(request, subject.layout.size),
    )


def _at_every_point(request: Request) -> bool:
    """Whether values at all points are meant, of the model or of a claim, and not derivatives at the base."""
    return request.source == "model" or request.source.startswith(SLOPE)


def _rows_of(request: Request, size: int) -> NDArray[Any]:
    if request.directions.ndim == 2:
        return request.directions
    rows = np.zeros((request.directions.size, size))
    rows[np.arange(request.directions.size), request.directions] = 1.0
    return rows


def _reply(request: Request, outcomes: Sequence[tuple[int, Outcome]], width: int, subject: Subject) -> Reply:
    name = request.function
    if not _at_every_point(request):
        return _derivative_reply(request, outcomes[0][1], width, subject.layout.size)
    d, k = request.offsets.shape
    spent = sum(outcome.spent for _, outcome in outcomes)
    if len(outcomes) == 1 and name in (only := outcomes[0][1]).values:  # the usual case: all came in one piece
        values, status = only.values[name].copy(), only.status[name].copy()
        return Reply(values=values.reshape(d, k, width), status=status.reshape(d, k), spent=spent)
    values = np.full((d * k, width), np.nan, dtype=complex if request.arithmetic == "complex" else float)
    status = np.full(d * k, Status.REFUSED, dtype=np.int8)
    first = 0
    for size, outcome in outcomes:
        part = slice(first, first + size)
        if name in outcome.status:
            status[part] = outcome.status[name]
        if name in outcome.values:
            values[part] = outcome.values[name]
        first += size
    return Reply(values=values.reshape(d, k, width), status=status.reshape(d, k), spent=spent)


def _derivative_reply(request: Request, outcome: Outcome, width: int, size: int) -> Reply:
    name = request.function
    status = int(outcome.status[name][0]) if name in outcome.status else int(Status.REFUSED)
    if name in outcome.values:
        # Not copied: a claim may have a million entries. What is remembered cannot be written to.
        values = outcome.values[name][0].view()
        values.setflags(write=False)
        # A claimed matrix is one matrix (m, n), or the stored entries of one, not one row per direction.
        if is_stored(values):
            values = values[None, None]
        else:
            values = values[None] if request.source in MATRIX_CLAIMS else values[:, None, :]
    else:
        entries = {"jvp": width, "vjp": size}.get(request.arithmetic, width * size)
        values = np.full((len(request.directions), 1, entries), np.nan)
    return Reply(values=values, status=np.full(values.shape[:2], status, dtype=np.int8), spent=outcome.spent)
