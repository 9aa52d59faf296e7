"""The inquiry that compares one claimed derivative with witnesses, entry by entry, as cheaply as the verdict allows.

A quick look confirms most right entries. Those it does not confirm get the whole difference witness, those still open
the complex step; a refutation needs a second look, by other steps or another witness, that agrees.
"""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from gradcheck.claims.desk import STAIRCASE, Desk, Examined
from gradcheck.claims.inner_jumps import explained_by_jumps
from gradcheck.claims.wide_plateaus import staircases
from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.records.arrays import Array, IntArray
from gradcheck.witnesses.complex_step import complex_step
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.quick_look import close_look, quick_look, wider_look
from gradcheck.witnesses.steps import Room
from gradcheck.witnesses.testimony import Testimony

DIFFERENCES, COMPLEX_STEP = "differences", "complex step"
WITNESSES = (DIFFERENCES, COMPLEX_STEP)
#: The second look takes its values on intervals of another size, so that no node is shared.
OTHER_WIDTH = 0.3719
#: Half-length of the lines along which a nearly right entry is looked at, in units of the variable's size, and how many
#: of them.
WIDE, WIDE_LOOKS_MOST = 0.5, 10
#: Steps of a look very close to the point, in units of the variable's size, and what a slope may be off by rounding, in
#: units in the last place.
NARROW, NARROW_DEVIATIONS = 2.0 ** np.array([-20.0, -28.0, -36.0]), 30.0
#: How many variables without influence are looked at for stairs.
STAIRCASES_MOST = 10


def examine(
    base: Array,
    columns: IntArray,
    claim: Array,
    room: Room,
    centre: Array,
    typical: Array,
    *,
    rel_tol: float,
    abs_tol: float | Array,
    unit_roundoff: float = np.finfo(float).eps / 2,
    witnesses: Sequence[str] = WITNESSES,
    magnitude: Array | None = None,
) -> Inquiry[Examined]:
    """Examine columns of a claimed Jacobian (a gradient is one row).

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : ndarray of int, shape (d,)
        Which variables.
    claim : ndarray, shape (m, d)
        The claim in these columns.
    room : Room
        Along these d coordinates.
    centre : ndarray, shape (m,)
        Values at the point.
    typical : ndarray, shape (d,)
        Typical sizes τ of these variables.
    rel_tol, abs_tol : float
    unit_roundoff : float
        u of the arithmetic that the model returns its values in.
    witnesses : sequence of str
        Among ``"differences"``, ``"complex step"``; at least one.
    magnitude : ndarray, shape (m,), optional
        Size of the terms that the outputs are sums of; their rounding is that of the terms.

    Returns
    -------
    Examined
    """
    desk = Desk(claim, centre, typical, rel_tol, abs_tol, unit_roundoff, magnitude)
    everything = np.arange(columns.size)
    if DIFFERENCES in witnesses:
        seen = yield from quick_look(base, columns, room, centre)
        desk.hear(seen.testimony, everything, final=False)
        if seen.cut_short:
            # Whatever else would be asked is refused as well; with a million variables asking takes minutes.
            desk.run_out()
            return desk.result()
        doubted = desk.open_columns()
        if doubted.size:
            desk.hear((yield from wider_look(base, columns, room, centre, seen, doubted)), doubted, final=False)
        if desk.confirmed.any():
            desk.doubt((yield from close_look(base, columns, room, claim, centre)))
        yield from _plateau_look(desk, base, columns, room, centre)
        open_ = desk.open_columns()
        if open_.size:
            whole = yield from finite_difference(base, columns[open_], _along(room, open_), centre)
            desk.hear(whole, open_, replacing=True)
            yield from _second_look(desk, base, columns, room, centre)
            yield from _narrow_look(desk, base, columns, room, centre)
            yield from _wide_look(desk, base, columns, room)
    if COMPLEX_STEP in witnesses:
        open_ = desk.open_columns() if DIFFERENCES in witnesses else everything
        if open_.size:
            desk.hear((yield from _complex(base, columns, open_, room, centre)), open_, contested=True)
    return desk.result()


