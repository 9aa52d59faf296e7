"""Constrained problems of W. Hock, K. Schittkowski, "Test Examples for Nonlinear Programming Codes", LNEMS 187,
Springer (1981).

Typed from memory of the book; the values at x0 and the optima were then recomputed with 40 digits and agree with what
it prints. Constraints read c = 0 (those first) or c >= 0, bounds left out. The derivatives are written by hand.
Most of the starting points are infeasible.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from tests.problem_sets.record import ScalarProblem, VectorProblem

SOURCE = "Hock, Schittkowski, LNEMS 187 (1981), problem {no}"

ROOT_2 = np.sqrt(2.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Published:
    """The optimum of one problem and its value."""

    value: float
    point: tuple[float, ...]


def _problem(
    no: int,
    *,
    x0: tuple[float, ...],
    objective: Callable[..., Any],
    gradient: Callable[..., Any],
    constraints: Callable[..., Any],
    jacobian: Callable[..., Any],
    value0: float,
    gradient0: tuple[float, ...],
    jacobian0: list[list[float]],
    optimum: Published,
) -> tuple[ScalarProblem, VectorProblem, Published]:
    """Formulas take the variables one by one, as the book writes them."""
    source = SOURCE.format(no=no)
    scalar = ScalarProblem(
        name=f"HS{no}",
        source=source,
        function=lambda x: objective(*x),
        gradient=lambda x: np.array(gradient(*x), dtype=float),
        x0=np.array(x0),
        value0=value0,
        gradient0=np.array(gradient0),
    )
    vector = VectorProblem(
        name=f"HS{no} constraints",
        source=source,
        function=lambda x: np.array(constraints(*x)),
        jacobian=lambda x: np.array(jacobian(*x), dtype=float),
        x0=np.array(x0),
        jacobian0=np.array(jacobian0),
    )
    return scalar, vector, optimum


_ALL = (
    _problem(
        6,
        x0=(-1.2, 1.0),
        objective=lambda a, b: (1 - a) ** 2,
        gradient=lambda a, b: (-2 * (1 - a), 0),
        constraints=lambda a, b: (10 * (b - a**2),),
        jacobian=lambda a, b: [[-20 * a, 10]],
        value0=4.84,
        gradient0=(-22 / 5, 0),
        jacobian0=[[24, 10]],
        optimum=Published(value=0.0, point=(1.0, 1.0)),
    ),
    _problem(
        7,
        x0=(2.0, 2.0),
        objective=lambda a, b: np.log(1 + a**2) - b,
        gradient=lambda a, b: (2 * a / (1 + a**2), -1),
        constraints=lambda a, b: ((1 + a**2) ** 2 + b**2 - 4,),
        jacobian=lambda a, b: [[4 * a * (1 + a**2), 2 * b]],
        value0=-0.39056208756589963,
        gradient0=(4 / 5, -1),
        jacobian0=[[40, 4]],
        optimum=Published(value=-1.7320508075688773, point=(0.0, 1.73205080756888)),
    ),
    _problem(
        21,
        x0=(-1.0, -1.0),
        objective=lambda a, b: 0.01 * a**2 + b**2 - 100,
        gradient=lambda a, b: (0.02 * a, 2 * b),
        constraints=lambda a, b: (10 * a - b - 10,),
        jacobian=lambda a, b: [[10, -1]],
        value0=-98.99,
        gradient0=(-1 / 50, -2),
        jacobian0=[[10, -1]],
        optimum=Published(value=-99.96, point=(2.0, 0.0)),
    ),
    _problem(
        27,
        x0=(2.0, 2.0, 2.0),
        objective=lambda a, b, c: 0.01 * (a - 1) ** 2 + (b - a**2) ** 2,
        gradient=lambda a, b, c: (0.02 * (a - 1) - 4 * a * (b - a**2), 2 * (b - a**2), 0),
        constraints=lambda a, b, c: (a + c**2 + 1,),
        jacobian=lambda a, b, c: [[1, 0, 2 * c]],
        value0=4.01,
        gradient0=(801 / 50, -4, 0),
        jacobian0=[[1, 0, 4]],
        optimum=Published(value=0.04, point=(-1.0, 1.0, 0.0)),
    ),
    _problem(
        28,
        x0=(-4.0, 1.0, 1.0),
        objective=lambda a, b, c: (a + b) ** 2 + (b + c) ** 2,
        gradient=lambda a, b, c: (2 * (a + b), 2 * (a + b) + 2 * (b + c), 2 * (b + c)),
        constraints=lambda a, b, c: (a + 2 * b + 3 * c - 1,),
        jacobian=lambda a, b, c: [[1, 2, 3]],
        value0=13.0,
        gradient0=(-6, -2, 4),
        jacobian0=[[1, 2, 3]],
        optimum=Published(value=0.0, point=(0.5, -0.5, 0.5)),
    ),
    _problem(
        35,
        x0=(0.5, 0.5, 0.5),
        objective=lambda a, b, c: 9 - 8 * a - 6 * b - 4 * c + 2 * a**2 + 2 * b**2 + c**2 + 2 * a * b + 2 * a * c,
        gradient=lambda a, b, c: (-8 + 4 * a + 2 * b + 2 * c, -6 + 4 * b + 2 * a, -4 + 2 * c + 2 * a),
        constraints=lambda a, b, c: (3 - a - b - 2 * c,),
        jacobian=lambda a, b, c: [[-1, -1, -2]],
        value0=2.25,
        gradient0=(-4, -3, -2),
        jacobian0=[[-1, -1, -2]],
        optimum=Published(value=0.11111111111111111, point=(1.33333333333333, 0.777777777777778, 0.444444444444444)),
    ),
    _problem(
        39,
        x0=(2.0, 2.0, 2.0, 2.0),
        objective=lambda a, b, c, d: -a,
        gradient=lambda a, b, c, d: (-1, 0, 0, 0),
        constraints=lambda a, b, c, d: (b - a**3 - c**2, a**2 - b - d**2),
        jacobian=lambda a, b, c, d: [[-3 * a**2, 1, -2 * c, 0], [2 * a, -1, 0, -2 * d]],
        value0=-2.0,
        gradient0=(-1, 0, 0, 0),
        jacobian0=[[-12, 1, -4, 0], [4, -1, 0, -4]],
        optimum=Published(value=-1.0, point=(1.0, 1.0, 0.0, 0.0)),
    ),
    _problem(
        40,
        x0=(0.8, 0.8, 0.8, 0.8),
        objective=lambda a, b, c, d: -a * b * c * d,
        gradient=lambda a, b, c, d: (-b * c * d, -a * c * d, -a * b * d, -a * b * c),
        constraints=lambda a, b, c, d: (a**3 + b**2 - 1, a**2 * d - c, d**2 - b),
        jacobian=lambda a, b, c, d: [[3 * a**2, 2 * b, 0, 0], [2 * a * d, 0, -1, a**2], [0, -1, 0, 2 * d]],
        value0=-0.4096,
        gradient0=(-64 / 125, -64 / 125, -64 / 125, -64 / 125),
        jacobian0=[[48 / 25, 8 / 5, 0, 0], [32 / 25, 0, -1, 16 / 25], [0, -1, 0, 8 / 5]],
        optimum=Published(value=-0.25, point=(2 ** (-1 / 3), 2 ** (-1 / 2), 2 ** (-11 / 12), 2 ** (-1 / 4))),
    ),
    _problem(
        43,
        x0=(0.0, 0.0, 0.0, 0.0),
        objective=lambda a, b, c, d: a**2 + b**2 + 2 * c**2 + d**2 - 5 * a - 5 * b - 21 * c + 7 * d,
        gradient=lambda a, b, c, d: (2 * a - 5, 2 * b - 5, 4 * c - 21, 2 * d + 7),
        constraints=lambda a, b, c, d: (
            8 - a**2 - b**2 - c**2 - d**2 - a + b - c + d,
            10 - a**2 - 2 * b**2 - c**2 - 2 * d**2 + a + d,
            5 - 2 * a**2 - b**2 - c**2 - 2 * a + b + d,
        ),
        jacobian=lambda a, b, c, d: [
            [-2 * a - 1, -2 * b + 1, -2 * c - 1, -2 * d + 1],
            [-2 * a + 1, -4 * b, -2 * c, -4 * d + 1],
            [-4 * a - 2, -2 * b + 1, -2 * c, 1],
        ],
        value0=0.0,
        gradient0=(-5, -5, -21, 7),
        jacobian0=[[-1, 1, -1, 1], [1, 0, 0, 1], [-2, 1, 0, 1]],
        optimum=Published(value=-44.0, point=(0.0, 1.0, 2.0, -1.0)),
    ),
    _problem(
        48,
        x0=(3.0, 5.0, -3.0, 2.0, -2.0),
        objective=lambda a, b, c, d, e: (a - 1) ** 2 + (b - c) ** 2 + (d - e) ** 2,
        gradient=lambda a, b, c, d, e: (
            2 * (a - 1),
            2 * (b - c),
            -2 * (b - c),
            2 * (d - e),
            -2 * (d - e),
        ),
        constraints=lambda a, b, c, d, e: (a + b + c + d + e - 5, c - 2 * (d + e) + 3),
        jacobian=lambda a, b, c, d, e: [[1, 1, 1, 1, 1], [0, 0, 1, -2, -2]],
        value0=84.0,
        gradient0=(4, 16, -16, 8, -8),
        jacobian0=[[1, 1, 1, 1, 1], [0, 0, 1, -2, -2]],
        optimum=Published(value=0.0, point=(1.0, 1.0, 1.0, 1.0, 1.0)),
    ),
    _problem(
        71,
        x0=(1.0, 5.0, 5.0, 1.0),
        objective=lambda a, b, c, d: a * d * (a + b + c) + c,
        gradient=lambda a, b, c, d: (d * (2 * a + b + c), a * d, a * d + 1, a * (a + b + c)),
        constraints=lambda a, b, c, d: (a**2 + b**2 + c**2 + d**2 - 40, a * b * c * d - 25),
        jacobian=lambda a, b, c, d: [
            [2 * a, 2 * b, 2 * c, 2 * d],
            [b * c * d, a * c * d, a * b * d, a * b * c],
        ],
        value0=16.0,
        gradient0=(12, 1, 2, 11),
        jacobian0=[[2, 10, 10, 2], [25, 5, 5, 25]],
        optimum=Published(value=17.014017289156302, point=(1.0, 4.74299963726442, 3.82114998418487, 1.37940829317267)),
    ),
    _problem(
        76,
        x0=(0.5, 0.5, 0.5, 0.5),
        objective=lambda a, b, c, d: a**2 + 0.5 * b**2 + c**2 + 0.5 * d**2 - a * c + c * d - a - 3 * b + c - d,
        gradient=lambda a, b, c, d: (2 * a - c - 1, b - 3, 2 * c - a + d + 1, d + c - 1),
        constraints=lambda a, b, c, d: (
            5 - a - 2 * b - c - d,
            4 - 3 * a - b - 2 * c + d,
            b + 4 * c - 1.5,
        ),
        jacobian=lambda a, b, c, d: [[-1, -2, -1, -1], [-3, -1, -2, 1], [0, 1, 4, 0]],
        value0=-1.25,
        gradient0=(-1 / 2, -5 / 2, 2, 0),
        jacobian0=[[-1, -2, -1, -1], [-3, -1, -2, 1], [0, 1, 4, 0]],
        optimum=Published(
            value=-4.6818181818181818, point=(0.272727272727273, 2.09090909090909, 0.0, 0.545454545454545)
        ),
    ),
    _problem(
        79,
        x0=(2.0, 2.0, 2.0, 2.0, 2.0),
        objective=lambda a, b, c, d, e: (a - 1) ** 2 + (a - b) ** 2 + (b - c) ** 2 + (c - d) ** 4 + (d - e) ** 4,
        gradient=lambda a, b, c, d, e: (
            2 * (a - 1) + 2 * (a - b),
            -2 * (a - b) + 2 * (b - c),
            -2 * (b - c) + 4 * (c - d) ** 3,
            -4 * (c - d) ** 3 + 4 * (d - e) ** 3,
            -4 * (d - e) ** 3,
        ),
        constraints=lambda a, b, c, d, e: (
            a + b**2 + c**3 - 2 - 3 * ROOT_2,
            b - c**2 + d + 2 - 2 * ROOT_2,
            a * e - 2,
        ),
        jacobian=lambda a, b, c, d, e: [
            [1, 2 * b, 3 * c**2, 0, 0],
            [0, 1, -2 * c, 1, 0],
            [e, 0, 0, 0, a],
        ],
        value0=1.0,
        gradient0=(2, 0, 0, 0, 0),
        jacobian0=[[1, 4, 12, 0, 0], [0, 1, -4, 1, 0], [2, 0, 0, 0, 2]],
        optimum=Published(
            value=0.078776820871056901,
            point=(1.19112745631105, 1.36260316496174, 1.47281793151209, 1.63501661916799, 1.67908143616641),
        ),
    ),
)

OBJECTIVES: tuple[ScalarProblem, ...] = tuple(scalar for scalar, _, _ in _ALL)
CONSTRAINTS: tuple[VectorProblem, ...] = tuple(vector for _, vector, _ in _ALL)
OPTIMA: dict[str, Published] = {scalar.name: optimum for scalar, _, optimum in _ALL}
