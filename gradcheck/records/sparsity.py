"""What the check of a sparse Jacobian, or of one with many columns, found: counts, and three lists of faults."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from gradcheck.records.arrays import frozen


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Repetition:
    """One fault that repeats in a regular way: entries (row, column), (row + row_step, column + column_step), ...

    Attributes
    ----------
    kind : str
        ``"missing"``, ``"unused"``, ``"wrong"`` or ``"misplaced"``.
    row, column : int
        The first of them.
    row_step, column_step : int
    count : int
    """

    kind: str
    row: int
    column: int
    row_step: int
    column_step: int
    count: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SparsityChecks:
    """The outcome for a claimed Jacobian (m, n) whose entries were not looked at one variable after the other.

    Attributes
    ----------
    shape : (int, int)
    declared : bool
        Whether a pattern was declared; else it is that of the claim.
    stored : int
        Entries of the pattern.
    groups : int
        Directions of structurally orthogonal columns that gave all entries looked at.
    confirmed, refuted, undecided : int
        Entries that were looked at, by verdict. Entries outside the pattern that were found count among the refuted.
    whole_rows, whole_rows_confirmed : int
        Rows with too many entries for that, judged as wholes along random directions; and how many are confirmed.
    missing : ndarray of int, shape (a, 2)
        (row, column) of entries outside the pattern on which the function depends.
    unused : ndarray of int, shape (b, 2)
        Entries of the pattern that are zero at the point, and whose variable never changes the output, neither far from
        the point nor elsewhere.
    wrong : ndarray of int, shape (c, 2)
        Entries of the pattern whose value is wrong.
    misplaced : ndarray of int, shape (d, 4)
        (row, column, row, column): a value that stands in the first place and belongs in the second.
    unexplained_rows : ndarray of int, shape (e,)
        Rows that are refuted as wholes, in which the entries at fault could not be told.
    undecided_rows : ndarray of int, shape (f,)
        Whole rows that could not be decided.
    repetitions : tuple of Repetition
    smallest_visible : float
        The smallest single error that the random directions would have seen in each row that they confirm, as a share
        of the largest term (entry times size of the variable) of that row. It holds for entries outside the pattern and
        for rows judged as wholes; entries that were looked at are held to the tolerance of the check.
    """

    shape: tuple[int, int]
    declared: bool
    stored: int
    groups: int
    confirmed: int
    refuted: int
    undecided: int
    whole_rows: int
    whole_rows_confirmed: int
    missing: NDArray[np.intp]
    unused: NDArray[np.intp]
    wrong: NDArray[np.intp]
    misplaced: NDArray[np.intp]
    unexplained_rows: NDArray[np.intp] = field(default_factory=lambda: np.empty(0, np.intp))
    undecided_rows: NDArray[np.intp] = field(default_factory=lambda: np.empty(0, np.intp))
    repetitions: tuple[Repetition, ...] = ()
    smallest_visible: float = float("nan")

    def __post_init__(self) -> None:
        for name in ("missing", "unused", "wrong", "misplaced", "unexplained_rows", "undecided_rows"):
            object.__setattr__(self, name, frozen(getattr(self, name), dtype=np.intp))
