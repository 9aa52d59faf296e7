"""Where the model may be called: bounds, integers, typical sizes."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.records.arrays import Array, BoolArray, frozen

#: Half-width of the window of a variable without bounds, in units of its size.
WINDOW = 0.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Domain:
    """The box in which the model may be called; all arrays have shape (n,).

    Attributes
    ----------
    lower, upper : ndarray
        Infinite where there is no bound.
    scale : ndarray
        Size of each variable, > 0: the typical size where it was given, else |x|, else the bounds' width, else 1.
    known : ndarray of bool
        Where something tells the size: the caller, or bounds on both sides.
    integer : ndarray of bool
    """

    lower: Array
    upper: Array
    scale: Array
    known: BoolArray
    integer: BoolArray

    @property
    def size(self) -> int:
        return int(self.lower.size)

    @property
    def bounded(self) -> BoolArray:
        """Where both bounds are finite."""
        result: BoolArray = np.isfinite(self.lower) & np.isfinite(self.upper)
        return result


def domain_of(x: Array, *, bounds: Any = None, typical: Any = None, integer: Any = None) -> Domain:
    """The domain around the point x.

    Parameters
    ----------
    x : ndarray, shape (n,)
    bounds : list of (lower, upper) pairs, tuple (lower, upper), or object with ``lb`` and ``ub``
        None stands for no bound.
    typical : float or array, optional
    integer : array of bool, optional

    Raises
    ------
    UsageError
        If shapes do not fit, a bound is NaN, lower exceeds upper, or x lies outside.
    """
    lower, upper = _bounds(bounds, x)
    bounded = np.isfinite(lower) & np.isfinite(upper)
    outside = np.flatnonzero((x < lower) | (x > upper))
    if outside.size:
        i = int(outside[0])
        raise UsageError(
            f"entry {i} of the point is {x[i]:g}, outside its bounds [{lower[i]:g}, {upper[i]:g}]; "
            "move the point or widen the bounds"
        )
    return Domain(
        lower=_kept(lower),
        upper=_kept(upper),
        scale=frozen(_scale(x, _widths(lower, upper, bounded), typical)),
        known=frozen(_told(typical, x) | bounded, dtype=bool),
        integer=frozen(np.zeros(x.size, bool) if integer is None else integer, dtype=bool),
    )


def _kept(bound: Array) -> Array:
    """A side of the bounds, read-only; one number for all where there is no bound, for a million takes megabytes."""
    return bound if bound.strides == (0,) else frozen(bound)


def windows(base: Array, domain: Domain) -> tuple[Array, Array]:
    """Lower and upper ends, each (n,), of the stretch of each variable that is looked at.

    The bounds where there are any; else half the variable's size to each side.
    """
    lower = np.where(np.isfinite(domain.lower), domain.lower, base - WINDOW * domain.scale)
    upper = np.where(np.isfinite(domain.upper), domain.upper, base + WINDOW * domain.scale)
    return np.minimum(lower, base), np.maximum(upper, base)


def _widths(lower: Array, upper: Array, bounded: BoolArray) -> Array:
    """Width between the bounds; 1 where there is none."""
    if not bounded.any():
        return np.broadcast_to(1.0, lower.size)
    return np.subtract(upper, lower, out=np.ones(lower.size), where=bounded & (upper > lower))


def _scale(x: Array, width: Array, typical: Any) -> Array:
    own = np.where(x != 0, np.abs(x), width)
    if typical is None:
        return own
    try:
        given = np.asarray(typical, dtype=float)
    except (TypeError, ValueError):
        raise UsageError(f"typical is {typical!r:.80}; give a number > 0, or one a variable") from None
    if given.size not in (1, x.size):
        raise UsageError(f"typical has {given.size} entries but there are {x.size} variables")
    given = np.broadcast_to(given.ravel(), x.shape)
    bad = np.flatnonzero(~(np.isnan(given) | ((given > 0) & np.isfinite(given))))
    if bad.size:
        raise UsageError(f"typical[{bad[0]}] is {given[bad[0]]:g}; a typical size must be finite and > 0")
    return np.where(np.isnan(given), own, given)


def _told(typical: Any, x: Array) -> BoolArray:
    """Where the caller told the typical size."""
    if typical is None:
        return np.zeros(x.size, bool)
    told: BoolArray = ~np.isnan(np.broadcast_to(np.asarray(typical, dtype=float).ravel(), x.shape))
    return told


def _bounds(bounds: Any, x: Array) -> tuple[Array, Array]:
    n = x.size
    if bounds is None:
        return np.broadcast_to(-np.inf, n), np.broadcast_to(np.inf, n)
    if hasattr(bounds, "lb") and hasattr(bounds, "ub"):
        return _ordered(_side(bounds.lb, n, -np.inf), _side(bounds.ub, n, np.inf))
    if not isinstance(bounds, list | tuple | np.ndarray):
        raise UsageError(f"bounds is {bounds!r}; give a list of (lower, upper) pairs or a tuple (lower, upper)")
    readings = []
    if len(bounds) == n and all(np.ndim(pair) == 1 and len(pair) == 2 for pair in bounds):
        readings.append((_side([pair[0] for pair in bounds], n, -np.inf), _side([p[1] for p in bounds], n, np.inf)))
    if len(bounds) == 2 and not (isinstance(bounds, list) and readings):
        readings.append((_side(bounds[0], n, -np.inf), _side(bounds[1], n, np.inf)))
    if not readings:
        raise UsageError(
            f"bounds has {len(bounds)} parts for {n} variables; give a list of {n} (lower, upper) pairs "
            "or a tuple (lower, upper)"
        )
    fitting = [(low, high) for low, high in readings if np.all((low < high) & (low <= x) & (x <= high))]
    if len(fitting) == 2 and not all(np.array_equal(a, b) for a, b in zip(*fitting, strict=True)):
        raise UsageError(
            f"bounds={bounds!r} can be read as two pairs or as (lower, upper); write the pairs as a list: "
            f"{[tuple(pair) for pair in bounds]!r}, or use scipy.optimize.Bounds"
        )
    if not fitting:  # a bound may pin its variable: lower = upper
        fitting = [(low, high) for low, high in readings if np.all((low <= x) & (x <= high))]
    return _ordered(*(fitting or readings)[0])


def _side(side: Any, n: int, missing: float) -> Array:
    values = [missing if value is None else value for value in np.ravel(np.asarray(side, dtype=object))]
    try:
        array = np.array(values, dtype=float)
    except (TypeError, ValueError):
        raise UsageError(f"bounds holds {side!r}; numbers or None are needed") from None
    if array.size == 1:
        array = np.full(n, array[0])
    if array.size != n:
        raise UsageError(f"a side of bounds has {array.size} entries but there are {n} variables")
    if np.isnan(array).any():
        raise UsageError(f"a bound is NaN (entry {int(np.flatnonzero(np.isnan(array))[0])}); use None for no bound")
    return array


def _ordered(lower: Array, upper: Array) -> tuple[Array, Array]:
    wrong = np.flatnonzero(lower > upper)
    if wrong.size:
        i = int(wrong[0])
        raise UsageError(f"the bounds of entry {i} are the wrong way round: lower {lower[i]:g} > upper {upper[i]:g}")
    return lower, upper
