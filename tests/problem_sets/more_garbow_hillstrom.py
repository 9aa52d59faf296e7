"""Least-squares problems of J.J. Moré, B.S. Garbow, K.E. Hillstrom, "Testing unconstrained optimization software",
ACM Transactions on Mathematical Software 7(1) (1981) 17-41.

Residuals, data and starting points were typed from memory of the paper; the values at x0 in ``data/mgh.json`` were
computed from them with 50 digits. The Jacobians are written by hand.

Problem 7 jumps on x1 = 0, x2 < 0, and divides by zero at x1 = 0. The Jacobian at x0 is singular in 5, 18, 33 and 34; in
5, 7, 20 and 34 single entries of the gradient at x0 are exactly zero.
"""

import json
from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np

from tests.problem_sets.record import ScalarProblem, VectorProblem, sum_of_squares

SOURCE = "Moré, Garbow, Hillstrom, ACM TOMS 7 (1981) 17-41, problem {no}"
DATA = Path(__file__).parent.parent / "data" / "mgh.json"

Model = tuple[Callable[[Any], Any], Callable[[Any], Any]]

GAUSSIAN_HALF = (0.0009, 0.0044, 0.0175, 0.0540, 0.1295, 0.2420, 0.3521, 0.3989)
GAUSSIAN_Y = np.array((*GAUSSIAN_HALF, *GAUSSIAN_HALF[-2::-1]))
GAUSSIAN_T = (8.0 - np.arange(1, 16)) / 2.0
MEYER_Y = np.array(
    (34780, 28610, 23650, 19630, 16370, 13720, 11540, 9744, 8261, 7030, 6005, 5147, 4427, 3820, 3307, 2872), dtype=float
)
MEYER_T = 45.0 + 5.0 * np.arange(1, 17)
KOWALIK_Y = np.array((0.1957, 0.1947, 0.1735, 0.1600, 0.0844, 0.0627, 0.0456, 0.0342, 0.0323, 0.0235, 0.0246))
KOWALIK_U = np.array((4, 2, 1, 0.5, 0.25, 0.167, 0.125, 0.1, 0.0833, 0.0714, 0.0625))
OSBORNE_THOUSANDTHS = (
    (844, 908, 932, 936, 925, 908, 881, 850, 818, 784, 751, 718, 685, 658, 628, 603, 580),
    (558, 538, 522, 506, 490, 478, 467, 457, 448, 438, 431, 424, 420, 414, 411, 406),
)
OSBORNE_Y = np.array([y / 1000.0 for row in OSBORNE_THOUSANDTHS for y in row])
OSBORNE_T = 10.0 * np.arange(33)
BIGGS_T = np.arange(1, 14) / 10.0
BIGGS_Y = np.exp(-BIGGS_T) - 5.0 * np.exp(-10.0 * BIGGS_T) + 3.0 * np.exp(-4.0 * BIGGS_T)
WATSON_T = np.arange(1, 30) / 29.0


def rosenbrock(x: Any) -> Any:
    return np.array([10.0 * (x[1] - x[0] ** 2), 1.0 - x[0]])


def rosenbrock_jacobian(x: Any) -> Any:
    return np.array([[-20.0 * x[0], 10.0], [-1.0, 0.0]])


def freudenstein_roth(x: Any) -> Any:
    a, b = x
    return np.array([-13.0 + a + ((5.0 - b) * b - 2.0) * b, -29.0 + a + ((b + 1.0) * b - 14.0) * b])


def freudenstein_roth_jacobian(x: Any) -> Any:
    b = x[1]
    return np.array([[1.0, 10.0 * b - 3.0 * b**2 - 2.0], [1.0, 3.0 * b**2 + 2.0 * b - 14.0]])


def powell_badly_scaled(x: Any) -> Any:
    return np.array([1e4 * x[0] * x[1] - 1.0, np.exp(-x[0]) + np.exp(-x[1]) - 1.0001])


def powell_badly_scaled_jacobian(x: Any) -> Any:
    return np.array([[1e4 * x[1], 1e4 * x[0]], [-np.exp(-x[0]), -np.exp(-x[1])]])


def beale(x: Any) -> Any:
    return np.array([y - x[0] * (1.0 - x[1] ** i) for i, y in ((1, 1.5), (2, 2.25), (3, 2.625))])


def beale_jacobian(x: Any) -> Any:
    return np.array([[x[1] ** i - 1.0, i * x[0] * x[1] ** (i - 1)] for i in (1, 2, 3)])


def jennrich_sampson(x: Any) -> Any:
    i = np.arange(1.0, 11.0)
    return 2.0 + 2.0 * i - (np.exp(i * x[0]) + np.exp(i * x[1]))


