"""Points as people write them: on a command line, or as rows of numbers in a file."""

import json
import math
from pathlib import Path
from types import SimpleNamespace
from typing import Any

from gradcheck.errors import UsageError

_NO_BOUND = {"", "none", "-"}


def point_from_text(text: str, option: str = "--at") -> Any:
    """The value that a text stands for: JSON, or numbers separated by commas.

    Parameters
    ----------
    text : str
        ``"0.3, 1.2"`` is a list of floats, ``"0.3"`` a single number, ``'{"a": 0.3, "b": [1.0, 2.0]}'`` a nesting.
    option : str
        How the error names the place where the text stood.

    Raises
    ------
    UsageError
        If it is neither.

    Examples
    --------
    >>> point_from_text("0.3, 1.2"), point_from_text("[[1.0, 2.0]]"), point_from_text("0.3")
    ([0.3, 1.2], [[1.0, 2.0]], 0.3)
    """
    if text.lstrip()[:1] in {"[", "{"}:
        try:
            return json.loads(text)
        except json.JSONDecodeError as error:
            raise UsageError(f"{option} {text!r} is not valid JSON: {error}") from None
    numbers = _numbers(text.split(","), option, text)
    return numbers if "," in text else numbers[0]


def bounds_from_text(lower: str | None, upper: str | None) -> Any:
    """Bounds from two texts of numbers separated by commas; one number stands for all, ``none`` for no bound.

    Returns
    -------
    object with ``lb`` and ``ub``, or None if both texts are None

    Examples
    --------
    >>> bounds = bounds_from_text("0, none", "1")
    >>> bounds.lb, bounds.ub
    ([0.0, -inf], [1.0])
    """
    if lower is None and upper is None:
        return None
    # Two named sides: a pair of lists could be mistaken for two (lower, upper) pairs.
    return SimpleNamespace(lb=_side(lower, "--lower", -math.inf), ub=_side(upper, "--upper", math.inf))


def points_from_file(path: str | Path) -> list[list[float]]:
    """Points from a file, one per row.

    Parameters
    ----------
    path : path
        ``.csv`` or ``.txt``: numbers separated by commas, semicolons or blanks, one heading line and ``#`` comments
        allowed; ``.json``: a list of lists; ``.npy``: a 2-d array, or 1-d for a single point.

    Raises
    ------
    UsageError
        If the file cannot be read, holds no point, something that is no number, or rows of unequal length: which line.
    """
    path = Path(path)
    readers = {".json": _rows_of_json, ".npy": _rows_of_npy, ".csv": _rows_of_text, ".txt": _rows_of_text}
    if path.suffix.lower() not in readers:
        raise UsageError(f"points file {str(path)!r}: the ending must be one of {', '.join(sorted(readers))}")
    try:
        rows = readers[path.suffix.lower()](path)
    except OSError as error:
        raise UsageError(f"points file {str(path)!r} cannot be read: {error.strerror or error}") from None
    except ValueError as error:
        if isinstance(error, UsageError):
            raise
        raise UsageError(f"points file {str(path)!r} cannot be read: {error}") from None
    if not rows:
        raise UsageError(f"points file {str(path)!r} holds no point")
    for number, row in enumerate(rows, start=1):
        if len(row) != len(rows[0]):
            raise UsageError(
                f"points file {str(path)!r}: point {number} has {len(row)} numbers, but the first has {len(rows[0])}"
            )
    return rows


def _numbers(parts: list[str], option: str, text: str) -> list[float]:
    if len(parts) > 1 and not parts[-1].strip():  # "0.3," is a list of one
        parts = parts[:-1]
    numbers = []
    for part in parts:
        try:
            numbers.append(float(part))
        except ValueError:
            raise UsageError(
                f"{option} {text!r}: {part.strip()!r} is no number; give numbers separated by commas, or JSON"
            ) from None
    return numbers


def _side(text: str | None, option: str, missing: float) -> list[float]:
    if text is None:
        return [missing]
    filled = [str(missing) if part.strip().lower() in _NO_BOUND else part for part in text.strip("[] ").split(",")]
    return _numbers(filled, option, text)


def _rows_of_text(path: Path) -> list[list[float]]:
    rows: list[list[float]] = []
    heading = False
    for number, line in enumerate(path.read_text(encoding="utf-8-sig").splitlines(), start=1):
        words = line.partition("#")[0].replace(",", " ").replace(";", " ").split()
        if not words:
            continue
        try:
            rows.append([float(word) for word in words])
        except ValueError:
            if rows or heading:
                raise UsageError(
                    f"points file {str(path)!r}, line {number}: {line.strip()!r:.60} is no row of numbers"
                ) from None
            heading = True
    return rows


def _rows_of_json(path: Path) -> list[list[float]]:
    return _checked(json.loads(path.read_text(encoding="utf-8-sig")), path)


def _rows_of_npy(path: Path) -> list[list[float]]:
    import numpy as np  # the command's help must not pay for it

    array = np.load(path, allow_pickle=False)
    return _checked((array[None, :] if array.ndim == 1 else array).tolist(), path)


def _checked(rows: Any, path: Path) -> list[list[float]]:
    if isinstance(rows, list) and rows and not any(isinstance(row, list) for row in rows):
        rows = [rows]
    if not isinstance(rows, list) or not all(isinstance(row, list) for row in rows):
        raise UsageError(f"points file {str(path)!r} must hold a list of points, each a list of numbers")
    for row in rows:
        for entry in row:
            if isinstance(entry, bool) or not isinstance(entry, int | float):
                raise UsageError(f"points file {str(path)!r} holds {entry!r:.60}; numbers are needed")
    return [[float(entry) for entry in row] for row in rows]
