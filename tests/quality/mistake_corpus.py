"""Claims that are right, claims with one planted mistake, and right claims about noisy models.

Written before any of them was checked. A mistake is planted only where it can be seen in values of double precision:
in an entry that is not smaller than a share (`GROSS`, `SLIGHT`) of what the function and its other variables amount to,
each entry taken times the size of its variable. What is smaller may be named or not; it is counted in `hidden`.
"""

import math
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from tests.problems import MORE_GARBOW_HILLSTROM, MORE_GARBOW_HILLSTROM_SUMS, OWN_MODELS

#: Least share for a mistake as large as the entry itself, and for one of a millionth of it.
GROSS, SLIGHT = 1e-6, 1e-3
#: Least share for an entry of a noisy model whose first digits must be seen through noise of 1e-6.
PLAIN = 0.1
SLIGHT_ERROR = 1e-6
NOISE = 1e-6
#: How far points lie from a problem's own start point, in units of each variable.
SPREAD = 0.15

Mistake = Callable[[np.ndarray, np.ndarray, np.random.Generator], tuple[np.ndarray, str] | None]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Claim:
    """A claimed derivative of one model at one point.

    Attributes
    ----------
    name : str
        Of the problem.
    kind : str
        ``"gradient"`` or ``"jacobian"``.
    function : callable
    x : ndarray, shape (n,)
    right, claimed : ndarray, shape (n,) or (m, n)
    share : ndarray, same shape
        Size of each entry times its variable's, beside the largest of the function and these products.
    mistake : str
        Empty for a right claim.
    code : str
        The diagnosis that names it; empty for a right claim.
    """

    name: str
    kind: str
    function: Callable[[Any], Any]
    x: np.ndarray
    right: np.ndarray
    claimed: np.ndarray
    share: np.ndarray
    mistake: str = ""
    code: str = ""

    @property
    def wrong(self) -> np.ndarray:
        """Entries that must be named: those whose error is visible."""
        return self._error > self._visible

    @property
    def hidden(self) -> np.ndarray:
        """Entries that are wrong by less than can be seen."""
        return (self._error > 0) & ~self.wrong

    @property
    def _error(self) -> np.ndarray:
        """Error of each entry, on the scale of `share`."""
        with np.errstate(divide="ignore", invalid="ignore"):
            per_entry = np.where(self.right != 0, self.share / np.abs(self.right), self._share_per_unit)
        return np.abs(self.claimed - self.right) * per_entry

    @property
    def _share_per_unit(self) -> np.ndarray:
        return np.broadcast_to(sizes_of(self.x) / _whole(self.function, self.x, self.right), self.right.shape)

    @property
    def _visible(self) -> float:
        return SLIGHT * SLIGHT_ERROR / 2 if self.mistake == "slight error" else GROSS / 2


def sizes_of(x: np.ndarray) -> np.ndarray:
    """Size of each variable: its own, or 1 where it is zero."""
    return np.where(x != 0, np.abs(x), 1.0)


def _whole(function: Callable[[Any], Any], x: np.ndarray, right: np.ndarray) -> Any:
    """What shares are taken of: a number for a gradient, (m, 1) for a Jacobian."""
    pulls = np.abs(right) * sizes_of(x)
    whole = np.maximum(np.abs(np.asarray(function(x), dtype=float)), pulls.max(axis=-1))
    whole = np.where(whole > 0, whole, 1.0)
    return whole[:, None] if right.ndim == 2 else whole


def _share(function: Callable[[Any], Any], x: np.ndarray, right: np.ndarray) -> np.ndarray:
    return np.abs(right) * sizes_of(x) / _whole(function, x, right)


def random_of(name: str, seed: int) -> np.random.Generator:
    """Numbers of their own for each name, whatever else is in the corpus."""
    return np.random.default_rng([seed, zlib.crc32(name.encode())])


def points_of(name: str, x0: np.ndarray, count: int, seed: int) -> Iterator[np.ndarray]:
    """The start point itself, then points around it."""
    random = random_of(name, seed)
    yield np.array(x0)
    for _ in range(count - 1):
        yield x0 + SPREAD * sizes_of(x0) * random.uniform(-1.0, 1.0, x0.size)