def jennrich_sampson_jacobian(x: Any) -> Any:
    i = np.arange(1.0, 11.0)
    return np.stack([-i * np.exp(i * x[0]), -i * np.exp(i * x[1])], axis=1)


def helical_valley(x: Any) -> Any:
    a, b, c = x
    turn = np.arctan(b / a) / (2.0 * np.pi) + (0.5 if a.real < 0 else 0.0)
    return np.array([10.0 * (c - 10.0 * turn), 10.0 * (np.sqrt(a**2 + b**2) - 1.0), c])


def helical_valley_jacobian(x: Any) -> Any:
    a, b, _ = x
    square = a**2 + b**2
    turn, radius = 100.0 / (2.0 * np.pi * square), 10.0 / np.sqrt(square)
    return np.array([[turn * b, -turn * a, 10.0], [radius * a, radius * b, 0.0], [0.0, 0.0, 1.0]])


def gaussian(x: Any) -> Any:
    return x[0] * np.exp(-x[1] * (GAUSSIAN_T - x[2]) ** 2 / 2.0) - GAUSSIAN_Y


def gaussian_jacobian(x: Any) -> Any:
    away = GAUSSIAN_T - x[2]
    bell = np.exp(-x[1] * away**2 / 2.0)
    return np.stack([bell, -x[0] * bell * away**2 / 2.0, x[0] * bell * x[1] * away], axis=1)


def meyer(x: Any) -> Any:
    return x[0] * np.exp(x[1] / (MEYER_T + x[2])) - MEYER_Y


def meyer_jacobian(x: Any) -> Any:
    shifted = MEYER_T + x[2]
    growth = np.exp(x[1] / shifted)
    return np.stack([growth, x[0] * growth / shifted, -x[0] * growth * x[1] / shifted**2], axis=1)


def powell_singular(x: Any) -> Any:
    a, b, c, d = x
    return np.array([a + 10.0 * b, np.sqrt(5.0) * (c - d), (b - 2.0 * c) ** 2, np.sqrt(10.0) * (a - d) ** 2])


def powell_singular_jacobian(x: Any) -> Any:
    a, b, c, d = x
    third, fourth = 2.0 * (b - 2.0 * c), 2.0 * np.sqrt(10.0) * (a - d)
    return np.array(
        [
            [1.0, 10.0, 0.0, 0.0],
            [0.0, 0.0, np.sqrt(5.0), -np.sqrt(5.0)],
            [0.0, third, -2.0 * third, 0.0],
            [fourth, 0.0, 0.0, -fourth],
        ]
    )


def wood(x: Any) -> Any:
    a, b, c, d = x
    return np.array(
        [
            10.0 * (b - a**2),
            1.0 - a,
            np.sqrt(90.0) * (d - c**2),
            1.0 - c,
            np.sqrt(10.0) * (b + d - 2.0),
            (b - d) / np.sqrt(10.0),
        ]
    )


def wood_jacobian(x: Any) -> Any:
    ninety, ten = np.sqrt(90.0), np.sqrt(10.0)
    return np.array(
        [
            [-20.0 * x[0], 10.0, 0.0, 0.0],
            [-1.0, 0.0, 0.0, 0.0],
            [0.0, 0.0, -2.0 * ninety * x[2], ninety],
            [0.0, 0.0, -1.0, 0.0],
            [0.0, ten, 0.0, ten],
            [0.0, 1.0 / ten, 0.0, -1.0 / ten],
        ]
    )


def kowalik_osborne(x: Any) -> Any:
    u = KOWALIK_U
    return KOWALIK_Y - x[0] * (u**2 + u * x[1]) / (u**2 + u * x[2] + x[3])


def kowalik_osborne_jacobian(x: Any) -> Any:
    u = KOWALIK_U
    above, below = u**2 + u * x[1], u**2 + u * x[2] + x[3]
    fall = x[0] * above / below**2
    return np.stack([-above / below, -x[0] * u / below, fall * u, fall], axis=1)


def osborne_1(x: Any) -> Any:
    return OSBORNE_Y - (x[0] + x[1] * np.exp(-OSBORNE_T * x[3]) + x[2] * np.exp(-OSBORNE_T * x[4]))


def osborne_1_jacobian(x: Any) -> Any:
    t = OSBORNE_T
    first, second = np.exp(-t * x[3]), np.exp(-t * x[4])
    return np.stack([-np.ones(t.size), -first, -second, x[1] * t * first, x[2] * t * second], axis=1)


def biggs(x: Any) -> Any:
    t = BIGGS_T
    return x[2] * np.exp(-t * x[0]) - x[3] * np.exp(-t * x[1]) + x[5] * np.exp(-t * x[4]) - BIGGS_Y


