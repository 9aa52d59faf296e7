"""Which entries, in words: a part of the input, a row, a column or a run where they fill one, else their names."""

import numpy as np

from gradcheck.claims.mistakes.case import Block, Case
from gradcheck.records.arrays import BoolArray, IntArray
from gradcheck.wording import count, listed

#: From so many entries on a run of them is told by its ends.
RUN = 4
#: Fewer entries are told by their names.
FEW = 3
#: More entries than this do not all get their names.
LISTED = 6


def in_words(case: Case, where: BoolArray) -> str:
    """The marked entries as someone would say it who knows the model."""
    names = where.sum()
    if names < FEW:
        return listed(case.names(where))
    told = _everything(case, where) or _rows_and_columns(case, where) or _blocks(case, where) or _run(case, where)
    return told or listed(case.names(where))


def filled(case: Case, where: BoolArray, part: BoolArray) -> bool:
    """Whether the marked entries are all of this part, but for such as say nothing, and some are."""
    return bool(where[part].any() and (where | case.silent)[part].all())


def _everything(case: Case, where: BoolArray) -> str:
    if not case.whole or not filled(case, where, np.ones_like(where)):
        return ""
    return f"all {where.sum():,} entries" if where.all() else f"all {where.sum():,} entries that are not zero"


def _rows_and_columns(case: Case, where: BoolArray) -> str:
    m, n = where.shape
    if m == 1:
        return ""
    rows, columns = np.flatnonzero(where.any(axis=1)), np.flatnonzero(where.any(axis=0))
    if case.whole and _product(case, where, rows, np.arange(n)):
        return _rows(case, rows)
    if _product(case, where, np.arange(m), columns):
        return f"all outputs by {_variables(case, columns)}"
    if rows.size > 1 and columns.size > 1 and _product(case, where, rows, columns):
        return f"{_rows(case, rows)} by {_variables(case, columns)}"
    if columns.size == 1 and rows.size > LISTED and 2 * rows.size >= m:
        return f"{rows.size} of the {m} outputs by {_variables(case, columns)}"
    if case.whole and rows.size == 1 and columns.size > LISTED and 2 * columns.size >= n:
        return f"{columns.size} of the {n} entries of {_rows(case, rows)}"
    return ""


def _product(case: Case, where: BoolArray, rows: IntArray, columns: IntArray) -> bool:
    part = np.zeros_like(where)
    part[np.ix_(rows, columns)] = True
    return filled(case, where, part) and not where[~part].any()


def _rows(case: Case, places: IntArray) -> str:
    if places.size == 1:
        return row_in_words(int(places[0]), case.name(int(places[0]), 0))
    if places.size >= FEW and np.all(np.diff(places) == 1):
        return f"rows {places[0]} to {places[-1]}"
    return f"rows {listed([str(place) for place in places])}"


def row_in_words(row: int, entry: str) -> str:
    """A row and its output's name, which the name of any of its entries begins with."""
    output, by, _ = entry.partition(" by ")
    return f"row {row} ({output})" if by else f"row {row}"


def _variables(case: Case, columns: IntArray) -> str:
    names = [case.variable(int(j)) for j in columns]
    if columns.size >= RUN and np.all(np.diff(columns) == 1):
        return f"{names[0]} to {names[-1]}"
    return listed(names)


def _blocks(case: Case, where: BoolArray) -> str:
    """Whole parts of the input, or rows and columns of one of them."""
    if where.shape[0] > 1:
        return ""
    told, covered = [], np.zeros_like(where)
    for block in case.blocks:
        part = np.zeros_like(where)
        part[:, block.columns] = True
        if filled(case, where, part) and len(case.blocks) > 1:
            told.append(f"all {count(int(where[part].sum()), 'entry', 'entries')} of {block.path}")
            covered |= part
        elif len(block.shape) == 2 and (line := _line(case, where, block)):
            told.append(line)
            covered |= part
    return listed(told) if told and not where[~covered].any() else ""


def _line(case: Case, where: BoolArray, block: Block) -> str:
    marks = where[0, block.columns].reshape(block.shape)
    rows, columns = np.flatnonzero(marks.any(axis=1)), np.flatnonzero(marks.any(axis=0))
    for axis, places in ((0, rows), (1, columns)):
        part = np.zeros(block.shape, bool)
        part[(places, slice(None)) if axis == 0 else (slice(None), places)] = True
        whole = np.zeros_like(where)
        whole[0, block.columns] = part.ravel()
        if places.size == 1 and filled(case, where, whole):
            shown = f"{places[0]}, :" if axis == 0 else f":, {places[0]}"
            return f"all {marks.sum()} entries of {block.path}[{shown}]"
    return ""


def _run(case: Case, where: BoolArray) -> str:
    """Neighbours of one row."""
    rows, columns = np.nonzero(where)
    if rows.size < RUN or np.unique(rows).size > 1 or not np.all(np.diff(columns) == 1):
        return ""
    first, last = case.name(int(rows[0]), int(columns[0])), case.name(int(rows[0]), int(columns[-1]))
    return f"{first} to {last} ({rows.size} entries)"