def _plateau_look(desk: Desk, base: Array, columns: IntArray, room: Room, centre: Array) -> Inquiry[None]:
    """Variables along which nothing changes, as claimed: without influence, or on the flat of a staircase?"""
    flat = desk.flat_columns()[:STAIRCASES_MOST]
    if flat.size:
        desk.leave_open(flat, (yield from staircases(base, columns[flat], _along(room, flat), centre)), STAIRCASE)


def _second_look(desk: Desk, base: Array, columns: IntArray, room: Room, centre: Array) -> Inquiry[None]:
    """Refutations stand only if differences at other steps refute as well."""
    doubted = desk.refuted_columns()
    if doubted.size == 0:
        return
    other = _along(room, doubted)
    other = replace(other, scale=other.scale * OTHER_WIDTH, widest=other.widest * OTHER_WIDTH)
    desk.second((yield from finite_difference(base, columns[doubted], other, centre)), doubted)


def _narrow_look(desk: Desk, base: Array, columns: IntArray, room: Room, centre: Array) -> Inquiry[None]:
    """Refutations fall where the slope very close to the point is what is claimed.

    Ripples and narrow features close to the point are noise to wide steps, and what those see is the slope around them.
    """
    doubted = desk.refuted_columns()
    if doubted.size == 0:
        return
    x, part = base[columns[doubted]][:, None], _along(room, doubted)
    steps = part.scale[:, None] * NARROW
    up, down = (x + steps) - x, (x - steps) - x
    allowed = (up <= part.above[:, None]) & (-down <= part.below[:, None]) & (up > 0) & (down < 0)
    offsets = np.stack([np.where(allowed, up, 0.0), np.where(allowed, down, 0.0)], axis=2)
    reply = yield Request(base=base, directions=columns[doubted], offsets=offsets.reshape(doubted.size, -1))
    values = np.where(reply.finite[:, :, None], reply.values, np.nan)
    width = np.where(allowed, up - down, np.nan)[:, :, None]
    with np.errstate(over="ignore", invalid="ignore"):
        slopes = (values[:, 0::2] - values[:, 1::2]) / width
    with np.errstate(over="ignore"):
        size = np.abs(centre) + np.abs(np.nan_to_num(desk.claim[:, doubted].T)) * np.abs(x)
        doubt = NARROW_DEVIATIONS * np.finfo(float).eps * size[:, None, :] / (width / 2)
    desk.hear_narrowly(doubted, slopes, doubt)


def _wide_look(desk: Desk, base: Array, columns: IntArray, room: Room) -> Inquiry[None]:
    """Entries refuted by a little are looked at along their whole variable: small jumps may explain the difference."""
    nearly, gap = desk.refuted_by_little()
    nearly, gap = nearly[:WIDE_LOOKS_MOST], gap[:, :WIDE_LOOKS_MOST]
    if nearly.size:
        below, above = (np.minimum(side[nearly], WIDE * room.typical[nearly]) for side in (room.below, room.above))
        looked_at = [int(column) for column in columns[nearly]]
        desk.excuse(nearly, (yield from explained_by_jumps(base, looked_at, below, above, gap)))


def _complex(base: Array, columns: IntArray, open_: IntArray, room: Room, centre: Array) -> Inquiry[Testimony]:
    part = _along(room, open_)
    reach = np.minimum(part.below, part.above)
    return (yield from complex_step(base, columns[open_], centre.size, scale=part.scale, f0=centre, reach=reach))


def _along(room: Room, columns: IntArray) -> Room:
    return Room(
        scale=room.scale[columns],
        typical=room.typical[columns],
        widest=room.widest[columns],
        below=room.below[columns],
        above=room.above[columns],
        grain=room.grain[columns],
    )
