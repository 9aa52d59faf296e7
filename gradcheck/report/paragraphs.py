"""Paragraphs, bullets and tables of plain text, none wider than a terminal."""

import textwrap
from collections.abc import Sequence

from gradcheck.wording import clean, shortened_apart

#: Columns of a terminal, and of most logs and mails.
WIDTH = 80

_GAP = "  "


def paragraph(text: str, indent: int = 0, *, first: str = "", width: int = WIDTH) -> list[str]:
    """`text` in lines of at most `width`; `first` opens the first line and the others stand below its end."""
    margin = " " * indent
    return textwrap.wrap(
        clean(text),
        width,
        initial_indent=margin + first,
        subsequent_indent=margin + " " * len(first),
        break_on_hyphens=False,
    )


def bullets(texts: Sequence[str], indent: int = 2, *, width: int = WIDTH) -> list[str]:
    """One bullet per text."""
    return [line for text in texts for line in paragraph(text, indent, first="- ", width=width)]


def table(
    header: Sequence[str],
    rows: Sequence[Sequence[str]],
    *,
    right: str = "",
    names: Sequence[int] = (0,),
    indent: int = 2,
    width: int = WIDTH,
) -> list[str]:
    """Rows in columns; columns in `names` are shortened in the middle until the table fits, figures never are.

    Parameters
    ----------
    header, rows : sequences of cells
    right : str
        One letter per column: ``r`` for right-aligned, anything else for left.
    names : sequence of int
        Columns that may be shortened, the widest first.
    """
    cells = [[clean(cell) for cell in row] for row in (header, *rows)]
    widths = [max(len(row[column]) for row in cells) for column in range(len(header))]
    room = width - indent - len(_GAP) * (len(widths) - 1)
    while sum(widths) > room and any(widths[column] > _least(header, column) for column in names):
        widest = max(names, key=lambda column: widths[column] - _least(header, column))
        widths[widest] -= 1
    columns = [[row[column] for row in cells] for column in range(len(widths))]
    for column in names:
        columns[column][1:] = shortened_apart(columns[column][1:], widths[column])
    lines = []
    for row in zip(*columns, strict=True):
        parts = [
            cell.rjust(width) if side == "r" else cell.ljust(width)
            for cell, width, side in zip(row, widths, right.ljust(len(widths)), strict=True)
        ]
        lines.append((" " * indent + _GAP.join(parts)).rstrip())
    return lines


def fits(lines: Sequence[str], width: int = WIDTH) -> bool:
    """Whether every line stays within `width`."""
    return all(len(line) <= width for line in lines)


def _least(header: Sequence[str], column: int) -> int:
    """A name is never shortened below its heading, nor to fewer than eight characters."""
    return max(len(header[column]), 8)