def biggs_jacobian(x: Any) -> Any:
    t = BIGGS_T
    first, second, third = np.exp(-t * x[0]), np.exp(-t * x[1]), np.exp(-t * x[4])
    return np.stack([-x[2] * t * first, x[3] * t * second, first, -second, -x[5] * t * third, third], axis=1)


def watson(x: Any) -> Any:
    powers, slopes = _watson_tables(len(x))
    return np.concatenate([slopes @ x - (powers @ x) ** 2 - 1.0, [x[0], x[1] - x[0] ** 2 - 1.0]])


def watson_jacobian(x: Any) -> Any:
    powers, slopes = _watson_tables(len(x))
    last = np.zeros((2, len(x)))
    last[0, 0], last[1, :2] = 1.0, (-2.0 * x[0], 1.0)
    return np.concatenate([slopes - 2.0 * (powers @ x)[:, None] * powers, last])


def _watson_tables(n: int) -> tuple[np.ndarray, np.ndarray]:
    """t^(j-1) and its derivative (j-1) t^(j-2), both (29, n)."""
    powers = WATSON_T[:, None] ** np.arange(n)
    slopes = np.zeros_like(powers)
    slopes[:, 1:] = np.arange(1, n) * powers[:, :-1]
    return powers, slopes


def in_blocks(model: Model, size: int) -> Model:
    """The model repeated on consecutive blocks of `size` variables."""
    function, jacobian = model

    def blocks(x: Any) -> Any:
        return np.concatenate([function(block) for block in x.reshape(-1, size)])

    def blocks_jacobian(x: Any) -> Any:
        full = np.zeros((x.size, x.size))
        for start in range(0, x.size, size):
            block = slice(start, start + size)
            full[block, block] = jacobian(x[block])
        return full

    return blocks, blocks_jacobian


def penalty_1(x: Any) -> Any:
    return np.concatenate([np.sqrt(1e-5) * (x - 1.0), [x @ x - 0.25]])


def penalty_1_jacobian(x: Any) -> Any:
    return np.concatenate([np.sqrt(1e-5) * np.eye(x.size), [2.0 * x]])


def variably_dimensioned(x: Any) -> Any:
    weighted = np.arange(1.0, x.size + 1) @ (x - 1.0)
    return np.concatenate([x - 1.0, [weighted, weighted**2]])


def variably_dimensioned_jacobian(x: Any) -> Any:
    weights = np.arange(1.0, x.size + 1)
    return np.concatenate([np.eye(x.size), [weights, 2.0 * (weights @ (x - 1.0)) * weights]])


def brown_almost_linear(x: Any) -> Any:
    return np.concatenate([x[:-1] + x.sum() - (x.size + 1.0), [x.prod() - 1.0]])


def brown_almost_linear_jacobian(x: Any) -> Any:
    full = np.eye(x.size) + 1.0
    # leaving one factor out, not dividing by it: it may be zero
    full[-1] = [np.delete(x, j).prod() for j in range(x.size)]
    return full


def discrete_boundary_value(x: Any) -> Any:
    h, t = _grid(x.size)
    padded = np.concatenate([[0.0], x, [0.0]])
    return 2.0 * x - padded[:-2] - padded[2:] + h**2 * (x + t + 1.0) ** 3 / 2.0


def discrete_boundary_value_jacobian(x: Any) -> Any:
    h, t = _grid(x.size)
    return _tridiagonal(2.0 + 1.5 * h**2 * (x + t + 1.0) ** 2, -1.0, -1.0)


def discrete_integral_equation(x: Any) -> Any:
    _, t = _grid(x.size)
    return x + _integral_kernel(x.size) @ (x + t + 1.0) ** 3


def discrete_integral_equation_jacobian(x: Any) -> Any:
    _, t = _grid(x.size)
    return np.eye(x.size) + _integral_kernel(x.size) * 3.0 * (x + t + 1.0) ** 2


def _integral_kernel(n: int) -> np.ndarray:
    """h/2 times Green's function: (1-t_i) t_j for j <= i, t_i (1-t_j) beyond."""
    h, t = _grid(n)
    lower = np.outer(1.0 - t, t)
    return h / 2.0 * np.where(np.arange(n)[None, :] <= np.arange(n)[:, None], lower, lower.T)


def broyden_tridiagonal(x: Any) -> Any:
    padded = np.concatenate([[0.0], x, [0.0]])
    return (3.0 - 2.0 * x) * x - padded[:-2] - 2.0 * padded[2:] + 1.0


def broyden_tridiagonal_jacobian(x: Any) -> Any:
    return _tridiagonal(3.0 - 4.0 * x, -1.0, -2.0)


