"""Where an item stands in the user's files."""

import inspect
from pathlib import Path
from typing import Any

import pytest


def source_of(source: Any, item: pytest.Item) -> tuple[Path, int | None, str]:
    """File, line (from 0, None if unknown) and name of what stands behind an item, as pytest wants it."""
    code = getattr(inspect.unwrap(source) if callable(source) else source, "__code__", None)
    if code is None:
        return item.path, _line_of_class(source), item.name
    return Path(code.co_filename), code.co_firstlineno - 1, item.name


def place_of(item: pytest.Item) -> str:
    """``file:line`` of an item, the file as pytest prints it."""
    path, line, _ = item.location
    return path if line is None else f"{path}:{line + 1}"


def _line_of_class(source: Any) -> int | None:
    if not isinstance(source, type):
        return None
    try:
        return inspect.findsource(source)[1]
    except (OSError, TypeError):
        return None
