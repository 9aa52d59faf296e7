"""A derivative as value ± bound, and the step-size curve behind it."""

from dataclasses import dataclass
from typing import Any

from gradcheck.records.arrays import Array, frozen
from gradcheck.records.noise import NoiseKind
from gradcheck.records.plain import plain


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class Estimate:
    """A derivative from one witness, entry by entry value ± bound.

    Attributes
    ----------
    value : ndarray
        The derivative; NaN where nothing could be said. Shape of the derivative: ``(n,)`` for a scalar model,
        ``(m, n)`` for a vector model, ``(n, n)`` for second derivatives of a scalar model, ``()`` along a direction.
    bound : ndarray, same shape
        Absolute error believed never to be exceeded; infinite where nothing can be said.
    step : ndarray
        Half-width, in units of x, of the interval that decided each entry.
    noise : ndarray, shape (m,)
        Noise level of each output: standard deviation of an output's error, in units of f.
    noise_kind : tuple of NoiseKind
        Kind of noise of each output; ``not examined`` where the values taken say nothing of it.
    evaluations : int
        Calls of the model that were spent.
    source : str
        The witness: ``"finite difference"``, ``"complex step"``, ``"jax"``, ``"autograd"``.
    reasons : dict
        Why an entry's bound is infinite or wide: name of the entry -> reason.
    """

    value: Array
    bound: Array
    step: Array
    noise: Array
    evaluations: int
    source: str
    noise_kind: tuple[NoiseKind, ...] = ()
    names: tuple[str, ...] = ()
    reasons: dict[str, str]
    notices: tuple[str, ...] = ()
    seconds: float = 0.0
    text: str = ""

    def __post_init__(self) -> None:
        for field in ("value", "bound", "step", "noise"):
            object.__setattr__(self, field, frozen(getattr(self, field)))

    def __repr__(self) -> str:
        return f"<Estimate: {self.text.partition(chr(10))[0] or 'not rendered'}>"

    def __str__(self) -> str:
        return self.text

    def to_dict(self) -> dict[str, Any]:
        """The record in builtin types; NaN and infinities as strings."""
        return plain(self)  # type: ignore[no-any-return]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class Scan:
    """The error of a difference quotient as a function of its step.

    Attributes
    ----------
    steps : ndarray, shape (k,)
        Steps in units of x, increasing.
    values : ndarray, shape (k,)
        Central difference quotient at each step (one-sided where the domain leaves no room).
    errors : ndarray, shape (k,)
        Estimated absolute error of each quotient.
    best_step : float
        The step of the smallest estimated error.
    noise : float
        Noise level of the model: standard deviation of a value's error, in units of f.
    noise_kind : NoiseKind
        Where that noise comes from.
    order : float
        Observed truncation order: slope of log(error) over log(step) on the truncation branch; NaN if there is none.
    value, bound : float
        The best derivative from function values, and its bound.
    along : str
        The variable, or ``"direction"``.
    """

    steps: Array
    values: Array
    errors: Array
    best_step: float
    noise: float
    order: float
    value: float
    bound: float
    along: str
    function: str = ""
    noise_kind: NoiseKind = NoiseKind.NOT_EXAMINED
    evaluations: int = 0
    notices: tuple[str, ...] = ()
    text: str = ""

    def __post_init__(self) -> None:
        for field in ("steps", "values", "errors"):
            object.__setattr__(self, field, frozen(getattr(self, field)))

    def __repr__(self) -> str:
        return f"<Scan: {self.text.partition(chr(10))[0] or 'not rendered'}>"

    def __str__(self) -> str:
        return self.text

    def to_dict(self) -> dict[str, Any]:
        """The record in builtin types; NaN and infinities as strings."""
        return plain(self)  # type: ignore[no-any-return]
