"""Keyword arguments that a public function does not take, answered with the one that was meant."""

import inspect
from collections.abc import Callable
from difflib import get_close_matches
from functools import wraps
from typing import ParamSpec, TypeVar

from gradcheck.errors import UnknownArgument

P = ParamSpec("P")
R = TypeVar("R")

#: What people write for arguments whose names look different: the field's usual words.
_MEANT = {
    "x": "at",
    "x0": "at",
    "point": "at",
    "points": "at=gradcheck.points(...)",
    "args": "at=gradcheck.args(...)",
    "kwargs": "at=gradcheck.args(...)",
    "rtol": "rel_tol",
    "tol": "rel_tol",
    "tolerance": "rel_tol",
    "atol": "abs_tol",
    "jac": "jacobian",
    "sparsity": "pattern",
    "timeout": "time_limit",
}


def keywords_explained(function: Callable[P, R]) -> Callable[P, R]:
    """The same function; a keyword that it does not take raises `UnknownArgument` with the one that was meant."""
    known = tuple(inspect.signature(function).parameters)

    @wraps(function)
    def called(*args: P.args, **keywords: P.kwargs) -> R:
        unknown = [name for name in keywords if name not in known]
        if unknown:
            told = "; ".join(_explained(name, known) for name in unknown)
            raise UnknownArgument(f"{function.__name__} has no argument {told}")
        return function(*args, **keywords)

    return called


def _explained(name: str, known: tuple[str, ...]) -> str:
    meant = _MEANT.get(name, "")
    close = [meant] if meant.partition("=")[0] in known else get_close_matches(name, known, n=3, cutoff=0.6)
    return f"{name!r}: " + (f"did you mean {' or '.join(close)}?" if close else f"it takes {', '.join(known[1:])}")
