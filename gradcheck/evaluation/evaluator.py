"""The innermost layer: the only code that calls the user's functions."""

import math
import time
import warnings
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, nullcontext
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.evaluation.arithmetic import complex as complex_numbers
from gradcheck.evaluation.arithmetic import real
from gradcheck.evaluation.calls import Call, Outcome
from gradcheck.evaluation.failing import last_words
from gradcheck.evaluation.ledger import Ledger
from gradcheck.evaluation.outputs import NUMBERS, Output
from gradcheck.evaluation.protocol import Status
from gradcheck.problem.derivative_shape import claim_matrix
from gradcheck.problem.output_layout import output_parts, precision_of
from gradcheck.problem.product_shape import cotangent, hessian_products, product_vector, tangent, value_and_matrix
from gradcheck.problem.sparse_claim import dense_of, is_sparse, is_stored, stored_entries
from gradcheck.problem.subject import Subject, Target
from gradcheck.records.arrays import Array

#: Claims that are one matrix at the point; all other claims are asked for one product for each vector.
MATRIX_CLAIMS = frozenset({"claim:gradient", "claim:jacobian", "claim:value_and_gradient"})
#: What the source of a claim begins with that is asked as a function of its own, at any point.
SLOPE = "slope:"
_IN_DOUBLE = "{run} is a jax model in single precision; it was evaluated in double precision"


