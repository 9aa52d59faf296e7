"""Models with rules of differentiation for jax and autograd: each with one known trap, and honest ones.

Written before any of them was tried. A trap counts as named if the report has the verdict, the likely mistake (one of
`codes`), the finding (`finding`) and the words (`says`) that its entry asks for; where jax itself refuses the rule, its
words must reach the user. An honest model must be neither refuted nor get a finding that is worse than a remark; what
it may be told stands in `may`. Some models are honest and have a kink at the point: nothing may be confirmed or refuted
there.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any

import autograd
import autograd.extend
import autograd.numpy as anp
import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jax.custom_batching import custom_vmap

from gradcheck import args


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rule:
    """One model at one point.

    Attributes
    ----------
    name : str
    model : callable
    at : what `check` takes
    kind : "gradient" or "jacobian"
    source : "jax" or "autograd"
    verdict : str
        What the report must come to; ``"raises"`` where the check cannot be carried out.
    codes : tuple of str
        Diagnoses of which one must be told.
    finding : str
        A code of a finding that must be told.
    says : tuple of str
        Words that the report must have, in lower case.
    may : tuple of str
        Codes of findings that an honest model may get.
    """

    name: str
    model: Callable[..., Any]
    at: Any
    kind: str = "gradient"
    source: str = "jax"
    verdict: str = "refuted"
    codes: tuple[str, ...] = ()
    finding: str = ""
    says: tuple[str, ...] = ()
    may: tuple[str, ...] = ()


def by_reverse(value: Callable[..., Any], pull: Callable[..., Any]) -> Callable[..., Any]:
    """A function with a rule for reverse mode: ``pull(arguments, cotangent)`` gives one cotangent an argument."""

    @jax.custom_vjp
    def function(*arguments: Any) -> Any:
        return value(*arguments)

    function.defvjp(lambda *arguments: (value(*arguments), arguments), pull)
    return function


def by_forward(value: Callable[..., Any], push: Callable[..., Any]) -> Callable[..., Any]:
    """A function of one argument with a rule for forward mode: ``push(x, tangent)``."""

    @jax.custom_jvp
    def function(x: Any) -> Any:
        return value(x)

    function.defjvp(lambda primals, tangents: (function(*primals), push(*primals, *tangents)))
    return function


def sine_with(use: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """A sine whose rule multiplies its derivative with ``use(cotangent)`` instead of the cotangent."""
    return by_reverse(jnp.sin, lambda residue, c: (jnp.cos(residue[0]) * use(c),))


POINT = [0.3, 0.7, 1.1]
TRAPS: list[Rule] = []
HONEST: list[Rule] = []


def trap(name: str, model: Callable[..., Any], at: Any = None, **expected: Any) -> None:
    TRAPS.append(Rule(name=name, model=model, at=POINT if at is None else at, **expected))


def honest(name: str, model: Callable[..., Any], at: Any = None, verdict: str = "confirmed", **expected: Any) -> None:
    HONEST.append(Rule(name=name, model=model, at=POINT if at is None else at, verdict=verdict, **expected))


# --- traps: the cotangent -----------------------------------------------------------------------------------------

COTANGENT = ("ignores-cotangent",)

ignoring = sine_with(jnp.ones_like)
trap("cotangent ignored", lambda x: ignoring(x).sum(), codes=COTANGENT)
trap("cotangent ignored in a larger model", lambda x: 3 * ignoring(x).sum(), codes=COTANGENT)
trap("cotangent ignored inside an exponential", lambda x: jnp.exp(ignoring(x).sum()), codes=COTANGENT)
trap("cotangent ignored in one term", lambda x: ignoring(x[0]) + (x**2).sum(), codes=COTANGENT)
trap("cotangent ignored by a Jacobian", lambda x: ignoring(x), kind="jacobian", codes=COTANGENT)
squaring = sine_with(lambda c: c**2)
trap("cotangent squared", lambda x: squaring(x).sum(), codes=COTANGENT)
unsigned = sine_with(jnp.abs)
trap("sign of the cotangent lost", lambda x: unsigned(x).sum(), codes=COTANGENT)
only_sign = sine_with(jnp.sign)
trap("only the sign of the cotangent kept", lambda x: only_sign(x).sum(), codes=COTANGENT)
clipping = sine_with(lambda c: jnp.clip(c, -1.0, 1.0))
trap("cotangent clipped to one", lambda x: clipping(x).sum(), codes=COTANGENT)
shifting = sine_with(lambda c: (c + 1) / 2)
trap("half of the cotangent replaced by one", lambda x: shifting(x).sum(), codes=COTANGENT)
normalising = sine_with(lambda c: c / jnp.maximum(jnp.abs(c).max(), 1e-30))
trap("cotangent normalised", lambda x: normalising(x).sum(), codes=COTANGENT)
rounding = sine_with(jnp.round)
trap("cotangent rounded to whole numbers", lambda x: rounding(x).sum(), codes=COTANGENT)
positive = sine_with(lambda c: jnp.maximum(c, 0.0))
trap("negative cotangents dropped", lambda x: positive(x).sum(), codes=COTANGENT)
dividing = sine_with(lambda c: c * (c / c))
trap("a cotangent of zero gives NaN", lambda x: dividing(x).sum(), says=("zero",))

layer = by_reverse(
    lambda p: jnp.tanh(p["w"] @ jnp.array([0.3, -0.8]) + p["b"]).sum(),
    lambda residue, c: (
        {
            "w": (1 - jnp.tanh(residue[0]["w"] @ jnp.array([0.3, -0.8]) + residue[0]["b"]) ** 2)[:, None]
            * jnp.array([0.3, -0.8]),
            "b": c * (1 - jnp.tanh(residue[0]["w"] @ jnp.array([0.3, -0.8]) + residue[0]["b"]) ** 2),
        },
    ),
)
trap(
    "cotangent ignored in one leaf of a tree",
    lambda p: layer(p),
    {"w": np.array([[0.3, 0.2], [-0.4, 0.5]]), "b": np.array([0.1, -0.2])},
    codes=COTANGENT,
    says=("['w']",),
)
pair = by_reverse(
    lambda x: (jnp.sin(x), jnp.cos(x)), lambda residue, c: (c[0] * jnp.cos(residue[0]) - jnp.sin(residue[0]),)
)
trap("cotangent of the second result ignored", lambda x: sum(part.sum() for part in pair(x)), codes=COTANGENT)

# --- traps: vmap --------------------------------------------------------------------------------------------------

VMAP = ("under vmap",)


@custom_vmap
def seven_times_when_batched(x: Any) -> Any:
    return jnp.sin(x)


@seven_times_when_batched.def_vmap
def _seven_times(axis_size: int, in_batched: Any, x: Any) -> Any:
    return 7 * x, in_batched[0]


trap("value wrong under vmap", lambda x: seven_times_when_batched(x).sum(), says=VMAP)


@custom_vmap
def slope_of_sine(x: Any, c: Any) -> Any:
    return c * jnp.cos(x)


@slope_of_sine.def_vmap
def _mean_over_the_batch(axis_size: int, in_batched: Any, x: Any, c: Any) -> Any:
    each = c * jnp.cos(x)
    return jnp.broadcast_to(each.mean(axis=0), each.shape), True


reducing = by_reverse(jnp.sin, lambda residue, c: (slope_of_sine(residue[0], c),))
trap("backward pass takes the mean over the batch", lambda x: reducing(x).sum(), says=VMAP)


@custom_vmap
def scaled(x: Any, factor: Any) -> Any:
    return factor * jnp.sin(x)


@scaled.def_vmap
def _first_of_the_batch(axis_size: int, in_batched: Any, x: Any, factor: Any) -> Any:
    factor = factor[0] if in_batched[1] else factor
    x = x if in_batched[0] else jnp.broadcast_to(x, (axis_size, *x.shape))
    return factor * jnp.sin(x), True


trap("batching rule takes the first of the batch for all", lambda x: scaled(x[:2], x[2]).sum(), says=VMAP)


@custom_vmap
def in_reverse_order(x: Any) -> Any:
    return jnp.sin(x)


@in_reverse_order.def_vmap
def _reversed(axis_size: int, in_batched: Any, x: Any) -> Any:
    return jnp.sin(x[::-1]), True


trap("batch comes back in the wrong order", lambda x: in_reverse_order(x).sum(), says=VMAP)


@custom_vmap
def product(x: Any, y: Any) -> Any:
    return x * y


@product.def_vmap
def _forgets_one_argument(axis_size: int, in_batched: Any, x: Any, y: Any) -> Any:
    return (x * y, True) if all(in_batched) else (x + 0 * y, True)


trap(
    "wrong under vmap over one argument of two",
    lambda a, b: (product(a, b) ** 2).sum(),
    args(np.array([0.3, 0.7]), np.array([1.1, 0.4])),
    says=VMAP,
)


def on_host(function: Callable[..., Any], shape: tuple[int, ...] | None, method: str) -> Callable[..., Any]:
    """A numpy function called from inside jax."""

    def call(x: Any, *more: Any) -> Any:
        kind = jax.ShapeDtypeStruct(jnp.shape(x) if shape is None else shape, jnp.result_type(x))
        return jax.pure_callback(
            lambda *given: np.asarray(function(*map(np.asarray, given)), dtype=kind.dtype),
            kind,
            x,
            *more,
            vmap_method=method,
        )

    return call


energy_on_host = by_reverse(
    on_host(lambda x: np.broadcast_to(np.sum(x**2), x.shape[:-1]), (), "expand_dims"),
    lambda residue, c: (2 * c * residue[0],),
)
trap("host code sums over the whole batch", lambda x: energy_on_host(x), says=VMAP)
share_on_host = by_reverse(
    lambda x: x / jnp.sum(x),
    lambda residue, c: (
        on_host(
            lambda x, c: c / np.sum(x, axis=-1, keepdims=True) - np.sum(c * x) / np.sum(x, axis=-1, keepdims=True) ** 2,
            None,
            "broadcast_all",
        )(residue[0], c),
    ),
)
trap("host code of the backward pass mixes the batch", lambda x: (share_on_host(x) ** 2).sum(), says=VMAP)

# --- traps: jit ---------------------------------------------------------------------------------------------------

JIT = ("under jit",)


def _plain_or_traced(residue: Any, c: Any) -> Any:
    (x,) = residue
    return (c * jnp.cos(x) * (0.5 if isinstance(x, jax.core.Tracer) else 1.0),)


branching = by_reverse(jnp.sin, _plain_or_traced)
trap("another formula while it is traced", lambda x: branching(x).sum(), says=JIT)


def _with_memory() -> Callable[..., Any]:
    kept: dict[str, Any] = {}

    def pull(residue: Any, c: Any) -> Any:
        (x,) = residue
        if not isinstance(x, jax.core.Tracer):
            kept["slope"] = np.cos(np.asarray(x))
        return (c * kept["slope"],)

    return by_reverse(jnp.sin, pull)


remembering = _with_memory()
trap("what was computed before is kept at trace time", lambda x: remembering(x).sum(), says=JIT)


def _exact_or_straight(residue: Any, c: Any) -> Any:
    (x,) = residue
    try:
        slope = np.array([np.cos(float(part)) for part in x])
    except jax.errors.ConcretizationTypeError:
        slope = 1 - x**2 / 2
    return (c * slope,)


falling_back = by_reverse(jnp.sin, _exact_or_straight)
trap("an approximation where numbers are not known", lambda x: falling_back(x).sum(), says=JIT)


def _with_numbers(x: Any) -> Any:
    return jnp.where(float(x[0]) > 0.2, 1.0, 2.0) * jnp.sin(x)


numbers_needed = by_reverse(
    _with_numbers, lambda residue, c: (c * jnp.cos(residue[0]) * (1.0 if float(residue[0][0]) > 0.2 else 2.0),)
)
trap(
    "a rule that needs numbers cannot be compiled",
    lambda x: numbers_needed(x).sum(),
    verdict="confirmed",
    says=JIT,
    finding="crash",
)

# --- traps: state and closures ------------------------------------------------------------------------------------


def _with_state() -> Callable[..., Any]:
    state: dict[str, Any] = {}

    @jax.custom_vjp
    def wave(x: Any) -> Any:
        return jnp.sin(x)

    def forward(x: Any) -> Any:
        state["x"] = x
        return jnp.sin(x), None

    wave.defvjp(forward, lambda residue, c: (c * jnp.cos(state["x"]),))
    return wave


stateful = _with_state()
trap("the backward pass uses the last forward pass", lambda x: stateful(x).sum(), says=("another point",))


def _closing_over(x: Any) -> Any:
    rule = by_reverse(lambda y: (y * x).sum(), lambda residue, c: (c * x,))
    return rule(x)


trap("a rule closes over a traced value", _closing_over, verdict="raises", says=("tracer",))

# --- traps: second order ------------------------------------------------------------------------------------------

SECOND: dict[str, Any] = {"verdict": "confirmed", "finding": "witness-conflict", "says": ("second derivative",)}

frozen_slope = by_forward(jnp.sin, lambda x, t: lax.stop_gradient(jnp.cos(x)) * t)
trap("second derivative cut off in a forward rule", lambda x: frozen_slope(x).sum(), **SECOND)
frozen_residue = by_reverse(jnp.sin, lambda residue, c: (c * jnp.cos(lax.stop_gradient(residue[0])),))
trap("second derivative cut off in a reverse rule", lambda x: frozen_residue(x).sum(), **SECOND)
wrong_cosine = by_forward(jnp.cos, lambda x, t: jnp.sin(x) * t)
sine_of_it = by_forward(jnp.sin, lambda x, t: wrong_cosine(x) * t)
trap("second derivative of the wrong sign", lambda x: sine_of_it(x).sum(), **SECOND)
half_curved = by_reverse(
    lambda x: (x**3).sum(), lambda residue, c: (3 * c * residue[0] * lax.stop_gradient(residue[0]),)
)
trap("second derivative half of what is due", lambda x: half_curved(x), **SECOND)
host_slope = by_forward(jnp.sin, lambda x, t: on_host(np.cos, None, "sequential")(x) * t)
trap(
    "a rule that is not differentiable twice",
    lambda x: host_slope(x).sum(),
    verdict="confirmed",
    finding="crash",
    says=("second",),
)
only_reverse = by_reverse(jnp.sin, lambda residue, c: (c * jnp.cos(residue[0]),))
trap(
    "a rule without forward mode",
    lambda x: only_reverse(x).sum(),
    verdict="confirmed",
    finding="crash",
    says=("forward mode",),
)

# --- traps: forward mode ------------------------------------------------------------------------------------------


@jax.custom_jvp
def off_by_a_tenth(x: Any) -> Any:
    return jnp.sin(x)


@off_by_a_tenth.defjvp
def _off(primals: Any, tangents: Any) -> Any:
    (x,), (tangent,) = primals, tangents
    moved = jax.custom_derivatives.linear_call(lambda k, t: 1.1 * k * t, lambda k, c: k * c, jnp.cos(x), tangent)
    return jnp.sin(x), moved


trap("forward mode off by a tenth", lambda x: off_by_a_tenth(x).sum(), says=("forward mode",))
squared_tangent = by_forward(jnp.sin, lambda x, t: jnp.cos(x) * t**2)
trap("tangent squared", lambda x: squared_tangent(x).sum(), says=("tangent",))
absolute_tangent = by_forward(jnp.sin, lambda x, t: jnp.cos(x) * jnp.abs(t))
trap("sign of the tangent lost", lambda x: absolute_tangent(x).sum(), says=("tangent",))
no_tangent = by_forward(jnp.sin, lambda x, t: jnp.cos(x))
trap("tangent ignored", lambda x: no_tangent(x).sum(), says=("tangent",))
trap(
    "an index outside the array: reverse mode drops what forward mode keeps",
    lambda x: ((x * jnp.array([1.0, 2.0, 3.0]))[jnp.asarray([7])] ** 2).sum(),
    codes=("zero-entry", "missing-path"),
)

# --- traps: precision ---------------------------------------------------------------------------------------------

short = by_reverse(jnp.sin, lambda residue, c: ((c * jnp.cos(residue[0])).astype(jnp.float32),))
trap("backward pass in single precision", lambda x: short(x).sum(), codes=("single-precision",))
trap(
    "overflow in single precision",
    lambda x: jnp.log(1 + jnp.exp(100 * x)).sum(),
    verdict="confirmed",
    finding="non-finite",
    says=("single precision",),
)
trap(
    "digits lost in single precision",
    lambda x: jnp.sqrt(jnp.mean(x**2) - jnp.mean(x) ** 2),
    [200.3, 200.7, 201.1],
    verdict="confirmed",
    finding="low-precision",
    says=("single precision",),
)
trap(
    "underflow in single precision",
    lambda x: 1e50 * ((1e-25 * x) ** 2).sum(),
    verdict="confirmed",
    finding="low-precision",
    says=("single precision",),
)

# --- traps that the witnesses see ---------------------------------------------------------------------------------

forgetful = by_reverse(
    lambda x, y: (jnp.sin(x) * y).sum(), lambda residue, c: (c * jnp.cos(residue[0]) * residue[1], None)
)
trap("the gradient of one argument dropped", lambda x: forgetful(x, x[::-1] ** 2), codes=("unknown", "missing-path"))
trap(
    "the gradient of one of two arguments is None",
    lambda a, b: forgetful(a, b),
    args(np.array([0.3, 0.7]), np.array([1.1, 0.4])),
    codes=("zero-entry",),
)
trap(
    "a path cut by stop_gradient",
    lambda x: lax.stop_gradient(x[0]) * x[1] + x[2] ** 2,
    codes=("zero-entry", "missing-path"),
)
exchanged = by_reverse(lambda a, b: a * b**2, lambda residue, c: (2 * c * residue[0] * residue[1], c * residue[1] ** 2))
trap(
    "cotangents of two arguments in the wrong order",
    lambda x: exchanged(x[0], x[1]) + x[2] ** 2,
    codes=("swapped-entries",),
)
MATRIX = np.array([[3.0, 1.0, 0.2], [-0.5, 2.0, 0.7], [0.1, -0.3, 4.0]])


def solver_with(adjoint: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """Solves a linear system; the adjoint system is solved by `adjoint`."""
    return by_reverse(lambda b: jnp.linalg.solve(MATRIX, b), lambda residue, c: (adjoint(c),))


negative_adjoint = solver_with(lambda c: -jnp.linalg.solve(MATRIX.T, c))
trap("adjoint solver with the wrong sign", lambda x: (negative_adjoint(x) ** 2).sum(), codes=("sign-flipped",))
same_matrix = solver_with(lambda c: jnp.linalg.solve(MATRIX, c))
trap("adjoint solver without the transpose", lambda x: same_matrix(x), kind="jacobian", codes=("transposed",))
unconverged = solver_with(lambda c: c / jnp.diag(MATRIX))
trap("adjoint solver stopped early", lambda x: (unconverged(x) ** 2).sum(), codes=("unknown",))
trap(
    "NaN from the branch not taken",
    lambda x: jnp.where(x > 0.01, jnp.sqrt(x), 3 * x).sum(),
    [0.0, 0.7, 1.1],
    says=("nan",),
)
trap(
    "a staircase by rounding",
    lambda x: (jnp.round(10 * x) / 10).sum(),
    [0.31, 0.72, 1.13],
    verdict="undecided",
    says=("stair",),
)
trap(
    "a staircase by a cast to integers",
    lambda x: ((100 * x).astype(int) / 100).sum(),
    [0.3123, 0.7234, 1.1345],
    verdict="undecided",
    says=("stair",),
)

# --- traps that jax refuses ---------------------------------------------------------------------------------------

wrong_shape = by_reverse(lambda x: jnp.sin(x).sum(), lambda residue, c: (jnp.ones(1) * c,))
trap("a cotangent of the wrong shape", lambda x: wrong_shape(x), verdict="raises", says=("shape",))
wrong_structure = by_reverse(lambda x: jnp.sin(x).sum(), lambda residue, c: c * jnp.cos(residue[0]))
trap("a cotangent instead of a tuple of them", lambda x: wrong_structure(x), verdict="raises", says=("structure",))


@partial(jax.custom_vjp, nondiff_argnums=(0,))
def power(k: Any, x: Any) -> Any:
    return (x**k).sum()


power.defvjp(lambda k, x: ((x**k).sum(), x), lambda k, x, c: (c * k * x ** (k - 1),))
trap(
    "an argument declared not to be differentiated is",
    lambda x: power(x[0], x[1:]),
    verdict="raises",
    says=("nondiff",),
)
fixed_power = partial(jax.custom_vjp, nondiff_argnums=(0,))(lambda k, x: (x**k).sum())
fixed_power.defvjp(lambda k, x: ((x**k).sum(), x), lambda k, x, c: (c * x ** (k - 1),))
trap("a factor lost in a rule with a fixed argument", lambda x: fixed_power(5, x), codes=("constant-factor",))

# --- traps in autograd --------------------------------------------------------------------------------------------


def primitive_with(use: Callable[[Any], Any]) -> Callable[..., Any]:
    """A sine of autograd whose rule multiplies its derivative with ``use(cotangent)``."""
    wave = autograd.extend.primitive(lambda x: np.sin(x))
    autograd.extend.defvjp(wave, lambda value, x: lambda c: use(c) * np.cos(x))
    return wave


def in_autograd(use: Callable[[Any], Any]) -> Callable[..., Any]:
    wave = primitive_with(use)
    return lambda x: anp.sum(wave(x))


AUTOGRAD: dict[str, Any] = {"source": "autograd", "codes": COTANGENT}
trap("autograd: cotangent ignored", in_autograd(np.ones_like), **AUTOGRAD)
trap("autograd: cotangent squared", in_autograd(lambda c: c**2), **AUTOGRAD)
trap("autograd: sign of the cotangent lost", in_autograd(np.abs), **AUTOGRAD)
slow_wave = primitive_with(lambda c: c)
autograd.extend.defjvp(slow_wave, lambda tangent, value, x: 1.1 * tangent * np.cos(x))
trap(
    "autograd: forward mode off by a tenth",
    lambda x: anp.sum(slow_wave(x)),
    source="autograd",
    says=("forward mode",),
)

# --- traps that were added later ----------------------------------------------------------------------------------


def _first_of_the_batch_on_host(x: Any, y: Any) -> Any:
    """Right for one point and for batches of both arguments; of a batch of one argument it takes the first for all."""
    if x.shape != y.shape:
        lead = np.broadcast_shapes(x.shape, y.shape)[:-1]
        return np.broadcast_to(np.sum(x[:1] * y[:1], axis=-1), lead)
    return np.sum(x * y, axis=-1)


weighted_on_host = by_reverse(
    on_host(_first_of_the_batch_on_host, (), "expand_dims"),
    lambda residue, c: (c * residue[1], c * residue[0]),
)
trap(
    "host code wrong for a batch of one argument of two",
    lambda a, b: weighted_on_host(a, b) ** 2,
    args(np.array([0.3, 0.7]), np.array([1.1, 0.4])),
    says=("under vmap over",),
)

# --- honest models ------------------------------------------------------------------------------------------------

RESTRICTION = ("crash",)

plain_sine = by_reverse(jnp.sin, lambda residue, c: (c * jnp.cos(residue[0]),))
honest("reverse rule", lambda x: 3 * plain_sine(x).sum(), may=RESTRICTION)
forward_sine = by_forward(jnp.sin, lambda x, t: jnp.cos(x) * t)
honest("forward rule", lambda x: jnp.exp(forward_sine(x).sum()))
soft = by_reverse(jax.nn.logsumexp, lambda residue, c: (c * jax.nn.softmax(residue[0]),))
honest("logarithm of a sum of exponentials", lambda x: soft(10 * x), may=RESTRICTION)


def _network(parameters: Any, x: Any) -> Any:
    for each in parameters["layers"]:
        x = forward_sine(each["w"] @ x + each["b"])
    return (x**2).sum()


NETWORK = {
    "layers": [
        {"w": np.array([[0.3, -0.2, 0.5], [0.1, 0.8, -0.7]]), "b": np.array([0.1, -0.3])},
        {"w": np.array([[0.6, 0.4]]), "b": np.array([0.2])},
    ],
    "depth": 2,
    "mode": "fast",
}
honest("network in a tree with whole numbers and text", lambda p: _network(p, jnp.asarray(POINT)), NETWORK)
tree_rule = by_reverse(
    lambda p: jnp.sin(p["a"]).sum() * p["inner"]["b"],
    lambda residue, c: (
        {
            "a": c * jnp.cos(residue[0]["a"]) * residue[0]["inner"]["b"],
            "inner": {"b": c * jnp.sin(residue[0]["a"]).sum()},
        },
    ),
)
honest("rule on a tree", lambda p: tree_rule(p), {"a": np.array([0.3, 0.7]), "inner": {"b": 1.3}}, may=RESTRICTION)
counted = by_reverse(
    lambda x, k: (x**k).sum(),
    lambda residue, c: (
        c * residue[1] * residue[0] ** (residue[1] - 1),
        np.zeros(np.shape(residue[1]), jax.dtypes.float0),
    ),
)
honest("rule with an integer argument", lambda x: counted(x, jnp.asarray(3)), may=RESTRICTION)
right_adjoint = solver_with(lambda c: jnp.linalg.solve(MATRIX.T, c))
honest("linear solver with its adjoint", lambda x: (right_adjoint(x) ** 2).sum(), may=RESTRICTION)
honest("linear solver with its adjoint, Jacobian", lambda x: right_adjoint(x), kind="jacobian", may=RESTRICTION)


def _root(a: Any) -> Any:
    return lax.custom_root(
        lambda y: y**3 + y - a,
        jnp.zeros_like(a),
        lambda f, y: lax.fori_loop(0, 60, lambda _, y: y - f(y) / (3 * y**2 + 1), y),
        lambda g, y: y / g(jnp.ones_like(y)),
    )


honest("implicit root", lambda x: (_root(x) ** 2).sum())
honest(
    "recurrence by scan", lambda x: lax.scan(lambda c, u: (jnp.sin(c + u), c), 0.1, jnp.tile(x, 4))[0], may=RESTRICTION
)
honest(
    "loop whose length depends on data",
    lambda x: lax.while_loop(lambda c: c[0] < 5, lambda c: (1.5 * c[0], c[1] + c[0] ** 2), (x, 0 * x))[1],
    0.3,
    may=RESTRICTION,
)
honest("rectifiers away from their kinks", lambda x: jax.nn.relu(MATRIX @ x - 1.0).sum())
honest("rectifier at its kink", lambda x: jax.nn.relu(x).sum(), [0.0, 0.7], verdict="undecided", may=("kink",))
honest("largest of equal ones", jnp.max, [0.7, 0.7, 0.1], verdict="undecided", may=("kink",))
honest("absolute value at zero", lambda x: jnp.abs(x).sum(), [0.0, 0.7], verdict="undecided", may=("kink",))
honest("clip at its bound", lambda x: jnp.clip(x, 0.0, 1.0).sum(), [1.0, 0.7], verdict="undecided", may=("kink",))
host_sine = by_reverse(
    on_host(np.sin, None, "sequential"), lambda residue, c: (c * on_host(np.cos, None, "sequential")(residue[0]),)
)
honest("host code with its rule", lambda x: host_sine(x).sum(), may=RESTRICTION)


@custom_vmap
def batched_sine(x: Any) -> Any:
    return jnp.sin(x)


@batched_sine.def_vmap
def _right_batches(axis_size: int, in_batched: Any, x: Any) -> Any:
    return jnp.sin(x), in_batched[0]


honest("right batching rule", lambda x: batched_sine(x).sum() ** 2)
honest("branch by plain Python", lambda x: (x**2).sum() if x[0] > 0 else x.sum(), may=RESTRICTION)
honest("branch by cond", lambda x: lax.cond(x[0] > 0, lambda x: (x**2).sum(), lambda x: x.sum(), x))
honest("wide Jacobian", lambda x: jnp.sin(MATRIX[:2] @ x), kind="jacobian")
honest("tall Jacobian", lambda x: jnp.concatenate([jnp.sin(x), x**2, jnp.exp(-x)]), kind="jacobian")
DESIGN = np.random.default_rng(5).normal(size=(6, 6))


def _likelihood(x: Any) -> Any:
    factor = jnp.linalg.cholesky(DESIGN @ DESIGN.T + jnp.exp(x[0]) * jnp.eye(6))
    white = jax.scipy.linalg.solve_triangular(factor, jnp.arange(6.0) - x[1], lower=True)
    return white @ white / 2 + jnp.log(jnp.diag(factor)).sum()


honest("likelihood by Cholesky factors", _likelihood, [0.3, 0.7])
honest("power spectrum", lambda x: (jnp.abs(jnp.fft.rfft(jnp.tile(x, 2) ** 2)) ** 2).sum())
honest("eigenvalues far apart", lambda x: jnp.linalg.eigvalsh(jnp.outer(x, x) + jnp.diag(jnp.array([1.0, 2, 4])))[1])
HILBERT = 1 / (np.arange(6)[:, None] + np.arange(6) + 1)
honest(
    "badly conditioned system",
    lambda x: jnp.linalg.solve(HILBERT, jnp.tile(jnp.sin(x), 2)).sum(),
    may=("low-precision",),
)
honest("single precision inside", lambda x: jnp.sin(x.astype(jnp.float32)).sum(), may=("low-precision",))
honest("loss at its optimum", lambda x: ((x - jnp.asarray(POINT)) ** 2).sum())
honest("checkpointed", lambda x: jax.checkpoint(lambda y: jnp.exp(jnp.sin(y)).sum())(x))


def _iterated(x: Any) -> Any:
    """Mean of arithmetic and geometric means, until they agree to 1e-12."""
    halves = lax.while_loop(
        lambda c: jnp.abs(c[0] - c[1]) > 1e-12 * c[0],
        lambda c: ((c[0] + c[1]) / 2, jnp.sqrt(c[0] * c[1])),
        (x[0], x[1]),
    )
    return halves[0]


honest("iteration to a tolerance", _iterated, [0.3, 1.7], may=RESTRICTION)
honest("scales far apart", lambda x: x[0] ** 2 * 1e-12 + 1e9 * jnp.sin(x[1] * 1e-6), [3e5, 2e6])
straight = primitive_with(lambda c: c)
honest("autograd: rule", lambda x: anp.exp(anp.sum(straight(x))), source="autograd")
honest("autograd: Jacobian", lambda x: anp.sin(anp.dot(MATRIX, x)), kind="jacobian", source="autograd")