def _claim(name: str, kind: str, function: Any, derivative: Any, x: np.ndarray) -> Claim:
    right = np.asarray(derivative(x), dtype=float)
    return Claim(
        name=name, kind=kind, function=function, x=x, right=right, claimed=right, share=_share(function, x, right)
    )


def right_claims(points: int, seed: int = 0, *, most: int = 60) -> list[Claim]:
    """Right claims about smooth models: gradients of our own models and of published sums of squares, and the Jacobians
    of their residuals. Models with more than `most` variables, or `most` entries of a Jacobian squared, are left out.
    """
    gradients = [
        _claim(p.name, "gradient", p.function, p.gradient, x)
        for p in (*OWN_MODELS, *MORE_GARBOW_HILLSTROM_SUMS)
        if p.x0.size <= most
        for x in points_of(p.name, p.x0, points, seed)
    ]
    jacobians = [
        _claim(p.name, "jacobian", p.function, p.jacobian, x)
        for p in MORE_GARBOW_HILLSTROM
        if p.x0.size <= most
        for x in points_of(p.name, p.x0, points, seed)
    ]
    return gradients + jacobians


# --- mistakes --------------------------------------------------------------------------------------------------------


def _one(share: np.ndarray, least: float, random: np.random.Generator) -> tuple[int, ...] | None:
    able = np.argwhere(share >= least)
    return tuple(int(i) for i in able[random.integers(len(able))]) if len(able) else None


def _with(right: np.ndarray, index: tuple[int, ...], value: float) -> np.ndarray:
    claimed = right.copy()
    claimed[index] = value
    return claimed


