"""How users describe a problem: variables, functions, one run with many outputs, or a decorated model."""

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeVar

from gradcheck.errors import UsageError

Decorated = TypeVar("Decorated", bound=Callable[..., Any])

#: Where `model` leaves its description on the function it decorates.
SPEC_ATTRIBUTE = "__gradcheck__"


@dataclass(frozen=True, slots=True, eq=False)
class Variable:
    """One design variable or parameter of a problem.

    Parameters
    ----------
    name : str
    value : float
        Start value, in `unit`.
    lower, upper : float, optional
        Bounds; the model is never called outside them.
    unit : str, optional
        A label for the report, never arithmetic.
    typical : float, optional
        Typical size, > 0; used for steps and tolerances where the value is zero or misleading.
    integer : bool, optional
        Whether only whole numbers make sense.

    Raises
    ------
    UsageError
        If the value is not a finite number, lies outside the bounds, or the typical size is not positive.

    Examples
    --------
    >>> import gradcheck
    >>> gradcheck.Variable("span", 1.2, lower=0.5, upper=3.0, unit="m").name
    'span'
    """

    name: str
    value: float
    lower: float = field(default=-math.inf, kw_only=True)
    upper: float = field(default=math.inf, kw_only=True)
    unit: str = field(default="", kw_only=True)
    typical: float | None = field(default=None, kw_only=True)
    integer: bool = field(default=False, kw_only=True)

    def __post_init__(self) -> None:
        if not (self.name and isinstance(self.name, str)):
            raise UsageError(f"a variable's name must be a non-empty string, not {self.name!r}")
        for name in ("value", "lower", "upper"):
            try:
                number = float(getattr(self, name))
            except (TypeError, ValueError):
                raise UsageError(
                    f"variable {self.name!r}: {name} is {getattr(self, name)!r}; a real number is needed"
                ) from None
            object.__setattr__(self, name, number)
        if not math.isfinite(self.value):
            raise UsageError(f"variable {self.name!r}: the start value is {self.value}; give a finite number")
        for name in ("lower", "upper"):
            if math.isnan(getattr(self, name)):
                raise UsageError(f"variable {self.name!r}: {name} is NaN; leave it out where there is no bound")
        if self.lower > self.upper:
            raise UsageError(
                f"variable {self.name!r}: the bounds are the wrong way round: "
                f"lower {self.lower:g} > upper {self.upper:g}"
            )
        if not self.lower <= self.value <= self.upper:
            raise UsageError(
                f"variable {self.name!r}: the start value {self.value:g} lies outside its bounds "
                f"[{self.lower:g}, {self.upper:g}]; move the start or widen the bounds"
            )
        if self.typical is not None and not (math.isfinite(self.typical) and self.typical > 0):
            raise UsageError(f"variable {self.name!r}: typical is {self.typical!r}; give a finite size > 0")


def _refuse_crossed_limits(lower: Any, upper: Any, equal: Any) -> None:
    if equal is not None and (lower is not None or upper is not None):
        raise UsageError("a constraint has equal=... together with lower or upper; give either")
    both = isinstance(lower, int | float) and isinstance(upper, int | float)
    if both and lower > upper:
        raise UsageError(f"the limits of a constraint are the wrong way round: lower {lower:g} > upper {upper:g}")


@dataclass(frozen=True, slots=True, eq=False)
class Function:
    """A function of the variables, with the derivatives that are claimed for it.

    Parameters
    ----------
    function : callable
        Takes the vector x, shape (n,), returns a number or a vector of shape (m,).
    gradient, jacobian : callable, array or str, optional
        The claim: a callable of x, its value at the start point, or the name of an AD source
        (``"jax"``, ``"autograd"``). Shapes ``(n,)`` and ``(m, n)``.
    hessian : callable, array or str, optional
        Second derivatives ``(n, n)`` of a function that returns a number, ``(m, n, n)`` of one that returns ``(m,)``.
    jvp, vjp, hvp : callable or str, optional
        Products ``jvp(x, v)`` = J·v of shape ``(m,)``, ``vjp(x, w)`` = Jᵀ·w and ``hvp(x, v)`` = H·v of shape ``(n,)``.
    value_and_gradient : callable or str, optional
        Returns the pair (value, gradient).
    lower, upper, equal : float or array, optional
        Limits, where the function is a constraint.
    pattern : sparse matrix or boolean array (m, n), optional
        Which entries of the Jacobian may differ from zero.
    """

    function: Callable[..., Any]
    gradient: Any = field(default=None, kw_only=True)
    jacobian: Any = field(default=None, kw_only=True)
    hessian: Any = field(default=None, kw_only=True)
    jvp: Any = field(default=None, kw_only=True)
    vjp: Any = field(default=None, kw_only=True)
    hvp: Any = field(default=None, kw_only=True)
    value_and_gradient: Any = field(default=None, kw_only=True)
    lower: Any = field(default=None, kw_only=True)
    upper: Any = field(default=None, kw_only=True)
    equal: Any = field(default=None, kw_only=True)
    pattern: Any = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        if not callable(self.function):
            raise UsageError(
                f"Function needs something that can be called, not {self.function!r} "
                f"({type(self.function).__name__}); pass the function itself, not its value"
            )
        _refuse_crossed_limits(self.lower, self.upper, self.equal)