def _grid(n: int) -> tuple[float, np.ndarray]:
    h = 1.0 / (n + 1)
    return h, h * np.arange(1, n + 1)


def _tridiagonal(diagonal: np.ndarray, below: float, above: float) -> np.ndarray:
    beside = np.ones(diagonal.size - 1)
    return np.diag(diagonal) + below * np.diag(beside, -1) + above * np.diag(beside, 1)


LINEAR_M = 20


def linear_full_rank(x: Any) -> Any:
    common = -2.0 / LINEAR_M * x.sum() - 1.0
    return np.concatenate([x + common, np.full(LINEAR_M - x.size, common)])


def linear_full_rank_jacobian(x: Any) -> Any:
    return np.eye(LINEAR_M, x.size) - 2.0 / LINEAR_M


def linear_rank_1(x: Any) -> Any:
    return np.arange(1.0, LINEAR_M + 1) * (np.arange(1.0, x.size + 1) @ x) - 1.0


def linear_rank_1_jacobian(x: Any) -> Any:
    return np.outer(np.arange(1.0, LINEAR_M + 1), np.arange(1.0, x.size + 1))


def linear_rank_1_zeros(x: Any) -> Any:
    rows, columns = _rank_1_factors(x.size)
    return rows * (columns @ x) - 1.0


def linear_rank_1_zeros_jacobian(x: Any) -> Any:
    return np.outer(*_rank_1_factors(x.size))


def _rank_1_factors(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Rows 0, 1 ... m-2, 0 and columns 0, 2 ... n-1, 0."""
    rows, columns = np.arange(float(LINEAR_M)), np.arange(1.0, n + 1)
    rows[-1] = columns[0] = columns[-1] = 0.0
    return rows, columns


MODELS: dict[int, Model] = {
    1: (rosenbrock, rosenbrock_jacobian),
    2: (freudenstein_roth, freudenstein_roth_jacobian),
    3: (powell_badly_scaled, powell_badly_scaled_jacobian),
    5: (beale, beale_jacobian),
    6: (jennrich_sampson, jennrich_sampson_jacobian),
    7: (helical_valley, helical_valley_jacobian),
    9: (gaussian, gaussian_jacobian),
    10: (meyer, meyer_jacobian),
    13: (powell_singular, powell_singular_jacobian),
    14: (wood, wood_jacobian),
    15: (kowalik_osborne, kowalik_osborne_jacobian),
    17: (osborne_1, osborne_1_jacobian),
    18: (biggs, biggs_jacobian),
    20: (watson, watson_jacobian),
    21: in_blocks((rosenbrock, rosenbrock_jacobian), 2),
    22: in_blocks((powell_singular, powell_singular_jacobian), 4),
    23: (penalty_1, penalty_1_jacobian),
    25: (variably_dimensioned, variably_dimensioned_jacobian),
    27: (brown_almost_linear, brown_almost_linear_jacobian),
    28: (discrete_boundary_value, discrete_boundary_value_jacobian),
    29: (discrete_integral_equation, discrete_integral_equation_jacobian),
    30: (broyden_tridiagonal, broyden_tridiagonal_jacobian),
    32: (linear_full_rank, linear_full_rank_jacobian),
    33: (linear_rank_1, linear_rank_1_jacobian),
    34: (linear_rank_1_zeros, linear_rank_1_zeros_jacobian),
}


def _numbers(texts: list[str]) -> tuple[float, ...]:
    """Points are given as fractions such as "-10/121", whose decimals would not end."""
    return tuple(float(Fraction(text)) for text in texts)


def _residuals(name: str, entry: dict[str, Any]) -> VectorProblem:
    function, jacobian = MODELS[entry["no"]]
    return VectorProblem(
        name=name,
        source=SOURCE.format(no=entry["no"]),
        function=function,
        jacobian=jacobian,
        x0=np.array(_numbers(entry["x0"])),
        residuals0=np.array(entry["residuals0"]),
        jacobian0=np.array(entry.get("J0", ())),
        minima=tuple(entry["minima"]),
        minimisers=tuple(_numbers(point) for point in entry["xmin"]),
    )


def _load() -> tuple[tuple[VectorProblem, ...], tuple[ScalarProblem, ...]]:
    entries: dict[str, dict[str, Any]] = json.loads(DATA.read_text(encoding="utf-8"))
    vectors = tuple(_residuals(name, entry) for name, entry in entries.items())
    sums = tuple(
        sum_of_squares(problem, entry["F0"], np.array(entry["grad0"]))
        for problem, entry in zip(vectors, entries.values(), strict=True)
    )
    return vectors, sums


RESIDUALS, SUMS_OF_SQUARES = _load()
