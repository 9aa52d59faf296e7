"""What one function of a run returned at the points of a call, taken down as it comes."""

import math
from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import DerivativeShapeError, UsageError
from gradcheck.evaluation.arithmetic import complex as complex_numbers
from gradcheck.evaluation.arithmetic import real
from gradcheck.evaluation.calls import Call
from gradcheck.evaluation.failing import last_words
from gradcheck.evaluation.ledger import Ledger
from gradcheck.evaluation.protocol import Status
from gradcheck.problem.layout import Layout
from gradcheck.problem.numbers import lowest_precision
from gradcheck.problem.opening import opened
from gradcheck.problem.output_layout import output_layout, output_parts, output_vector
from gradcheck.problem.subject import Target
from gradcheck.problem.template import Leaf, Place
from gradcheck.wording import count

#: What most models return; anything else is looked at closely.
NUMBERS = frozenset({float, np.float64})
#: Claims on a function with several outputs.
OF_ROWS = frozenset({"jacobian", "jvp", "vjp"})
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
    layouts : dict of function -> Layout
        Of what each function returns; completed here.
    """

    def __init__(
        self,
        target: Target,
        call: Call,
        shapes: dict[str, tuple[int, ...]],
        ledger: Ledger,
        layouts: dict[str, Layout],
    ) -> None:
        self.target, self.call, self.shapes, self.ledger = target, call, shapes, ledger
        self.layouts = layouts
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
        nested = self._nested()
        if self.complex:
            known = self.shapes.get(self.target.name)
            own = None if pick is None else partial(_picked, pick)
            if nested is not None:
                own = partial(_complex_vector, nested, own)
            return complex_numbers.picked(result, own, None if known is None else leading + known)
        picked = result if pick is None else _picked(pick, result)
        if nested is not None:
            return self._vector(nested, picked)
        try:
            if not leading and self._is_named(picked):
                return self._first_nesting(picked)
            array = real.as_array(picked, self.target.name)
        except UsageError as error:
            if not leading and self._may_be_nested(picked):
                return self._first_nesting(picked)
            # At the first evaluation this is a wrong model; later on, one bad point among good ones.
            raise (UsageError if self.target.name not in self.shapes else RuntimeError)(str(error)) from None
        self.ledger.output_kinds.setdefault(self.target.name, array.dtype.name)
        if self.target.name not in self.shapes:
            leaf = Leaf(Place(None, self.target.name), 0, array.shape[len(leading) :])
            self.layouts[self.target.name] = Layout(leaf, (leaf,))
        return array.astype(float)

    # --- nestings ----------------------------------------------------------------------------------------------------

    def _nested(self) -> Layout | None:
        """The layout of what the function returns, where that is known to be a nesting."""
        # what another session of the same subject has seen counts for nothing: it may have been elsewhere
        layout = self.layouts.get(self.target.name) if self.target.name in self.shapes else None
        return layout if layout is not None and layout.single is None else None

    def _may_be_nested(self, picked: Any) -> bool:
        """Whether this is the first value, and a nesting can be claimed about: a row for each of its numbers."""
        first = self.target.name not in self.shapes
        return first and bool(OF_ROWS & self.target.claims.keys()) and opened(picked) is not None

    def _is_named(self, picked: Any) -> bool:
        """Whether it is a nesting whose parts have names, though numpy may make an array of it: a named tuple."""
        return isinstance(picked, tuple) and hasattr(picked, "_fields") and self._may_be_nested(picked)

    def _first_nesting(self, picked: Any) -> NDArray[Any]:
        name = self.target.name
        layout = output_layout(picked, name)
        self.layouts[name] = layout
        self.ledger.notices += layout.notices
        self.ledger.output_kinds.setdefault(name, lowest_precision(sorted({leaf.dtype.name for leaf in layout.leaves})))
        return output_vector(layout, picked, name)

    def _vector(self, layout: Layout, picked: Any) -> NDArray[Any]:
        if picked is None:
            raise RuntimeError(f"{self.target.name} returned None")
        try:
            return output_vector(layout, picked, self.target.name)
        except DerivativeShapeError:  # another structure: a model to be mended
            raise
        except UsageError as error:  # None in one place, say: one bad point among good ones
            raise RuntimeError(str(error)) from None

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
            if self.target.pick is None and self._nested() is None:
                self.column = self.values[:, 0] if shape == () else None
                self.usual = shape
        return self.values


def _complex_vector(layout: Layout, pick: Callable[[Any], Any] | None, result: Any) -> NDArray[Any]:
    parts = output_parts(layout, result if pick is None else pick(result))
    return np.concatenate([complex_numbers.as_array(part).reshape(-1) for part in parts])


def _picked(pick: Any, result: Any) -> Any:
    try:
        return pick(result)
    except UsageError as error:  # said by the user's own code
        raise RuntimeError(str(error)) from error
