"""The innermost layer: the only code that calls the user's functions."""

import time
import traceback
import warnings
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, nullcontext
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.evaluation.arithmetic import complex as complex_numbers
from gradcheck.evaluation.arithmetic import real
from gradcheck.evaluation.calls import Call, Outcome
from gradcheck.evaluation.ledger import Failure, Ledger
from gradcheck.evaluation.protocol import Status
from gradcheck.problem.derivative_shape import claim_matrix
from gradcheck.problem.subject import Subject, Target
from gradcheck.records.arrays import Array


class Evaluator:
    """Makes the calls one after another; turns exceptions and non-finite values into recorded facts.

    Parameters
    ----------
    subject : Subject
    ledger : Ledger
        Counts, seconds and failures are written there and nowhere else.

    Notes
    -----
    Warnings and floating-point errors of the model are silenced for the time of a batch (a model may be called where
    its logarithm is undefined; the NaN that follows is recorded), and both settings are restored afterwards.
    """

    def __init__(self, subject: Subject, ledger: Ledger) -> None:
        self.subject = subject
        self.ledger = ledger
        self.shapes: dict[str, tuple[int, ...]] = {}
        self.double: set[str] = set()

    def __call__(self, calls: Sequence[Call]) -> list[Outcome]:
        with warnings.catch_warnings(), np.errstate(all="ignore"):
            warnings.simplefilter("ignore")
            return [self._one(call) for call in calls]

    def _one(self, call: Call) -> Outcome:
        began = time.perf_counter()
        self.ledger.calls[call.kind] += 1
        try:
            if call.source == "model":
                return self._values(call)
            return self._derivative(call)
        except UsageError:
            raise  # the caller's mistake: told, not recorded
        except (Exception, SystemExit) as error:
            return self._failed(call, _last_words(error))
        finally:
            self.ledger.seconds[call.kind] += time.perf_counter() - began

    def _values(self, call: Call) -> Outcome:
        function = self.subject.runs[call.run]
        if call.arithmetic == "complex":
            result = complex_numbers.call(function, self.subject.layout, call.point)
        else:
            result, mutated = self._real_call(call.run, function, call.point)
            if mutated:
                self.ledger.mutated.add(call.run)
        values: dict[str, NDArray[Any]] = {}
        status: dict[str, Status] = {}
        message = ""
        for target in self._targets(call.run):
            try:
                values[target.name], status[target.name] = self._output(call, target, result)
            except (_ChangedShape, _UnusableStart) as error:
                raise UsageError(str(error)) from None
            except Exception as error:
                message = _last_words(error)
                status[target.name] = Status.CRASH
            if status[target.name] != Status.OK:
                message = message or "returned a value that is not finite"
                self._record(target.name, call, status[target.name], message)
        return Outcome(values=values, status=status, message=message)

    def _real_call(self, run: str, function: Callable[..., Any], point: Array) -> tuple[Any, bool]:
        with self._scope(run):
            result, mutated = real.call(function, self.subject.layout, point)
        if run in self.double or not real.is_single_precision_jax(result):
            return result, mutated
        # Seven digits show little of a derivative; jax models are called in double precision, in a scope of their own.
        self.double.add(run)
        self.ledger.notices.append(f"{run} is a jax model in single precision; it was evaluated in double precision")
        self.ledger.calls["model"] += 1
        return self._real_call(run, function, point)

    def _scope(self, run: str) -> AbstractContextManager[Any]:
        if run not in self.double:
            return nullcontext()
        from gradcheck.evaluation.arithmetic.with_jax import double_precision

        return double_precision()

    def _output(self, call: Call, target: Target, result: Any) -> tuple[NDArray[Any], Status]:
        array: NDArray[Any]
        if call.arithmetic == "complex":
            array = complex_numbers.picked(result, target.pick, self.shapes.get(target.name))
        else:
            array = self._real_output(target, result if target.pick is None else target.pick(result))
        known = self.shapes.setdefault(target.name, array.shape)
        if array.shape != known:
            raise _ChangedShape(
                f"{target.name} returned shape {known} at first and shape {array.shape} at x = {call.point!r:.120}; "
                "a model must return the same shape everywhere"
            )
        flat = np.ravel(array)
        return flat, Status.OK if np.isfinite(flat).all() else Status.NONFINITE

    def _real_output(self, target: Target, picked: Any) -> Array:
        try:
            array = real.as_array(picked, target.name)
        except UsageError as error:
            # At the first evaluation this is a wrong model; later on, one bad point among good ones.
            raise (_UnusableStart if target.name not in self.shapes else RuntimeError)(str(error)) from None
        self.ledger.output_kinds.setdefault(target.name, array.dtype.name)
        return array.astype(float)

    def _derivative(self, call: Call) -> Outcome:
        target = self.subject.targets[call.function]
        value = self._claim(call, target) if call.source.startswith("claim:") else self._automatic(call, target)
        finite = Status.OK if np.isfinite(value).all() else Status.NONFINITE
        return Outcome(values={call.function: value}, status={call.function: finite})

    def _claim(self, call: Call, target: Target) -> Array:
        kind = call.source.partition(":")[2]
        claim = target.claims[kind]
        if callable(claim):
            with self._scope(target.run):
                claim, mutated = real.call(claim, self.subject.layout, call.point)
            if mutated:
                self.ledger.mutated.add(f"{kind} of {target.name}")
        self.ledger.claim_kinds[target.name, kind] = str(getattr(claim, "dtype", "float64"))
        return claim_matrix(kind, claim, self.subject.layout, self.shapes[target.name])

    def _automatic(self, call: Call, target: Target) -> NDArray[Any]:
        # Imported when used: jax and autograd are extras, and slow to load.
        if call.source == "jax":
            from gradcheck.evaluation.arithmetic import with_jax as automatic
        else:
            from gradcheck.evaluation.arithmetic import with_autograd as automatic  # type: ignore[no-redef]
        assert call.rows is not None
        sweep = automatic.jvp if call.arithmetic == "jvp" else automatic.vjp
        function = _picked(self.subject.runs[target.run], target.pick)
        return np.asarray(sweep(function, self.subject.layout, call.point, call.rows), dtype=float)

    def _targets(self, run: str) -> list[Target]:
        return [target for target in self.subject.targets.values() if target.run == run]

    def _failed(self, call: Call, message: str) -> Outcome:
        names = [call.function] if call.function else [target.name for target in self._targets(call.run)]
        for name in names:
            self.ledger.last_words[name, call.source] = message
            self._record(name, call, Status.CRASH, message)
        return Outcome(status=dict.fromkeys(names, Status.CRASH), message=message)

    def _record(self, function: str, call: Call, status: Status, message: str) -> None:
        if call.source == "model" and call.arithmetic == "real":
            self.ledger.fail(Failure(function=function, point=call.point, status=status, message=message))


class _ChangedShape(Exception):
    """Raised inside the evaluator only."""


class _UnusableStart(Exception):
    """Raised inside the evaluator only."""


def _picked(function: Callable[..., Any], pick: Callable[[Any], Any] | None) -> Callable[..., Any]:
    if pick is None:
        return function
    return lambda *positional, **keywords: pick(function(*positional, **keywords))


def _last_words(error: BaseException) -> str:
    """Type, message and the user's own line of an exception, in one line."""
    frames = traceback.extract_tb(error.__traceback__)
    # The last frame may lie deep inside a library; the user's line is what helps.
    own = [
        frame
        for frame in frames
        if "site-packages" not in frame.filename and "gradcheck/evaluation" not in frame.filename
    ]
    where = f" ({own[-1].filename}:{own[-1].lineno})" if own else ""
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text[:300]}{where}" if text else f"{type(error).__name__}{where}"
