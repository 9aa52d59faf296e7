"""What each part of an input is: a variable, something that is passed on, or a container. And what is said about it."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.problem.jax_trees import is_jax_array
from gradcheck.problem.numbers import is_floating, rectangle
from gradcheck.problem.opening import opened
from gradcheck.problem.template import Leaf, Place, Read, Untouched
from gradcheck.records.arrays import Array
from gradcheck.wording import brief, count, listed

#: So many parts are named in a notice.
_NAMED = 5


class InputParts:
    """Reads the parts of a nesting one after another; collects leaves, their values, and what there is to say.

    Attributes
    ----------
    leaves : list of Leaf
    values : list of ndarray
        The numbers of each leaf.
    met_integers : bool
        Whether a single whole number was passed on.
    """

    def __init__(self) -> None:
        self.leaves: list[Leaf] = []
        self.values: list[Array] = []
        self.met_integers = False
        self._changed: dict[str, list[Place]] = {}
        self._passed: list[tuple[Place, str]] = []
        self._arrays: dict[int, Place] = {}
        self._plain: dict[int, bool] = {}

    def __call__(self, value: Any, place: Place, *, top: bool) -> Read:
        if type(value) in (list, tuple):
            array = rectangle(value, self._plain)
            if array is not None:
                return self._leaf(array, place, scalar=False, top=True, fresh=True)
        if isinstance(value, bool | str | bytes) or value is None:
            return self._pass(value, place, top)
        if isinstance(value, int | float | complex | np.generic):
            return self._leaf(np.asarray(value), place, scalar=True, top=top, fresh=True)
        if type(value) is np.ndarray:
            return self._leaf(value, place, scalar=False, top=top)
        found = opened(value)
        if found is not None:
            return found
        if hasattr(value, "__array__"):
            return self._other_array(value, place, top)
        return self._pass(value, place, top)

    def _other_array(self, value: Any, place: Place, top: bool) -> Read:
        """An array that is no plain one of numpy."""
        if isinstance(value, np.ma.MaskedArray) and np.ma.is_masked(value):
            masked = count(int(np.ma.getmaskarray(value).sum()), "masked entry", "masked entries")
            raise UsageError(
                f"{place} is an array with {masked}, which cannot be moved; give the valid ones only, "
                "value.compressed(), and put them in place inside the model"
            )
        jax = is_jax_array(value)
        try:
            array = np.asarray(value)
        except Exception as error:
            if jax and "key" in str(getattr(value, "dtype", "")):  # a random key
                return self._pass(value, place, top)
            hint = "; call gradcheck outside of what jax traces" if "Tracer" in type(error).__name__ else ""
            raise UsageError(
                f"{place} is {type(value).__name__}, which cannot be read as an array: {type(error).__name__}{hint}"
            ) from None
        if jax:
            return self._leaf(array, place, scalar=False, top=top, jax=True, given=value)
        leaf = self._leaf(array, place, scalar=False, top=top, given=value)
        if type(value) is not np.memmap and isinstance(leaf, Leaf):
            self._change(place, f"given as {type(value).__name__}; the model received a numpy array")
        return leaf

    def _leaf(
        self,
        array: NDArray[Any],
        place: Place,
        *,
        scalar: bool,
        top: bool,
        fresh: bool = False,
        jax: bool = False,
        given: Any = None,
    ) -> Leaf | Untouched:
        if array.dtype.kind == "c":
            raise UsageError(
                f"{place} is complex ({array.dtype}); parameters must be real: pass real and imaginary parts as two "
                "entries and put them together inside the model"
            )
        if array.dtype.kind in "iub":
            if not top or array.dtype.kind == "b":
                self.met_integers |= scalar and array.dtype.kind != "b"
                return self._pass(array.item() if scalar else array if given is None else given, place, False)
            self._change(place, "given as integers; the model received float64")
        elif not is_floating(array.dtype):
            return self._no_numbers(array, place, top, given)
        elif array.dtype.itemsize != 8 or array.dtype.kind != "f":
            self._change(place, f"given as {array.dtype.name}; the model received float64")
        values = _doubles(array, place)
        start = self.leaves[-1].stop if self.leaves else 0
        leaf = Leaf(place, start, values.shape, scalar, array.dtype, None if jax else _axes(array), jax)
        _refuse_nonfinite(leaf, values)
        if not fresh:
            self._meet_again(array if given is None else given, place)
        self.leaves.append(leaf)
        self.values.append(values)
        return leaf

    def _no_numbers(self, array: NDArray[Any], place: Place, top: bool, given: Any) -> Untouched:
        """An array of text, dates or objects."""
        if array.dtype.kind == "O" and any(isinstance(part, int | float | complex | np.ndarray) for part in array.flat):
            ragged = any(isinstance(part, list | tuple | np.ndarray) for part in array.flat)
            mend = "pass its parts as a list of arrays" if ragged else "make it one of numbers: array.astype(float)"
            raise UsageError(f"{place} is an array of objects (dtype object), where numbers are needed; {mend}")
        if top:
            said = {"M": "dates", "m": "time spans", "O": "objects"}.get(array.dtype.kind, "text")
            raise UsageError(f"{place} is an array of {said} ({array.dtype}); numbers are needed")
        return self._pass(array if given is None else given, place, False)

    def _pass(self, value: Any, place: Place, top: bool) -> Untouched:
        if top:
            raise UsageError(
                f"`at` is {brief(value)} ({type(value).__name__}); numbers are needed: a float, a list, an array, or a "
                "nesting of them"
            )
        self._passed.append((place, _kind_of(value)))
        return Untouched(value)

    def _change(self, place: Place, what: str) -> None:
        self._changed.setdefault(what, []).append(place)

    def _meet_again(self, array: Any, place: Place) -> None:
        first = self._arrays.setdefault(id(array), place)
        if first is not place:
            self._change(place, f"the same array as {first}; they are varied one by one")

    def notices(self) -> tuple[str, ...]:
        """One sentence for each kind of change, and one for all that was passed on untouched."""
        said = [
            f"{_some([str(place) for place in places[:_NAMED]], len(places))} {'was' if len(places) == 1 else 'were'} "
            f"{what}".replace("was the same", "is the same").replace("were the same", "are the same")
            for what, places in self._changed.items()
        ]
        if self._passed:
            shown = [f"{place} ({kind})" for place, kind in self._passed[:_NAMED]]
            integers = any(kind.startswith(("int", "uint")) for _, kind in self._passed)
            said.append(
                f"passed through untouched, as no variable: {_some(shown, len(self._passed))}"
                + ("; a whole number beside other parts is none, write 3.0 to make it one" if integers else "")
            )
        return tuple(said)


def _some(shown: list[str], total: int) -> str:
    if total > len(shown):
        return f"{', '.join(shown)} and {total - len(shown):,} more"
    return listed(shown, limit=_NAMED, width=100)


def _kind_of(value: Any) -> str:
    """``int``, ``int64 array (3,)``, ``None``."""
    if value is None:
        return "None"
    if hasattr(value, "shape") and hasattr(value, "dtype"):
        return f"{value.dtype} array {tuple(value.shape)}"
    return type(value).__name__


def _doubles(array: NDArray[Any], place: Place) -> Array:
    if array.dtype.kind in "fiu" and array.dtype.itemsize <= 8:
        return array.astype(float)
    with np.errstate(over="ignore", invalid="ignore"):  # a long double beyond 1e308: infinite, told by name
        try:
            return array.astype(float)
        except (TypeError, ValueError):
            raise UsageError(f"{place} holds {array.dtype}, which cannot be turned into float64") from None


def _axes(array: NDArray[Any]) -> tuple[int, ...] | None:
    """The order of the axes in memory, slowest first; None where it is C's."""
    if array.ndim < 2 or array.size == 0 or array.flags.c_contiguous:
        return None
    # an axis of length one stands anywhere, and a negative stride runs through memory all the same
    order = sorted(range(array.ndim), key=lambda axis: (array.shape[axis] > 1, -abs(array.strides[axis]), axis))
    moving = [axis for axis in order if array.shape[axis] > 1]
    return None if moving == sorted(moving) else tuple(order)


def _refuse_nonfinite(leaf: Leaf, values: Array) -> None:
    finite = np.isfinite(values)
    if finite.all():
        return
    bad = int(np.flatnonzero(~finite)[0])
    raise UsageError(f"`at` holds {np.ravel(values)[bad]} at {leaf.name(leaf.start + bad)}; every entry must be finite")
