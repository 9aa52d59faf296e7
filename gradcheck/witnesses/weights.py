"""Weights of finite-difference formulas on nodes of any spacing, and what such a formula leaves out.

A derivative of order m is approximated by Σ w_i·f(x_i), exactly for polynomials of a degree below the number of nodes.
The steps of the other witnesses rest on fits; these weights are for formulas with a name (the centred and one-sided
ones of the handbooks) and for what a user's own stencil amounts to.
"""

from math import factorial
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.records.arrays import Array, frozen

#: A coefficient below this share of the sizes that cancel in it is zero up to rounding.
_ROUNDING = 1e-13


def derivative_weights(nodes: Any, at: float = 0.0, order: int = 1) -> Array:
    """Weights w with f^(order)(at) ≈ Σ w_i·f(nodes_i).

    Parameters
    ----------
    nodes : array_like, shape (k,)
        Places where values are known, in any order, all different; unit of x. For a formula in units of a step h give
        multiples of h, and divide the weights by h^order.
    at : float
        Where the derivative is wanted; need not be a node.
    order : int
        Order m of the derivative, 0 <= m < k; 0 interpolates.

    Returns
    -------
    ndarray, shape (k,)
        In the order of `nodes`, read-only; unit of x to the power −m. On whole-number nodes each weight is right to a
        few units in its last place (measured up to 20 nodes).

    Raises
    ------
    UsageError
        If nodes are repeated, fewer than order + 1, not finite or not a vector; if the order is negative or no whole
        number; if `at` is not finite.

    Notes
    -----
    B. Fornberg, "Generation of finite difference formulas on arbitrarily spaced grids", Math. Comp. 51 (1988) 699-706.
    Errors of the values come through multiplied by the Euclidean norm of the weights if they are independent, and by no
    more than Σ|w_i| whatever they are.

    Examples
    --------
    >>> from gradcheck.witnesses.weights import derivative_weights
    >>> derivative_weights([-1, 0, 1], order=2).tolist()
    [1.0, -2.0, 1.0]
    """
    places, order = _validated(nodes, at, order)
    nearest_first = np.argsort(np.abs(places - at), kind="stable")
    weights = np.empty(places.size)
    weights[nearest_first] = _by_recursion(places[nearest_first] - at, order)
    return frozen(weights)


def leading_error(nodes: Any, at: float = 0.0, order: int = 1) -> tuple[int, float]:
    """Leading term of (Σ w_i·f(nodes_i) − f^(order)(at)), for the weights of `derivative_weights`.

    Parameters
    ----------
    nodes, at, order
        As in `derivative_weights`; in units of a step h.

    Returns
    -------
    power : int
        p, the order of accuracy: the term is ``factor · h^p · f^(order + p)(at)``.
    factor : float
        Zero where the formula is exact for every function (order 0 at a node); then p is the number of nodes.

    Raises
    ------
    UsageError
        As in `derivative_weights`.

    Examples
    --------
    >>> from gradcheck.witnesses.weights import leading_error
    >>> power, factor = leading_error([-1, 0, 1])
    >>> power, round(1 / factor, 12)
    (2, 6.0)
    """
    places, order = _validated(nodes, at, order)
    k = places.size
    # The formula is exact for x^k − Π(x − a_i), of degree k − 1; so what it makes of x^k, less the truth, stands in the
    # coefficients of the product. Symmetry can remove the one of x^m; then degree k + 1 leads, with that of x^(m−1).
    product, sizes = (np.poly(sign)[::-1] for sign in (places - at, -np.abs(places - at)))
    for extra, power in enumerate(range(order, max(order - 2, -1), -1)):
        if abs(product[power]) > _ROUNDING * sizes[power]:
            return k - order + extra, -float(product[power]) * factorial(order) / factorial(k + extra)
    return k, 0.0


def _validated(nodes: Any, at: float, order: Any) -> tuple[Array, int]:
    places = np.asarray(nodes, dtype=float)
    if places.ndim != 1:
        raise UsageError(f"nodes has shape {places.shape}; give a vector of places")
    if not np.isfinite(places).all() or not np.isfinite(at):
        raise UsageError(f"nodes {places.tolist()} and at={at!r} must be finite numbers")
    if isinstance(order, bool) or not isinstance(order, int | np.integer) or order < 0:
        raise UsageError(f"order is {order!r}; the order of a derivative is a whole number >= 0")
    if places.size <= order:
        raise UsageError(
            f"{places.size} nodes cannot give a derivative of order {order}; give {int(order) + 1} nodes or more"
        )
    away = np.sort(places - at)
    repeated = away[1:][np.diff(away) == 0]
    if repeated.size:
        raise UsageError(f"the node {float(repeated[0]) + at!r} stands more than once; give different nodes")
    return places, int(order)


def _by_recursion(away: Array, order: int) -> Array:
    """Weights at zero for nodes `away` from it, one node after the other.

    Row j of the table holds the weights of all orders (0 … order) of node j in the formula on the nodes so far.
    """
    k = away.size
    table = np.zeros((k, order + 1))
    table[0, 0] = 1.0
    orders = np.arange(1, order + 1)
    product = 1.0  # of the distances between the last node and those before it
    for n in range(1, k):
        gaps = away[n] - away[:n]
        last = table[n - 1].copy()
        before = product
        product = float(np.prod(gaps))
        lower = table[:n, :-1] * orders
        table[:n] *= away[n]
        table[:n, 1:] -= lower
        table[:n] /= gaps[:, None]
        table[n] = -away[n - 1] * last
        table[n, 1:] += orders * last[:-1]
        table[n] *= before / product
    return table[:, order]
