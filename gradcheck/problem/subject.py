"""One normal form of what the user gave: a function with ``at``, a decorated model, or a described Problem."""

import inspect
from collections import Counter
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.domain import Domain, domain_of
from gradcheck.problem.layout import Layout, Points, layout_of
from gradcheck.problem.problem import Function, Output, Problem
from gradcheck.records.arrays import Array, frozen
from gradcheck.wording import count

CLAIM_KINDS = ("gradient", "jacobian", "hessian", "jvp", "vjp", "hvp", "value_and_gradient")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Target:
    """One function of the problem, as the verbs see it.

    Attributes
    ----------
    name : str
    run : str
        Which callable of the subject gives it.
    pick : callable or None
        Takes this output from what the callable returns.
    claims : mapping of kind to claim
    limits : mapping
        ``lower``, ``upper``, ``equal`` where the function is a constraint.
    pattern : sparse matrix, boolean array (m, n) or None
        Which entries of the Jacobian may differ from zero, where that was declared.
    """

    name: str
    run: str
    pick: Callable[[Any], Any] | None = None
    claims: Mapping[str, Any] = field(default_factory=dict)
    limits: Mapping[str, Any] = field(default_factory=dict)
    pattern: Any = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Subject:
    """What a verb works on: the callables, the functions by name, the layout of x, the start point and the domain.

    Where `batched`, the callables take many points at once: ``(k, n)``, or ``(k,)`` where x is one number.
    """

    name: str
    runs: Mapping[str, Callable[..., Any]]
    targets: Mapping[str, Target]
    layout: Layout
    start: Array
    domain: Domain
    units: tuple[str, ...] = ()
    batched: bool = False
    #: Layouts of what the functions return, by name; filled by the evaluator when first values come.
    outputs: dict[str, Layout] = field(default_factory=dict)

    def output_name(self, function: str, row: int) -> str:
        """Readable name of one output, made only when it is shown: ``stress[2]``, ``stress["mid"][2]``."""
        layout = self.outputs.get(function)
        return f"{function}[{row}]" if layout is None else layout.name(row)

    @property
    def names(self) -> tuple[str, ...]:
        """Readable names of all variables; for small problems only, larger ones ask the layout entry by entry."""
        return tuple(self.layout.name(i) for i in range(self.layout.size))


def subjects_of_function(
    function: Any,
    at: Any,
    *,
    claims: Mapping[str, Any],
    wrt: Any = None,
    output: Callable[[Any], Any] | None = None,
    bounds: Any = None,
    names: Any = None,
    typical: Any = None,
    integer: Any = None,
    batched: Any = False,
    pattern: Any = None,
) -> list[Subject]:
    """One subject per point of `at`.

    Raises
    ------
    UsageError
        If the function cannot be called with `at`, or any option does not fit.
    """
    if not callable(function):
        raise UsageError(
            f"the model is {function!r} ({type(function).__name__}), which cannot be called; pass the function itself"
        )
    if output is not None and not callable(output):
        raise UsageError(
            f"output is {output!r}; give a function that picks from what the model returns, such as lambda r: r[0]"
        )
    each = at.each if isinstance(at, Points) else (at,)
    name = getattr(function, "__name__", "") or type(function).__name__
    name = "model" if name == "<lambda>" else name
    target = Target(name=name, run=name, pick=output, claims=_given_claims(claims), pattern=pattern)
    subjects = []
    signature = _signature(function)
    for point in each:
        layout, start = layout_of(point, root=_root(signature), wrt=wrt, function=function)
        layout = _named(layout, names)
        _refuse_other_arguments(function, signature, layout, start)
        if batched:
            _refuse_no_batch(batched, layout)
        subjects.append(
            Subject(
                name=name,
                runs={name: function},
                targets={name: target},
                layout=layout,
                start=frozen(start),
                domain=domain_of(start, bounds=bounds, typical=typical, integer=integer),
                batched=bool(batched),
            )
        )
    return subjects


