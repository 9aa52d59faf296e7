"""Several arguments for one model, and several points for one check."""

import inspect
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from gradcheck.errors import UsageError


@dataclass(frozen=True, slots=True, eq=False)
class Arguments:
    """Several arguments for one model; made by `args`."""

    positional: tuple[Any, ...]
    keywords: Mapping[str, Any]


@dataclass(frozen=True, slots=True, eq=False)
class Points:
    """Several points for one check; made by `points`."""

    each: tuple[Any, ...]


def args(*positional: Any, **keywords: Any) -> Arguments:
    """The arguments of a model that takes several: ``at=gradcheck.args(a, b, mode="fast")``.

    Examples
    --------
    >>> import gradcheck
    >>> gradcheck.check(lambda a, b: a * b, at=gradcheck.args(2.0, 3.0), gradient=lambda a, b: (b, a))
    """
    return Arguments(positional, keywords)


def points(*each: Any) -> Points:
    """Several points, each checked: ``at=gradcheck.points(p1, p2)``. A 2-d array is one argument, never k points.

    Raises
    ------
    UsageError
        If no point is given.

    Examples
    --------
    >>> import gradcheck
    >>> len(gradcheck.points([1.0, 2.0], [3.0, 4.0]).each)
    2
    """
    if not each:
        raise UsageError("gradcheck.points() holds no point; give at least one")
    return Points(each)


def argument_names(function: Callable[..., Any] | None, arguments: Arguments) -> tuple[str, ...]:
    """Names of all arguments, positional ones first: the model's own, ``loads[0]`` for those of ``*loads``."""
    count = len(arguments.positional)
    names = [f"argument {i}" for i in range(count)]
    for i, parameter in enumerate(_parameters(function)):
        if parameter.kind == parameter.VAR_POSITIONAL:
            names[i:] = [f"{parameter.name}[{j}]" for j in range(count - i)]
        elif parameter.kind in (parameter.POSITIONAL_ONLY, parameter.POSITIONAL_OR_KEYWORD) and i < count:
            names[i] = parameter.name
    return (*names, *arguments.keywords)


def wanted_arguments(function: Callable[..., Any] | None, arguments: Arguments, wrt: Any) -> tuple[int, ...]:
    """Which arguments hold the variables, in the order of `wrt`; all of them where `wrt` is None.

    Parameters
    ----------
    wrt : str, int, iterable of them, or None
        A name (that of ``*loads`` stands for all of them), or the position of a positional argument.

    Raises
    ------
    UsageError
        If `wrt` names no argument, or one that is not given.
    """
    names = argument_names(function, arguments)
    if wrt is None:
        return tuple(range(len(names)))
    asked = (wrt,) if isinstance(wrt, str | int) else tuple(wrt) if isinstance(wrt, Iterable) else (wrt,)
    if not asked:
        raise UsageError(f"wrt is {wrt!r}: it names no argument; the arguments are {', '.join(names)}")
    wanted: dict[int, None] = {}
    unknown = []
    for each in asked:
        found = _found(each, names, len(arguments.positional))
        wanted |= dict.fromkeys(found)
        unknown += [] if found else [str(each)]
    if unknown:
        raise UsageError(
            f"wrt names {', '.join(unknown)}, but the arguments are {', '.join(names)}"
            + _not_given(function, unknown[0])
        )
    return tuple(wanted)


def _found(asked: Any, names: tuple[str, ...], positional: int) -> list[int]:
    if isinstance(asked, int) and not isinstance(asked, bool):
        return [asked] if 0 <= asked < positional else []
    return [i for i, name in enumerate(names) if name == asked or (i < positional and name.startswith(f"{asked}["))]


def _not_given(function: Callable[..., Any] | None, name: str) -> str:
    """What to do about a parameter of the model that was left to its default."""
    if not any(parameter.name == name for parameter in _parameters(function)):
        return ""
    return f"; {name} was left to its default: give it, at=gradcheck.args(..., {name}=...)"


def _parameters(function: Callable[..., Any] | None) -> list[inspect.Parameter]:
    try:
        return list(inspect.signature(function).parameters.values()) if callable(function) else []
    except (TypeError, ValueError):
        return []