class Evaluator:
    """Makes the calls one after another; turns exceptions and non-finite values into recorded facts.

    Parameters
    ----------
    subject : Subject
    ledger : Ledger
        Counts, seconds and failures are written there and nowhere else.

    Notes
    -----
    Warnings and floating-point errors of the model are silenced for the time of a batch of calls (a model may be called
    where its logarithm is undefined; the NaN that follows is recorded), and both settings are restored afterwards.
    """

    def __init__(self, subject: Subject, ledger: Ledger) -> None:
        self.subject = subject
        self.ledger = ledger
        self.shapes: dict[str, tuple[int, ...]] = {}
        self.double: set[str] = set()
        self.transformed: dict[tuple[str, str], Callable[[str, NDArray[Any]], Array]] = {}
        if subject.layout.holds_jax:
            self._keep_double()
        self._expect_jax()

    def _expect_jax(self) -> None:
        """Models whose claim is named "jax" are jax's: double precision from the first value on.

        What they return need not show it: numpy's numbers in, numpy's numbers out, and single precision in between.
        """
        runs = {t.run for t in self.subject.targets.values() if any(_is_jax(claim) for claim in t.claims.values())}
        if not runs:
            return
        try:
            from gradcheck.evaluation.arithmetic.with_jax import is_double
        except ImportError:  # told where the derivative is asked for
            return
        if not is_double() and not runs <= self.double:
            self.double |= runs
            self.ledger.notices.extend(_IN_DOUBLE.format(run=run) for run in sorted(runs))

    def __call__(self, calls: Sequence[Call]) -> list[Outcome]:
        with warnings.catch_warnings(), np.errstate(all="ignore"):
            warnings.simplefilter("ignore")
            return [self._outcome(call) for call in calls]

    def _outcome(self, call: Call) -> Outcome:
        if call.source == "model":
            return self._values(call)
        return self._slopes(call) if call.source.startswith(SLOPE) else self._derivative(call)

    # --- values ------------------------------------------------------------------------------------------------------

    def _values(self, call: Call) -> Outcome:
        targets = [target for target in self.subject.targets.values() if target.run == call.run]
        outputs = [Output(target, call, self.shapes, self.ledger, self.subject.outputs) for target in targets]
        tally = _Tally()
        began = time.perf_counter()
        try:
            if self.subject.batched:
                self._in_batches(call, outputs, tally)
            else:
                self._one_by_one(call, outputs, tally)
        finally:
            self.ledger.seconds[call.kind] += time.perf_counter() - began
            self.ledger.calls[call.kind] += tally.begun
            for output in outputs:
                output.settle(tally.finished)
            self._record(call, outputs)
        return Outcome(
            values={output.target.name: output.values for output in outputs if output.values is not None},
            status={output.target.name: output.status for output in outputs},
            spent=tally.begun,
        )

    def _one_by_one(self, call: Call, outputs: Sequence[Output], tally: "_Tally") -> None:
        send = self._sender(call)
        takes = [output.take for output in outputs]
        for i in range(len(call)):
            tally.finished = i
            if call.until is not None and _late(call):
                return
            tally.begun = i + 1
            try:
                result = send(i)
                if type(result) not in NUMBERS and self._too_short(call, result):
                    send = self._sender(call)
                    result = send(i)
            except UsageError:
                raise  # the caller's mistake: told, not recorded
            except (Exception, SystemExit) as error:
                self._failed(call, outputs, i, last_words(error))
                continue
            for take in takes:
                take(i, result)
        tally.finished = tally.begun

    def _in_batches(self, call: Call, outputs: Sequence[Output], tally: "_Tally") -> None:
        most = call.moves.most_at_once
        for first in range(0, len(call), most):
            if _late(call):
                return
            part = slice(first, min(first + most, len(call)))
            tally.begun = part.stop
            if not self._batch(call, outputs, part):
                self._repeat(call, outputs, part, tally)
            if tally.begun < part.stop:
                return
            tally.finished = part.stop

    def _repeat(self, call: Call, outputs: Sequence[Output], part: slice, tally: "_Tally") -> None:
        """Point by point, so that one bad point spoils no others. The attempt itself gave nothing and is not counted.

        A batch of one has said already what is to be said.
        """
        if part.stop - part.start == 1:
            return
        for i in range(part.start, part.stop):
            tally.begun = tally.finished = i
            if _late(call):
                return
            tally.begun = i + 1
            self._batch(call, outputs, slice(i, i + 1))

    def _batch(self, call: Call, outputs: Sequence[Output], part: slice) -> bool:
        """Evaluate some points at once; False if that failed. A single point that fails is recorded."""
        some = call.at(part)
        single = self.subject.layout.single
        given = (len(some),) if single is not None and single.scalar else (len(some), some.moves.base.size)
        try:
            result = self._sender(some)(slice(None))
            if self._too_short(call, result):
                result = self._sender(some)(slice(None))
            for output in outputs:
                output.take_batch(part.start, given, result)
        except UsageError:
            raise
        except (Exception, SystemExit) as error:
            if len(some) == 1:
                self._failed(call, outputs, part.start, last_words(error))
            return False
        return True

    def _sender(self, call: Call) -> real.Sender:
        """What calls the run at the point of a number, or at those of a slice."""
        function, layout, moves = self.subject.runs[call.run], self.subject.layout, call.moves

        def mutated() -> None:
            self.ledger.mutated.add(call.run)

        if call.arithmetic == "complex":
            send = complex_numbers.sender(function, layout, moves, batched=self.subject.batched)
        else:
            send = real.sender(function, layout, moves, mutated, batched=self.subject.batched)
        if call.run not in self.double:
            return send

        def in_double_precision(i: Any) -> Any:
            with self._scope(call.run):
                return send(i)

        return in_double_precision

    def _too_short(self, call: Call, result: Any) -> bool:
        """Whether this is jax in single precision, to be called in double precision from now on.

        Seven digits show little of a derivative; there is a scope for that, and no setting of the user's changes.
        """
        if call.arithmetic != "real" or call.run in self.double or not real.is_single_precision_jax(result):
            return False
        self.double.add(call.run)
        self.ledger.notices.append(_IN_DOUBLE.format(run=call.run))
        self.ledger.calls["model"] += 1
        return True

    def _keep_double(self) -> None:
        """Arrays of jax would reach the model rounded to single precision, where the user's setting is that."""
        from gradcheck.evaluation.arithmetic.with_jax import is_double

        if not is_double():
            self.double |= set(self.subject.runs)
            self.ledger.notices.append(
                "jax is in single precision; its arrays reached the model in double precision, for these calls only"
            )

    def _scope(self, run: str) -> AbstractContextManager[Any]:
        if run not in self.double:
            return nullcontext()
        from gradcheck.evaluation.arithmetic.with_jax import double_precision

        return double_precision()

    def _failed(self, call: Call, outputs: Sequence[Output], i: int, words: str) -> None:
        for output in outputs:
            self.ledger.last_words[output.target.name, call.source] = words
            output.fail(i, words)

    def _record(self, call: Call, outputs: Sequence[Output]) -> None:
        """Failures in the order of the points; those in complex numbers say nothing about the model itself."""
        if call.arithmetic != "real":
            return
        found = [(i, order) for order, output in enumerate(outputs) for i in output.words]
        for i, order in sorted(found):
            output = outputs[order]
            point = partial(call.moves.point, i)
            self.ledger.fail(output.target.name, point, Status(output.status[i]), output.words[i])

    # --- derivatives -------------------------------------------------------------------------------------------------

    def _derivative(self, call: Call) -> Outcome:
        name = call.function
        if _late(call):
            return Outcome()
        target = self.subject.targets[name]
        self.ledger.calls[call.kind] += 1
        began = time.perf_counter()
        try:
            value = self._claim(call, target) if call.source.startswith("claim:") else self._automatic(call, target)
        except UsageError:
            raise
        except (Exception, SystemExit) as error:
            self.ledger.last_words[name, call.source] = last_words(error)
            if call.source.startswith("claim:"):
                self.ledger.claim_error = self.ledger.claim_error or error
            return Outcome(status={name: np.array([Status.CRASH], dtype=np.int8)}, spent=1)
        finally:
            self.ledger.seconds[call.kind] += time.perf_counter() - began
        numbers = value["value"] if is_stored(value) else value
        state = Status.OK if np.isfinite(numbers).all() else Status.NONFINITE
        return Outcome(values={name: value[None]}, status={name: np.array([int(state)], dtype=np.int8)}, spent=1)

    def _claim(self, call: Call, target: Target) -> NDArray[Any]:
        kind = call.source.partition(":")[2]
        if call.source in MATRIX_CLAIMS:
            return self._claimed_matrix(kind, target, call.moves.base)
        assert call.rows is not None
        layout, shape = self.subject.layout, self.shapes[target.name]
        if kind == "hessian":
            raw = self._asked(kind, target, call.moves.base)
            return hessian_products(raw, layout, shape, call.rows)
        width = {"jvp": math.prod(shape), "vjp": layout.size, "hvp": layout.size}[kind]
        outputs = self.subject.outputs.get(target.name)
        products = np.full((len(call.rows), width), np.nan)
        for i, row in enumerate(call.rows):
            vector = cotangent(shape, row, outputs) if kind == "vjp" else tangent(layout, row)
            try:
                raw = self._asked(kind, target, call.moves.base, vector)
                products[i] = product_vector(kind, raw, layout, shape, outputs)
            except UsageError:
                raise
            except (Exception, SystemExit) as error:
                self.ledger.failed_vectors.setdefault((target.name, kind), {})[i] = last_words(error)
                self.ledger.claim_error = self.ledger.claim_error or error
        return products

    def _claimed_matrix(self, kind: str, target: Target, point: Array) -> NDArray[Any]:
        """A claimed gradient or Jacobian at a point, (m, n); of a sparse Jacobian its stored entries."""
        layout, shape = self.subject.layout, self.shapes[target.name]
        raw = self._asked(kind, target, point)
        if kind == "jacobian" and is_sparse(raw):
            entries, notices = stored_entries(kind, raw, layout.size, shape, layout.shape)
            self.ledger.notices.extend(notice for notice in notices if notice not in self.ledger.notices)
            return entries
        if kind != "value_and_gradient":
            return claim_matrix(kind, raw, layout, shape, self.subject.outputs.get(target.name))
        value, matrix = value_and_matrix(raw, layout, shape)
        self.ledger.claimed_values.setdefault(target.name, value)
        return matrix

    def _asked(self, kind: str, target: Target, point: Array, *vector: Any) -> Any:
        """What a claim returns at a point, and for a vector; or is, where it was given as an array."""
        claim = target.claims[kind]
        if callable(claim):
            with self._scope(target.run):
                claim, mutated = real.call(claim, self.subject.layout, point, *vector)
            if mutated:
                self.ledger.mutated.add(f"{kind} of {target.name}")
        self.ledger.claim_kinds[target.name, kind] = precision_of(claim)
        return claim

    def _slopes(self, call: Call) -> Outcome:
        """A claimed gradient or Jacobian as a function of its own: its flat values (k, m·n) at the points of a call."""
        kind, target = call.source.removeprefix(SLOPE), self.subject.targets[call.function]
        outputs = math.prod(self.shapes[target.name])
        values = np.full((len(call), outputs * self.subject.layout.size), np.nan)
        status = np.full(len(call), Status.REFUSED, dtype=np.int8)
        began = time.perf_counter()
        spent = 0
        for i in range(len(call)):
            if _late(call):
                break
            spent += 1
            try:
                values[i] = self._slope(kind, target, call.moves.point(i)).reshape(-1)
                status[i] = Status.OK if np.isfinite(values[i]).all() else Status.NONFINITE
            except (Exception, SystemExit) as error:  # here a wrong shape is one bad point among good ones, too
                self.ledger.last_words[target.name, call.source] = last_words(error)
                status[i] = Status.CRASH
        self.ledger.calls[call.kind] += spent
        self.ledger.seconds[call.kind] += time.perf_counter() - began
        return Outcome(values={target.name: values}, status={target.name: status}, spent=spent)

    def _slope(self, kind: str, target: Target, point: Array) -> Array:
        claim, outputs = target.claims[kind], math.prod(self.shapes[target.name])
        if isinstance(claim, str):
            return np.asarray(self._swept(claim, "vjp", target, point, np.eye(outputs)), dtype=float)
        matrix = self._claimed_matrix(kind, target, point)
        return dense_of(matrix, outputs, self.subject.layout.size) if is_stored(matrix) else matrix

    def _automatic(self, call: Call, target: Target) -> NDArray[Any]:
        assert call.rows is not None
        if call.arithmetic not in ("jvp", "vjp", "hvp"):
            return self._transformed(call, target)(call.arithmetic, call.rows)
        return self._swept(call.source, call.arithmetic, target, call.moves.base, call.rows)

    def _swept(self, source: str, sweep: str, target: Target, point: Array, rows: NDArray[Any]) -> NDArray[Any]:
        """What AD gives for each row: ``"jvp"``, ``"vjp"`` or ``"hvp"``."""
        # Imported when used: jax and autograd are extras, and slow to load.
        if source == "jax":
            from gradcheck.evaluation.arithmetic import with_jax as automatic
        else:
            from gradcheck.evaluation.arithmetic import with_autograd as automatic  # type: ignore[no-redef]
        by_name = {"jvp": automatic.jvp, "vjp": automatic.vjp, "hvp": automatic.hvp}
        function = self._in_one_vector(target, automatic.in_one_vector)
        return np.asarray(by_name[sweep](function, self.subject.layout, point, rows), dtype=float)

    def _in_one_vector(self, target: Target, made: Callable[..., Callable[..., Any]]) -> Callable[..., Any]:
        """The function of one point; `made` so that it returns one vector, where it returns a nesting."""
        function = _of_one_point(self.subject.runs[target.run], target.pick, self.subject.batched)
        outputs = self.subject.outputs.get(target.name)
        return (
            function
            if outputs is None or outputs.single is not None
            else made(function, partial(output_parts, outputs))
        )

    def _transformed(self, call: Call, target: Target) -> Callable[[str, NDArray[Any]], Array]:
        """The sweeps of a function under transformations; kept, because what is compiled is used again."""
        key = (target.name, call.source)
        if key not in self.transformed:
            if call.source == "jax":
                from gradcheck.evaluation.arithmetic.jax_transforms import Transformed
                from gradcheck.evaluation.arithmetic.with_jax import in_one_vector
            else:
                from gradcheck.evaluation.arithmetic.with_autograd import (  # type: ignore[assignment]
                    Transformed,
                    in_one_vector,
                )
            function = self._in_one_vector(target, in_one_vector)
            self.transformed[key] = Transformed(function, self.subject.layout)
        return self.transformed[key]


class _Tally:
    """How many points of a call were begun, and finished: known also where an interruption ends it."""

    __slots__ = ("begun", "finished")

    def __init__(self) -> None:
        self.begun = self.finished = 0


def _is_jax(claim: Any) -> bool:
    return isinstance(claim, str) and claim == "jax"


def _late(call: Call) -> bool:
    return call.until is not None and time.monotonic() >= call.until


def _of_one_point(function: Callable[..., Any], pick: Callable[[Any], Any] | None, batched: bool) -> Callable[..., Any]:
    """The model as a function of one point that returns the output alone."""
    if batched:
        of_batch = _of_one_point(function, pick, False)
        return lambda x: of_batch(x[None])[0]
    if pick is None:
        return function
    return lambda *positional, **keywords: pick(function(*positional, **keywords))
