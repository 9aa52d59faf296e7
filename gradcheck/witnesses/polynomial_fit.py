"""Least-squares polynomials through function values, and the derivative they give: value ± bound.

Values at the nodes of a stencil are expanded in the polynomials that are orthonormal *on those nodes*. Then independent
errors of the values give coefficients with the same independent errors: the coefficients that are too small to be
anything else are the noise sample, and every lower order is already the least-squares fit of that order.

Sources: discrete orthogonal polynomials, Forsythe 1957 (J. SIAM 5, 74-88); nodes near Chebyshev's, which keep the
derivative's weights small.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.polynomial import chebyshev

from gradcheck.records.arrays import Array, BoolArray, IntArray

#: Multiples of the noise estimate that count as "surely no noise" when the order of a fit is chosen.
SIGNIFICANT = 3.0
#: Half-width of a bound in standard deviations of the fitted derivative, for a noise level that is known. Independent
#: Gaussian errors would need 3; rounding errors differ in size from node to node and go together.
DEVIATIONS = 7.5
#: How much of the first dropped order goes into the bound.
DROPPED_SHARE = 0.4
#: Smallest noise of one value, in units of the spacing of floating-point numbers at its size: a correctly rounded value
#: has a standard deviation of 0.29.
ROUNDING = 0.3
#: Nodes nearer to the centre than this are no part of the net that the polynomial is fitted to.
CLOSE = 1e-3
_TINY = float(np.finfo(float).tiny)
#: Coefficients that must be left over as a noise sample.
SAMPLE_LEAST = 3


@dataclass(frozen=True, slots=True, eq=False)
class Stencil:
    """Nodes in units of the half-width, and the orthonormal polynomials on them.

    Attributes
    ----------
    nodes : ndarray, shape (k,)
        The centre 0 is the last one.
    basis : ndarray, shape (k, k)
        Column i: the orthonormal polynomial of degree i at the nodes.
    at_centre : ndarray, shape (3, k)
        First, second and third derivative of each polynomial at 0, per half-width to that power.
    node_slopes : ndarray, shape (k, k)
        Derivative of polynomial i (column) at each node (row).
    close_pair : bool
        Whether two nodes lie so close to the centre that the last two polynomials belong to them.
    """

    nodes: Array
    basis: Array
    at_centre: Array
    node_slopes: Array
    close_pair: bool


@lru_cache(maxsize=64)
def stencil_on(nodes: tuple[float, ...], one_sided: bool) -> Stencil:
    """The stencil on `nodes` (the centre is added); `one_sided` nodes lie in (0, 1], others in [-1, 1]."""
    t = np.array([*nodes, 0.0])
    z, stretch = (2 * t - 1, 2.0) if one_sided else (t, 1.0)
    k = t.size
    values = chebyshev.chebvander(z, k - 1)
    basis, triangle = np.linalg.qr(values)
    identity = np.eye(k)
    slopes_at = chebyshev.chebval(z, chebyshev.chebder(identity, 1, axis=0)).T * stretch
    centre = [chebyshev.chebval(z[-1], chebyshev.chebder(identity, p, axis=0)) * stretch**p for p in (1, 2, 3)]
    # basis = values @ inverse(triangle): the same combination gives the derivatives of the orthonormal polynomials.
    node_slopes = np.linalg.solve(triangle.T, slopes_at.T).T
    close = bool(((np.abs(t) > 0) & (np.abs(t) < CLOSE)).any())
    return Stencil(t, basis, np.linalg.solve(triangle.T, np.array(centre).T).T, node_slopes, close)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Fit:
    """Fits of several directions and outputs; all arrays have shape (d, m).

    Attributes
    ----------
    value, bound : ndarray
        Derivative along the direction; meaningful where `resolved`.
    order : ndarray of int
        Number of polynomials kept.
    noise : ndarray
        Standard deviation of one value, from the coefficients left over.
    tail, before : ndarray
        Root mean square of the last four coefficients, and of the four before: do they still decay?
    floor : ndarray
        Rounding of one value, from its size alone.
    variation : ndarray
        Largest coefficient but the constant: how much the function varies over the stencil.
    resolved : ndarray of bool
        The coefficients end in a sample of noise.
    flat : ndarray of bool
        The coefficients left over do not decay any more.
    apart : ndarray
        The two last coefficients in units of the noise: the four before, or what the rounding of x leaves. On a stencil
        with a pair close to the centre they are what this pair does not share with the rest: a narrow feature at the
        point.
    argument : ndarray
        Error of one value that the rounding of x inside the model explains: slope times wobble; 0 without one.
    """

    value: Array
    bound: Array
    order: IntArray
    noise: Array
    tail: Array
    before: Array
    floor: Array
    variation: Array
    resolved: BoolArray
    flat: BoolArray
    apart: Array
    argument: Array


def fit(
    stencil: Stencil,
    half_width: Array,
    differences: Array,
    largest: Array,
    slips: Array | None = None,
    derivative: int = 1,
    wobble: Array | None = None,
) -> Fit:
    """Fit the values on a stencil.

    Parameters
    ----------
    stencil : Stencil with k nodes
    half_width : ndarray, shape (d,)
        > 0.
    differences : ndarray, shape (d, k, m)
        f at each node minus f at the centre (the last node, hence 0).
    largest : ndarray, shape (d, m)
        Largest size of f on the stencil: the floor of the rounding.
    slips : ndarray, shape (d, k), optional
        Displacement realised minus displacement meant, in units of the half-width; corrected to first order.
    derivative : 1, 2 or 3
    wobble : ndarray, shape (d,), optional
        Size of the rounding of x itself, in units of the direction. A model that multiplies x by a constant rounds the
        product alike at all nodes: its values are exact ones of a point beside x, and no residual shows it. The next
        derivative times the wobble goes into the bound.

    Returns
    -------
    Fit
        NaN values where a difference is not finite.
    """
    # Squares of tiny or huge values would leave the range of floating-point numbers; powers of two lose nothing.
    unit = 2.0 ** np.minimum(np.maximum(np.floor(np.log2(np.where(largest > 0, largest, 1.0))), -1000), 1000)
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        fits = _fitted(stencil, half_width, differences / unit[:, None, :], largest / unit, slips, derivative, wobble)
        scaled = {name: getattr(fits, name) * unit for name in _IN_UNITS_OF_VALUES}
    return replace(fits, **scaled)


#: Fields of a fit that scale with the values.
_IN_UNITS_OF_VALUES = ("value", "bound", "noise", "tail", "before", "floor", "variation", "argument")


def _fitted(
    stencil: Stencil,
    half_width: Array,
    differences: Array,
    largest: Array,
    slips: Array | None,
    derivative: int,
    wobble: Array | None,
) -> Fit:
    a = np.einsum("ki,dkm->dim", stencil.basis, differences)
    if slips is not None and slips.any():
        # First order is enough: a slip is a rounding error of x, and its square is below rounding.
        kept = a.copy()
        kept[:, min(8, a.shape[1] - 1) :] = 0.0
        slopes = np.einsum("ki,dim->dkm", stencil.node_slopes, kept)
        a = np.einsum("ki,dkm->dim", stencil.basis, differences - slips[:, :, None] * slopes)
    floor = ROUNDING * np.spacing(largest)
    own: Array | None = None
    if stencil.close_pair:
        # What the pair close to the centre does not share with the rest. It is no noise sample: values so close to each
        # other are rounded alike.
        own, a = np.abs(a[:, -2:]).max(axis=1), a[:, :-2]
    k = a.shape[1]
    squares = a**2
    last = min(4, k - 2)
    tail = _root_mean(squares[:, k - last :])
    before = _root_mean(squares[:, max(1, k - 2 * last) : k - last]) if k > last + 1 else tail
    level = np.maximum(tail, floor)
    significant = np.abs(a) > SIGNIFICANT * level[:, None, :]
    significant[:, 0] = True  # the constant is always fitted
    order = k - significant[:, ::-1].argmax(axis=1)
    return _concluded(stencil, half_width, a, squares, order, floor, tail, before, own, derivative, wobble)


def _root_mean(squares: Array) -> Array:
    root: Array = np.sqrt(squares.sum(axis=1) / squares.shape[1])
    return root


def _concluded(
    stencil: Stencil,
    half_width: Array,
    a: Array,
    squares: Array,
    order: IntArray,
    floor: Array,
    tail: Array,
    before: Array,
    own: Array | None,
    derivative: int,
    wobble: Array | None,
) -> Fit:
    k = a.shape[1]
    index = np.arange(k)[None, :, None]
    kept = index < order[:, None, :]
    left_over = k - order
    noise = np.sqrt(np.where(kept, 0.0, squares).sum(axis=1) / np.maximum(left_over, 1))
    noise = np.maximum(noise, floor)
    weights = stencil.at_centre[derivative - 1, :k][None, :, None]
    # one division after the other: powers of a tiny or a huge width would leave the range of floating-point numbers
    size = [np.abs(half_width[:, None])] * derivative
    half_way = (order + left_over // 2)[:, None, :]
    dropped = ~kept
    sooner, later = (
        np.sqrt(np.where(part, squares, 0.0).sum(axis=1) / np.maximum(part.sum(axis=1), 1))
        for part in (dropped & (index < half_way), dropped & (index >= half_way))
    )
    total = np.where(kept, weights * a, 0.0).sum(axis=1)
    value = _over(total, size) * np.sign(half_width[:, None]) ** derivative
    # The derivative is fitted with the orders kept; where none of them moves it (a constant), the lowest that does sets
    # the amplification, so that an exact zero gets a bound that means something.
    counted = kept | (index <= derivative)
    amplification = _over(np.sqrt(np.where(counted, weights**2, 0.0).sum(axis=1)), size)
    after = dropped & (index <= order[:, None, :] + 1)
    next_weight = _over(np.where(after, np.abs(weights), 0.0).max(axis=1), size)
    deviations = DEVIATIONS * (1 + 2 / np.maximum(left_over, 1))
    bound = noise * (deviations * amplification + DROPPED_SHARE * next_weight) + 2 * np.finfo(float).eps * np.abs(value)
    if wobble is not None and derivative < 3:
        next_one = np.where(kept, stencil.at_centre[derivative, :k][None, :, None] * a, 0.0).sum(axis=1)
        bound = bound + _over(wobble[:, None] * np.abs(next_one), [*size, size[0]])
    variation = np.abs(a[:, 1:]).max(axis=1)
    argument = np.zeros_like(noise)
    if wobble is not None:
        if derivative > 1:
            total = np.where(kept, stencil.at_centre[0, :k][None, :, None] * a, 0.0).sum(axis=1)
        argument = np.abs(total / half_width[:, None]) * wobble[:, None]
    apart = np.zeros_like(noise)
    if own is not None:
        # Where x itself is rounded inside the model, the few digits of the other nodes may be spared what this pair
        # meets.
        apart = own / np.maximum(np.maximum(tail, floor), np.maximum(argument, _TINY))
    return Fit(
        value=value,
        bound=bound,
        order=order,
        noise=noise,
        tail=tail,
        before=before,
        floor=floor,
        variation=variation,
        resolved=(left_over >= SAMPLE_LEAST) & np.isfinite(value),
        apart=apart,
        argument=argument,
        flat=(left_over >= SAMPLE_LEAST + 1) & (sooner <= 3 * np.maximum(later, floor)),
    )


def _over(numbers: Array, widths: Sequence[Array]) -> Array:
    for width in widths:
        numbers = numbers / width
    return numbers
