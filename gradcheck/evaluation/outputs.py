"""What one function of a run returned at the points of a call, taken down as it comes."""

import math
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.evaluation.arithmetic import complex as complex_numbers
from gradcheck.evaluation.arithmetic import real
from gradcheck.evaluation.calls import Call
from gradcheck.evaluation.failing import last_words
from gradcheck.evaluation.ledger import Ledger
from gradcheck.evaluation.protocol import Status
from gradcheck.problem.subject import Target
from gradcheck.wording import count

#: What most models return; anything else is looked at closely.
NUMBERS = frozenset({float, np.float64})
_COMPLEX_NUMBERS = NUMBERS | {complex, np.complex128}


class Output:
    """Values and states of one function at k points.

    Parameters
    ----------
    target : Target
    call : Call
    shapes : dict of function -> shape
        Known since the first value came; completed here.
    ledger : Ledger
        Is told the dtype of what came first.
    """

    def __init__(self, target: Target, call: Call, shapes: dict[str, tuple[int, ...]], ledger: Ledger) -> None:
        self.target, self.call, self.shapes, self.ledger = target, call, shapes, ledger
        self.complex = call.arithmetic == "complex"
        self.dtype = np.dtype(complex if self.complex else float)
        self.numbers = _COMPLEX_NUMBERS if self.complex else NUMBERS
        self.status = np.zeros(len(call), dtype=np.int8)
        self.words: dict[int, str] = {}
        self.values: NDArray[Any] | None = None
        #: Where results of the usual form go without a closer look.
        self.column: NDArray[Any] | None = None
        self.usual: tuple[int, ...] | None = None
        if target.name in shapes and (self.complex or target.name in ledger.output_kinds):
            self._room()

    def take(self, i: int, result: Any) -> None:
        """Take down what the run returned at point `i`.

        Raises
        ------
        UsageError
            If this is the function's first value and no array of real numbers, or has another shape than before.
        """
        kind = type(result)
        if kind in self.numbers and self.column is not None:
            self.column[i] = result
        elif kind is np.ndarray and result.shape == self.usual and result.dtype == self.dtype:
            self.values[i] = result.reshape(-1)  # type: ignore[index]
        else:
            self._take_closely(i, result)

    def take_batch(self, first: int, given: tuple[int, ...], result: Any) -> None:
        """Take down what the run returned for an array of shape `given`, whose points begin with point `first`.

        Raises
        ------
        UsageError
            As `take`; and if the first dimension is not that of what was given.
        Exception
            Whatever speaks against the whole batch: it has to be evaluated point by point then.
        """
        size = given[0]
        array = self._array(result, (size,))
        if array.ndim == 0 or array.shape[0] != size:
            raise UsageError(
                f"batched=True: {self.target.name} received x of shape {given}, {count(size, 'point')}, and returned "
                f"shape {array.shape}; it must return one number a point, shape ({size},), or one row a point, shape "
                f"({size}, m)"
            )
        self._known(array.shape[1:], first)
        self._room()[first : first + size] = array.reshape(size, -1)

    def fail(self, i: int, words: str) -> None:
        """The run, or picking the output, failed at point `i`."""
        self.status[i] = Status.CRASH
        self.words[i] = words

    def settle(self, begun: int) -> None:
        """After the last point: find values that are not finite; points that were not begun were refused."""
        if begun < self.status.size:
            self.status[begun:] = Status.REFUSED
        if self.values is not None:
            finite = np.isfinite(self.values[:begun])
            if finite.all():
                return
            bad = ~finite.all(axis=1) & (self.status[:begun] == Status.OK)
            self.status[:begun][bad] = Status.NONFINITE
            self.words |= dict.fromkeys(np.flatnonzero(bad).tolist(), "returned a value that is not finite")

    def _take_closely(self, i: int, result: Any) -> None:
        try:
            array = self._array(result, ())
        except UsageError:
            raise
        except Exception as error:
            self.fail(i, last_words(error))
            return
        self._known(array.shape, i)
        self._room()[i] = array.reshape(-1)

    def _array(self, result: Any, leading: tuple[int, ...]) -> NDArray[Any]:
        pick = self.target.pick
        if self.complex:
            known = self.shapes.get(self.target.name)
            own = None if pick is None else partial(_picked, pick)
            return complex_numbers.picked(result, own, None if known is None else leading + known)
        try:
            array = real.as_array(result if pick is None else _picked(pick, result), self.target.name)
        except UsageError as error:
            # At the first evaluation this is a wrong model; later on, one bad point among good ones.
            raise (UsageError if self.target.name not in self.shapes else RuntimeError)(str(error)) from None
        self.ledger.output_kinds.setdefault(self.target.name, array.dtype.name)
        return array.astype(float)

    def _known(self, shape: tuple[int, ...], i: int) -> None:
        known = self.shapes.setdefault(self.target.name, shape)
        if shape != known:
            raise UsageError(
                f"{self.target.name} returned shape {known} at first and shape {shape} at x = "
                f"{self.call.moves.point(i)!r:.120}; a model must return the same shape everywhere"
            )

    def _room(self) -> NDArray[Any]:
        if self.values is None:
            shape = self.shapes[self.target.name]
            self.values = np.full((len(self.call), math.prod(shape)), np.nan, dtype=self.dtype)
            if self.target.pick is None:
                self.column = self.values[:, 0] if shape == () else None
                self.usual = shape
        return self.values


def _picked(pick: Any, result: Any) -> Any:
    try:
        return pick(result)
    except UsageError as error:  # said by the user's own code
        raise RuntimeError(str(error)) from error