def sign_of_one_entry(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    index = _one(share, GROSS, random)
    return None if index is None else (_with(right, index, -right[index]), "sign-flipped")


def one_entry_zero(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    index = _one(share, GROSS, random)
    return None if index is None else (_with(right, index, 0.0), "zero-entry")


def one_entry_doubled(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    index = _one(share, GROSS, random)
    return None if index is None else (_with(right, index, 2.0 * right[index]), "constant-factor")


def slight_error(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    """No story fits an error in the seventh digit: `unknown` is the honest one."""
    index = _one(share, SLIGHT, random)
    return None if index is None else (_with(right, index, right[index] * (1.0 + SLIGHT_ERROR)), "unknown")


def factor_on_all(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    """Two visible entries at least: with one, any error is some factor."""
    if (share >= GROSS).sum() < 2:
        return None
    factors = [
        (2.0, "constant-factor"),
        (0.5, "constant-factor"),
        (1.7, "constant-factor"),
        (math.pi / 180.0, "degrees-for-radians"),
        (1e3, "unit-factor"),
    ]
    n = right.shape[-1]
    if n >= 3:
        factors.append((1.0 / n, "mean-for-sum"))
    factor, code = factors[random.integers(len(factors))]
    return factor * right, code


def swapped_entries(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    """Two neighbouring visible entries of a row that differ by at least a hundredth, and are no pair of opposites."""
    rows, visible = np.atleast_2d(right), np.atleast_2d(share) >= GROSS
    pairs = [
        (row, int(i), int(j))
        for row in range(rows.shape[0])
        for i, j in zip(np.flatnonzero(visible[row])[:-1], np.flatnonzero(visible[row])[1:], strict=True)
        if abs(abs(rows[row, i]) - abs(rows[row, j])) > 0.01 * max(abs(rows[row, i]), abs(rows[row, j]))
    ]
    if not pairs:
        return None
    row, i, j = pairs[random.integers(len(pairs))]
    claimed = rows.copy()
    claimed[row, [i, j]] = claimed[row, [j, i]]
    return claimed.reshape(right.shape), "swapped-entries"


def transposed(right: np.ndarray, share: np.ndarray, random: np.random.Generator) -> Any:
    if right.ndim != 2 or right.shape[0] != right.shape[1] or np.allclose(right, right.T, rtol=1e-3):
        return None
    return right.T.copy(), "transposed"


MISTAKES: dict[str, Mistake] = {
    "sign of one entry": sign_of_one_entry,
    "one entry zero": one_entry_zero,
    "one entry doubled": one_entry_doubled,
    "factor on all": factor_on_all,
    "swapped entries": swapped_entries,
    "transposed": transposed,
    "slight error": slight_error,
}


def planted(points: int, seed: int = 0, *, most: int = 60) -> list[Claim]:
    """Each right claim with each mistake that can be planted in it."""
    wrong = []
    for place, claim in enumerate(right_claims(points, seed, most=most)):
        for mistake, plant in MISTAKES.items():
            outcome = plant(claim.right, claim.share, random_of(f"{claim.name} {claim.kind} {place} {mistake}", seed))
            if outcome is not None:
                claimed, code = outcome
                wrong.append(
                    Claim(
                        name=claim.name,
                        kind=claim.kind,
                        function=claim.function,
                        x=claim.x,
                        right=claim.right,
                        claimed=claimed,
                        share=claim.share,
                        mistake=mistake,
                        code=code,
                    )
                )
    return wrong


# --- noisy models ----------------------------------------------------------------------------------------------------


def six_digits(function: Callable[[Any], Any]) -> Callable[[Any], float]:
    """What a program prints that writes six significant digits."""
    return lambda x: float(f"{float(function(x)):.5e}")


def hashed_noise(function: Callable[[Any], Any]) -> Callable[[Any], float]:
    """Noise of 1e-6 that is the same at the same x."""

    def noisy(x: Any) -> float:
        draw = zlib.crc32(np.ascontiguousarray(x).tobytes()) / 2**32 - 0.5
        return float(function(x) * (1.0 + NOISE * math.sqrt(12.0) * draw))

    return noisy


def random_noise(function: Callable[[Any], Any], seed: int = 0) -> Callable[[Any], float]:
    """Noise of 1e-6 that differs from call to call."""
    random = np.random.default_rng(seed)
    return lambda x: float(function(x) * (1.0 + NOISE * random.standard_normal()))


def orbit_distance(x: Any, stop: float) -> float:
    """Distance from the focus; mean anomaly, eccentricity, half-axis. Kepler's equation by simple iteration."""
    anomaly, eccentricity, axis = x
    eccentric, change = anomaly, math.inf
    while abs(change) > stop:
        change = anomaly + eccentricity * math.sin(eccentric) - eccentric
        eccentric += change
    return float(axis * (1.0 - eccentricity * math.cos(eccentric)))


def orbit_distance_gradient(x: Any) -> np.ndarray:
    """By the implicit function theorem: E' = 1/(1 − e cos E) by M, sin E/(1 − e cos E) by e."""
    anomaly, eccentricity, axis = x
    eccentric = anomaly
    for _ in range(60):
        gap = eccentric - eccentricity * math.sin(eccentric) - anomaly
        eccentric -= gap / (1.0 - eccentricity * math.cos(eccentric))
    slope = axis * eccentricity * math.sin(eccentric)
    share = 1.0 - eccentricity * math.cos(eccentric)
    return np.array([slope / share, slope * math.sin(eccentric) / share - axis * math.cos(eccentric), share])


def pipe_loss(x: Any, stop: float) -> float:
    """Pressure loss per length; velocity in m/s, diameter and roughness in m. The friction law by simple iteration."""
    velocity, diameter, roughness = x
    reynolds = velocity * diameter / 1e-6
    root, change = 7.0, math.inf
    while abs(change) > stop:
        change = -2.0 * math.log10(roughness / (3.7 * diameter) + 2.51 * root / reynolds) - root
        root += change
    return float(500.0 * velocity**2 / (diameter * root**2))


def pipe_loss_gradient(x: Any) -> np.ndarray:
    """root = −2 log10(A + B root): its derivative by a parameter p is k (A_p + B_p root)/(1 − k B)."""
    velocity, diameter, roughness = x
    reynolds = velocity * diameter / 1e-6
    rough, viscous = roughness / (3.7 * diameter), 2.51 / reynolds
    root = 7.0
    for _ in range(200):
        root = -2.0 * math.log10(rough + viscous * root)
    k = -2.0 / (math.log(10.0) * (rough + viscous * root))
    by_inner = np.array(
        [-viscous / velocity * root, -rough / diameter - viscous / diameter * root, 1.0 / (3.7 * diameter)]
    )
    by_root = k * by_inner / (1.0 - k * viscous)
    loss = 500.0 * velocity**2 / (diameter * root**2)
    direct = np.array([2.0 * loss / velocity, -loss / diameter, 0.0])
    return direct - 2.0 * loss / root * by_root


FRAME_LOAD = np.array([1.0, 0.5, -0.3, 0.8])


def _frame(x: Any) -> np.ndarray:
    links = np.diag(x[1:], 1) + np.diag(x[1:], -1)
    return np.diag(3.0 + x[0] + np.arange(4.0)) - links


def frame_work(x: Any, stop: float) -> float:
    """Work of a load on four masses in a row; support and three links. The displacements come from Jacobi sweeps."""
    matrix = _frame(np.asarray(x))
    diagonal = np.diag(matrix)
    moved, change = np.zeros(4), np.inf
    while np.max(np.abs(change)) > stop:
        change = (FRAME_LOAD - matrix @ moved) / diagonal
        moved = moved + change
    return float(FRAME_LOAD @ moved)


def frame_work_gradient(x: Any) -> np.ndarray:
    """−uᵀ A' u with A u = load."""
    moved = np.linalg.solve(_frame(np.asarray(x)), FRAME_LOAD)
    return np.array([-(moved @ moved), *(2.0 * moved[:-1] * moved[1:])])


def weir_level(x: Any, stop: float) -> float:
    """Level at which two outlets carry a flow; flow and two widths. Found by halving a fixed bracket."""
    flow, lower, upper = x
    low, high = 0.0, 8.0
    while high - low > stop:
        middle = (low + high) / 2.0
        if lower * middle**1.5 + upper * middle**2 < flow:
            low = middle
        else:
            high = middle
    return (low + high) / 2.0


def weir_level_gradient(x: Any) -> np.ndarray:
    _, lower, upper = x
    level = weir_level(x, 1e-15)
    slope = 1.5 * lower * math.sqrt(level) + 2.0 * upper * level
    return np.array([1.0, -(level**1.5), -(level**2)]) / slope


#: Name, program with its stopping tolerance, gradient of the converged model, start point.
INNER_ITERATIONS = (
    ("orbit by simple iteration", orbit_distance, orbit_distance_gradient, np.array([0.9, 0.55, 2.3])),
    ("pipe by simple iteration", pipe_loss, pipe_loss_gradient, np.array([1.4, 0.12, 3e-4])),
    ("frame by Jacobi sweeps", frame_work, frame_work_gradient, np.array([0.7, 1.1, 0.9, 1.3])),
    ("weir by halving", weir_level, weir_level_gradient, np.array([5.5, 1.3, 0.6])),
)

WRAPPINGS = {"six digits": six_digits, "hashed noise": hashed_noise, "random noise": random_noise}


def noisy_claims(points: int, seed: int = 0, *, most: int = 13) -> list[Claim]:
    """Right claims about models that carry errors of about 1e-6; `name` tells the model and its noise."""
    claims = []
    for problem in OWN_MODELS:
        if problem.x0.size > most:
            continue
        for noise, wrap in WRAPPINGS.items():
            for x in points_of(problem.name, problem.x0, points, seed):
                name = f"{problem.name}, {noise}"
                claims.append(_noisy(name, wrap(problem.function), problem.function, problem.gradient, x))
    for name, program, gradient, x0 in INNER_ITERATIONS:
        noisy, clean = _stopped(program, NOISE), _stopped(program, 1e-14)
        claims.extend(_noisy(name, noisy, clean, gradient, x) for x in points_of(name, x0, points, seed))
    return claims


def _stopped(program: Callable[[Any, float], float], stop: float) -> Callable[[Any], float]:
    return lambda x: program(x, stop)


def _noisy(name: str, noisy: Any, clean: Any, gradient: Any, x: np.ndarray) -> Claim:
    right = np.asarray(gradient(x), dtype=float)
    return Claim(
        name=name,
        kind="gradient",
        function=noisy,
        x=x,
        right=right,
        claimed=right,
        share=_share(clean, x, right),
    )