@dataclass(frozen=True, slots=True, eq=False)
class Output:
    """One named output of a run that gives several (`Problem(model=...)`), with its claims and limits.

    Parameters
    ----------
    key : str or int
        What picks the output from what the run returns: ``run(x)[key]``.
    gradient, jacobian, hessian, jvp, vjp, hvp, value_and_gradient, lower, upper, equal, pattern
        As in `Function`. A claim takes x, and not what the run returns.
    """

    key: Any
    gradient: Any = field(default=None, kw_only=True)
    jacobian: Any = field(default=None, kw_only=True)
    hessian: Any = field(default=None, kw_only=True)
    jvp: Any = field(default=None, kw_only=True)
    vjp: Any = field(default=None, kw_only=True)
    hvp: Any = field(default=None, kw_only=True)
    value_and_gradient: Any = field(default=None, kw_only=True)
    lower: Any = field(default=None, kw_only=True)
    upper: Any = field(default=None, kw_only=True)
    equal: Any = field(default=None, kw_only=True)
    pattern: Any = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        _refuse_crossed_limits(self.lower, self.upper, self.equal)


@dataclass(frozen=True, slots=True, eq=False)
class Problem:
    """A described optimization problem, for `audit`, the command and the pytest plugin.

    Parameters
    ----------
    variables : sequence of Variable
    objective : Function or Output or callable
    constraints : mapping of str to Function or Output, optional
    model : callable, optional
        One run that gives all outputs: called once per point; objective and constraints are then `Output`s.
    name : str, optional

    Raises
    ------
    UsageError
        If there are no variables, a name stands twice, or objective and model do not fit together.

    Examples
    --------
    >>> import gradcheck
    >>> problem = gradcheck.Problem(
    ...     variables=[gradcheck.Variable("width", 2.0, lower=0.1), gradcheck.Variable("height", 3.0, lower=0.1)],
    ...     objective=gradcheck.Function(lambda x: x[0] * x[1], gradient=lambda x: [x[1], x[0]]),
    ... )
    >>> gradcheck.audit(problem).claims[0].verdict
    <Verdict.CONFIRMED: 'confirmed'>
    """

    variables: Sequence[Variable] = field(kw_only=True)
    objective: Any = field(kw_only=True)
    constraints: Mapping[str, Any] = field(default_factory=dict, kw_only=True)
    model: Callable[..., Any] | None = field(default=None, kw_only=True)
    name: str = field(default="", kw_only=True)

    def __post_init__(self) -> None:
        object.__setattr__(self, "variables", tuple(self.variables))
        if not isinstance(self.constraints, Mapping):
            raise UsageError(
                f"constraints is a {type(self.constraints).__name__}; give a dict of name -> gradcheck.Function(...), "
                "so that the report can name them"
            )
        object.__setattr__(self, "constraints", dict(self.constraints))
        self._refuse_bad_variables()
        if self.model is not None and not callable(self.model):
            raise UsageError(f"Problem(model=...) needs something that can be called, not {self.model!r}")
        if "objective" in self.constraints:
            raise UsageError("a constraint is named 'objective'; that name is taken by the objective: choose another")
        object.__setattr__(self, "objective", self._described("objective", self.objective))
        for name, constraint in self.constraints.items():
            self.constraints[name] = self._described(f"constraint {name!r}", constraint)  # type: ignore[index]

    def _refuse_bad_variables(self) -> None:
        if not self.variables:
            raise UsageError("a Problem needs at least one Variable; `variables` is empty")
        for variable in self.variables:
            if not isinstance(variable, Variable):
                raise UsageError(
                    f"variables holds {variable!r} ({type(variable).__name__}); "
                    "each must be a gradcheck.Variable(name, value, ...)"
                )
        names = [variable.name for variable in self.variables]
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            raise UsageError(f"these variable names stand more than once: {', '.join(twice)}; names must differ")

    def _described(self, what: str, function: Any) -> Any:
        if self.model is None and callable(function):
            function = Function(function)
        expected: type[Output] | type[Function] = Function if self.model is None else Output
        if not isinstance(function, expected):
            raise UsageError(
                f"{what} is {function!r}; "
                + (
                    "with model=..., each output is named by gradcheck.Output(key)"
                    if self.model is not None
                    else "it must be a callable or gradcheck.Function(callable, ...)"
                )
            )
        return function


@dataclass(frozen=True, slots=True, eq=False)
class ModelSpec:
    """What `model` was told; keyword arguments of `check` and `audit`."""

    at: Any
    options: Mapping[str, Any]


def model(*, at: Any, **options: Any) -> Callable[[Decorated], Decorated]:
    """Describe a model where it is defined; the function itself stays as it is.

    Parameters
    ----------
    at : nested numbers
        The point where the model starts, or `gradcheck.points(...)`.
    **options
        Keyword arguments of `gradcheck.check`: ``gradient=``, ``bounds=``, ``names=`` ...

    Returns
    -------
    callable
        A decorator that returns the function unchanged, with its description attached. Needs neither pytest nor
        numpy.

    Examples
    --------
    >>> import gradcheck
    >>> @gradcheck.model(at=[1.0, 2.0], gradient=lambda x: [x[1], x[0]])
    ... def area(x):
    ...     return x[0] * x[1]
    >>> area([2.0, 3.0])
    6.0
    """

    def describe(function: Decorated) -> Decorated:
        if not callable(function):
            raise UsageError(f"gradcheck.model decorates a function, not {function!r}")
        setattr(function, SPEC_ATTRIBUTE, ModelSpec(at=at, options=dict(options)))
        return function

    return describe
