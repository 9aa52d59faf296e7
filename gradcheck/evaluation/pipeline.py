"""The layers between a gate and the user's functions, and their order."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import islice
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import ModelFailure, UsageError
from gradcheck.evaluation.budget import budgeted, evaluations_of, seconds_of
from gradcheck.evaluation.cache import cached
from gradcheck.evaluation.calls import Call, Engine, Outcome
from gradcheck.evaluation.evaluator import Evaluator
from gradcheck.evaluation.ledger import Ledger
from gradcheck.evaluation.protocol import Gate, Reply, Request, Status, points_of
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array

#: Points handed to the layers at once take about so much memory.
BATCH_BYTES = 32_000_000


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
            if reply.status[0, 0] == Status.REFUSED:
                runs = len({target.run for target in self.subject.targets.values()})
                raise UsageError(
                    f"the budget or the time ended before every function had its value at the start point; at least "
                    f"{runs} {'evaluation is' if runs == 1 else 'evaluations are'} needed for that, and about "
                    f"{7 * self.subject.layout.size} more for each claim"
                )
            if not reply.finite.all():
                raise self._failure(name, Status(reply.status[0, 0]), reply.values[0, 0])
            values[name] = reply.values[0, 0]
        return values

    def _failure(self, name: str, status: Status, values: Array) -> ModelFailure:
        point = np.array2string(self.subject.start, threshold=8, precision=6)
        words = next((f.message for f in self.ledger.failures if f.function == name), "budget or time spent")
        if status == Status.NONFINITE:
            bad = np.flatnonzero(~np.isfinite(values))
            which = f"output {bad[0]} is" if values.size > 1 else "the value is"
            return ModelFailure(
                f"{name} could not be evaluated at its start point x = {point}: {which} {values[bad[0]]}. "
                "Start where the model is defined, or mend the model there.",
                reason="non-finite",
                last_words=words,
            )
        return ModelFailure(
            f"{name} could not be evaluated at its start point x = {point}: it raised {words}. "
            "Call the model by hand at this point to see the whole traceback.",
            reason="crash",
            last_words=words,
        )

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
    engine = cached(budgeted(evaluator, ledger, evaluations_of(budget), seconds_of(time_limit)))
    return Session(subject, gate_over(engine, subject, evaluator), ledger, evaluator)


def gate_over(engine: Engine, subject: Subject, evaluator: Evaluator) -> Gate:
    """The gate: requests in, one call per point (one per sweep for AD), replies out."""

    def gate(requests: Sequence[Request]) -> list[Reply]:
        calls = (call for request in requests for call in _calls_of(request, subject))
        outcomes = _in_batches(engine, calls, subject.layout.size)
        replies = []
        for request in requests:
            own = list(islice(outcomes, _count_of(request)))
            width = int(np.prod(evaluator.shapes.get(request.function, (1,)), dtype=int))
            replies.append(_reply(request, own, width, subject.layout.size))
        return replies

    return gate


def _in_batches(engine: Engine, calls: Iterator[Call], size: int) -> Iterator[Outcome]:
    """Outcomes of all calls, made in batches: a request may stand for more points than fit into the memory."""
    most = max(64, BATCH_BYTES // (8 * size))
    while batch := list(islice(calls, most)):
        yield from engine(batch)


def _count_of(request: Request) -> int:
    return request.offsets.size if request.source == "model" else 1


def _calls_of(request: Request, subject: Subject) -> Iterator[Call]:
    run = subject.targets[request.function].run
    if request.source == "model":
        for row in range(len(request.directions)):
            for point in points_of(request, row):
                yield Call(
                    run=run, point=point, arithmetic=request.arithmetic, level=request.level, fresh=request.fresh
                )
        return
    rows = None
    if not request.source.startswith("claim:"):
        rows = _rows_of(request, subject.layout.size)
    yield Call(
        run=run,
        function=request.function,
        point=np.array(request.base, dtype=float),
        arithmetic=request.arithmetic,
        source=request.source,
        fresh=request.fresh,
        rows=rows,
    )


def _rows_of(request: Request, size: int) -> NDArray[Any]:
    if request.directions.ndim == 2:
        return request.directions
    rows = np.zeros((request.directions.size, size))
    rows[np.arange(request.directions.size), request.directions] = 1.0
    return rows


def _reply(request: Request, outcomes: Sequence[Outcome], width: int, size: int) -> Reply:
    name = request.function
    spent = sum(outcome.spent for outcome in outcomes)
    if request.source != "model":
        outcome = outcomes[0]
        status = int(outcome.status.get(name, Status.REFUSED))
        rows = len(request.directions)
        if name in outcome.values:
            values = outcome.values[name]
            # A claim is one matrix (m, n), not one row per direction.
            values = values[None] if request.source.startswith("claim:") else values[:, None, :]
        else:
            values = np.full((rows, 1, size if request.arithmetic == "vjp" else width), np.nan)
        return Reply(values=values, status=np.full(values.shape[:2], status, dtype=np.int8), spent=spent)
    d, k = request.offsets.shape
    kind = complex if request.arithmetic == "complex" else float
    flat = np.full((d * k, width), np.nan, dtype=kind)
    status_flat = np.empty(d * k, dtype=np.int8)
    for i, outcome in enumerate(outcomes):
        status_flat[i] = outcome.status.get(name, Status.REFUSED)
        if name in outcome.values:
            flat[i] = outcome.values[name]
    return Reply(values=flat.reshape(d, k, width), status=status_flat.reshape(d, k), spent=spent)