def subject_of_problem(problem: Problem) -> Subject:
    """The subject of a described problem; its functions take one flat vector (n,)."""
    variables = problem.variables
    start = np.array([variable.value for variable in variables])
    layout, start = layout_of(start, root="x")
    layout = _named(layout, [variable.name for variable in variables])
    runs: dict[str, Callable[..., Any]] = {}
    targets = {}
    for name, function in {"objective": problem.objective, **problem.constraints}.items():
        run = name if problem.model is None else "model"
        callable_of_run = function.function if isinstance(function, Function) else problem.model
        assert callable_of_run is not None  # Problem has seen to it
        runs[run] = callable_of_run
        targets[name] = _target(name, run, function)
    for each in runs.values():
        _refuse_other_arguments(each, _signature(each), layout, start)
    domain = domain_of(
        start,
        bounds=[(variable.lower, variable.upper) for variable in variables],
        typical=[np.nan if variable.typical is None else variable.typical for variable in variables],
        integer=[variable.integer for variable in variables],
    )
    return Subject(
        name=problem.name or "problem",
        runs=runs,
        targets=targets,
        layout=layout,
        start=frozen(start),
        domain=domain,
        units=tuple(variable.unit for variable in variables),
    )


def _target(name: str, run: str, function: Function | Output) -> Target:
    return Target(
        name=name,
        run=run,
        pick=partial(_pick, key=function.key) if isinstance(function, Output) else None,
        claims=_given_claims({kind: getattr(function, kind, None) for kind in CLAIM_KINDS}),
        limits={
            side: getattr(function, side) for side in ("lower", "upper", "equal") if getattr(function, side) is not None
        },
        pattern=function.pattern,
    )


def _pick(outputs: Any, key: Any) -> Any:
    """The output `key` of a run; an attribute where the run returns an object with named fields."""
    try:
        return outputs[key]
    except (KeyError, IndexError, TypeError):
        if isinstance(key, str) and hasattr(outputs, key):
            return getattr(outputs, key)
        raise


def _given_claims(claims: Mapping[str, Any]) -> dict[str, Any]:
    return {kind: claim for kind, claim in claims.items() if claim is not None}


def _named(layout: Layout, names: Any) -> Layout:
    if names is None:
        return layout
    if isinstance(names, str) or not isinstance(names, Iterable):
        raise UsageError(f"names is {names!r}; give a list with one name a variable")
    names = tuple(str(name) for name in names)
    if len(names) != layout.size:
        raise UsageError(
            f"names has {count(len(names), 'entry', 'entries')} but there are {count(layout.size, 'variable')}"
        )
    twice = [name for name, often in Counter(names).items() if often > 1]
    if twice:
        raise UsageError(f"names holds {twice[0]!r} more than once; names must differ")
    return replace(layout, names=names)


def _refuse_no_batch(batched: Any, layout: Layout) -> None:
    if not isinstance(batched, bool | np.bool_):
        raise UsageError(f"batched is {batched!r}; give True for a model that takes many points at once, or False")
    if layout.single is None or len(layout.single.shape) > 1:
        held = "several parts" if layout.single is None else f"an array of shape {layout.single.shape}"
        raise UsageError(
            f"batched=True needs a model of one array (n,), which it then takes as (k, n), or of one number; `at` is "
            f"{held}: wrap the model so that it takes one flat array, or leave batched out"
        )


def _signature(function: Any) -> inspect.Signature | None:
    """What the model takes, where Python knows."""
    try:
        return inspect.signature(function)
    except (TypeError, ValueError):
        return None


def _root(signature: inspect.Signature | None) -> str:
    """What to call the vector in names of entries: the model's own first parameter."""
    first = None if signature is None else next(iter(signature.parameters.values()), None)
    if first is None:
        return "x"
    return f"{first.name}[0]" if first.kind == first.VAR_POSITIONAL else first.name


def _refuse_other_arguments(function: Any, signature: inspect.Signature | None, layout: Layout, start: Array) -> None:
    """A model that cannot take these arguments is told here, with its signature, instead of by a traceback."""
    if inspect.isclass(function):
        raise UsageError(
            f"the model is the class {function.__name__}; pass an instance that can be called, or one of its methods: "
            f"{function.__name__}(...).method"
        )
    if signature is None:
        return
    positional, keywords = layout.restore(start)
    try:
        signature.bind(*positional, **keywords)
    except TypeError as error:
        name = getattr(function, "__name__", "the model")
        if next(iter(signature.parameters), "") == "self":
            raise UsageError(
                f"{name}{signature} is a method without its instance; pass the method of an instance: instance.{name}"
            ) from None
        raise UsageError(
            f"{name}{signature} cannot be called with `at`: {error}. Give every argument with "
            f"at=gradcheck.args(...), or wrap the model: lambda x: {name}(x[0], x[1])"
        ) from None
