"""A derivative as value ± bound, and the step-size curve behind it."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from gradcheck.errors import UsageError
from gradcheck.records.arrays import Array, frozen
from gradcheck.records.noise import NoiseKind
from gradcheck.records.plain import plain
from gradcheck.records.rendering import RenderedWhenRead


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class Estimate(RenderedWhenRead):
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
        Why an entry's bound is infinite or wide: name of the entry -> reason. An entry of a Hessian has the names of
        two variables: ``"x[0], x[3]"``, the first one not after the second.
    order : int
        1 for first derivatives, 2 for second ones.
    renderer : callable, optional
        Makes the text when it is first read; `estimate` hands it over, because records import nothing that renders.
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
    order: int = 1
    notices: tuple[str, ...] = ()
    seconds: float = 0.0
    renderer: Callable[["Estimate"], str] | None = None
    text: str = ""

    def __post_init__(self) -> None:
        for field in ("value", "bound", "step", "noise"):
            object.__setattr__(self, field, frozen(getattr(self, field)))
        self._await_reader()

    def __repr__(self) -> str:
        return f"<Estimate: {self.text.partition(chr(10))[0] or 'not rendered'}>"

    def __str__(self) -> str:
        return self.text

    def to_dict(self) -> dict[str, Any]:
        """The record in builtin types; NaN and infinities as strings."""
        return plain(self)  # type: ignore[no-any-return]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Branch:
    """One branch of an error curve: a straight line in logarithms, ``error = level · step ** slope``.

    Attributes
    ----------
    slope : float
        About 2 where truncation of a central difference rules, about -1 where noise or rounding does.
    level : float
        The line's error at a step of 1, in units of f over units of x; typical size (standard deviation) for noise.
    lower, upper : float
        The steps between which the errors follow the line.
    errors : ndarray, shape (k,)
        What the line says at each step of the scan, also beyond its ends.
    """

    slope: float
    level: float
    lower: float
    upper: float
    errors: Array

    def __post_init__(self) -> None:
        object.__setattr__(self, "errors", frozen(self.errors))


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
        The step of the smallest estimated error, each step judged with its neighbours and with what noise leaves; NaN
        if no step gives a finite quotient, or none approximates a derivative (at a kink or jump, on a plateau).
    best_error : float
        The error that was seen at the best step: the largest of it and its two neighbours, for one alone may be right
        by luck.
    floor : float
        The error at the best step that the noise of the values leaves (its standard deviation); at a kink, half the
        difference of the two slopes, which the mean slope that every step gives is off by.
    noise : float
        Noise level of the model: standard deviation of a value's error, in units of f.
    noise_kind : NoiseKind
        Where that noise comes from.
    order : float
        Observed truncation order: slope of log(error) over log(step) on the truncation branch; NaN if there is none.
    truncation, roundoff : Branch or None
        The branch above the best step, where truncation rules, and the one below, where noise or rounding does. None
        where the curve has none: a linear model has no truncation, exact differences no rounding.
    value, bound : float
        The best derivative from function values, and its bound. The bound is infinite where the quotients have no
        limit; ``errors`` are then the changes from step to step, and ``notices`` say why.
    along : str
        The variable, or ``"direction"``.
    unit : str
        Unit of the variable, a label; empty if none was given.
    formula : str
        ``"central difference"``, or ``"one-sided difference"`` (three points) where the bounds leave no room.
    renderer : callable, optional
        Draws the record; the verb that makes it hands it over, because records import nothing that renders.
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
    best_error: float = float("nan")
    floor: float = float("nan")
    truncation: Branch | None = None
    roundoff: Branch | None = None
    unit: str = ""
    formula: str = "central difference"
    function: str = ""
    noise_kind: NoiseKind = NoiseKind.NOT_EXAMINED
    evaluations: int = 0
    notices: tuple[str, ...] = ()
    renderer: Callable[["Scan"], str] | None = None
    text: str = ""

    def __post_init__(self) -> None:
        for field in ("steps", "values", "errors"):
            object.__setattr__(self, field, frozen(getattr(self, field)))

    def to_svg(self) -> str:
        """The curve as a complete SVG document, drawn when asked for.

        Returns
        -------
        str
            The same text for the same record. Errors that are not finite are counted below the plot, not drawn; where
            there is no curve to draw, the picture says so in words.

        Raises
        ------
        MissingExtra
            If matplotlib is not installed.
        UsageError
            If the record does not come from `gradcheck.scan`, which hands it its renderer.

        Examples
        --------
        >>> import gradcheck, math
        >>> gradcheck.scan(math.exp, at=1.0).to_svg().count("</svg>")
        1
        """
        if self.renderer is None:
            raise UsageError("this record has no renderer; call gradcheck.report.plots.scan_svg(record)")
        return self.renderer(self)

    def __repr__(self) -> str:
        return f"<Scan: {self.text.partition(chr(10))[0] or 'not rendered'}>"

    def __str__(self) -> str:
        return self.text

    def to_dict(self) -> dict[str, Any]:
        """The record in builtin types; NaN and infinities as strings."""
        return plain(self)  # type: ignore[no-any-return]
