"""Looks at many rows of a Jacobian at once, along directions that move many variables.

A place where a row meets a direction is a slot. What a row's slot should hold is known from the claim; a quick look
confirms most slots, the whole difference witness looks at the rows that are left. A row that fails at some point does
not spoil the others.
"""

from collections.abc import Generator
from dataclasses import dataclass, replace
from typing import Any, TypeVar

import numpy as np

from gradcheck.claims.desk import Desk, Examined
from gradcheck.claims.rule import Tolerance
from gradcheck.evaluation.protocol import Inquiry, Reply, Request, Status
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.complex_step import complex_step
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.quick_look import QuickLook, quick_look, wider_look
from gradcheck.witnesses.steps import Room
from gradcheck.witnesses.testimony import Testimony

Result = TypeVar("Result")

#: Where more than this share of the slots of a direction is in doubt, two more values along it are worth their price.
MANY = 0.0005
#: Outputs that share intervals well; and how many times as many are looked at so.
FEW, TIMES_FEW = 25, 16
#: A bound that is so many times the tolerance may still be brought below it.
HOPE = 100.0
#: Slots that the whole witness looks at together: more would take too much memory.
SLOTS_AT_ONCE = 100_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Accuracy:
    """How exact a claim must be, and whether the complex step may be asked where differences cannot tell."""

    rel_tol: float
    abs_tol: float
    unit_roundoff: float
    complex_step: bool = True


class SlotDesk(Desk):
    """A desk whose slots belong to variables of their own: typical size and move of each, (m, d)."""

    def __init__(self, claim: Array, centre: Array, typical: Array, size: Array, accuracy: Accuracy) -> None:
        super().__init__(claim, centre, typical, accuracy.rel_tol, accuracy.abs_tol, accuracy.unit_roundoff)
        self.size = size

    def tolerance(self, columns: IntArray) -> Tolerance:
        floor = self.floor[:, None]
        heard = np.fmax(self.noise[:, None], self.noise_along[:, columns])
        rounding = np.minimum(np.fmax(heard, floor), 1e3 * floor) / self.typical[:, columns]
        # An absolute tolerance is meant for entries; slots are in units of moves.
        return Tolerance(rel_tol=self.rel_tol, abs_tol=self.abs_tol * self.size[:, columns], rounding=rounding)


def of_outputs(inquiry: Inquiry[Result], outputs: IntArray) -> Inquiry[Result]:
    """`inquiry` as if the model had these outputs only; a point counts as failed only where one of them is."""
    try:
        request = next(inquiry)
        while True:
            reply = yield request
            request = inquiry.send(_only(reply, outputs))
    except StopIteration as end:
        result: Result = end.value
        return result


def _only(reply: Reply, outputs: IntArray) -> Reply:
    if reply.values.shape[-1] <= (outputs.max() if outputs.size else 0):  # nothing came but refusals
        values = np.full((*reply.values.shape[:2], outputs.size), np.nan)
        return replace(reply, values=values)
    values = reply.values[:, :, outputs]
    status = reply.status.copy()
    bad = np.asarray(status == Status.NONFINITE.value)
    status[bad & np.isfinite(values).all(axis=2)] = Status.OK.value
    return replace(reply, values=values, status=status)


def forgiving(inquiry: Inquiry[Result], centre: Array) -> Generator[Request, Reply, tuple[Result, BoolArray]]:
    """The result of `inquiry`, and which outputs (m,) were not finite somewhere: these it saw as standing still."""
    broken = np.zeros(centre.size, bool)
    try:
        request = next(inquiry)
        while True:
            reply = yield request
            bad = np.asarray(reply.status == Status.NONFINITE.value)
            if bad.any():
                wrong = ~np.isfinite(reply.values) & bad[:, :, None]
                broken |= wrong.any(axis=(0, 1))
                status = reply.status.copy()
                status[bad] = Status.OK.value
                reply = replace(reply, values=np.where(wrong, centre, reply.values), status=status)
            request = inquiry.send(reply)
    except StopIteration as end:
        return end.value, broken


def glance(base: Array, rows: Array, room: Room, centre: Array) -> Inquiry[tuple[Testimony, QuickLook]]:
    """Four evaluations a direction; infinite bounds for outputs that failed somewhere."""
    seen, broken = yield from forgiving(quick_look(base, rows, room, centre), centre)
    return _blind(seen.testimony, broken), seen


def second_glance(
    base: Array, rows: Array, room: Room, centre: Array, seen: QuickLook, wanted: IntArray
) -> Inquiry[Testimony]:
    """Two more evaluations along the wanted directions."""
    testimony, broken = yield from forgiving(wider_look(base, rows, room, centre, seen, wanted), centre)
    return _blind(testimony, broken)


def _blind(testimony: Testimony, broken: BoolArray) -> Testimony:
    return replace(testimony, bound=np.where(broken, np.inf, testimony.bound)) if broken.any() else testimony


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Slots:
    """Slots (m, d) of a claim after looks along d directions, in units of these.

    Attributes
    ----------
    value, bound, left, right : ndarray
    confirmed, refuted : ndarray of bool
        Refuted ones have had one look only.
    reason : ndarray of object
    cut_short : bool
        The budget or the time ended.
    """

    value: Array
    bound: Array
    left: Array
    right: Array
    confirmed: BoolArray
    refuted: BoolArray
    reason: np.ndarray[tuple[int, ...], np.dtype[np.object_]]
    cut_short: bool


def look_along(
    base: Array,
    rows: Array,
    room: Room,
    claim: Array,
    centre: Array,
    typical: Array,
    size: Array,
    accuracy: Accuracy,
) -> Inquiry[Slots]:
    """Quick looks at slots: they confirm most right ones, and refute none.

    Parameters
    ----------
    base : ndarray, shape (n,)
    rows : ndarray, shape (d, n)
        Directions.
    room : Room
        Along them.
    claim : ndarray, shape (m, d)
        What each slot should hold, in units of the direction.
    centre : ndarray, shape (m,)
    typical : ndarray, shape (m, d)
        Typical size of the variable of each slot, in units of the direction.
    size : ndarray, shape (m, d)
        How far it moves.
    accuracy : Accuracy

    Returns
    -------
    Slots
    """
    desk = SlotDesk(claim, centre, typical, size, accuracy)
    testimony, seen = yield from glance(base, rows, room, centre)
    desk.hear(testimony, np.arange(len(rows)), final=False)
    if seen.cut_short:
        desk.run_out()
        return _so_far(desk, cut_short=True)
    doubted = np.flatnonzero((~desk.confirmed).sum(axis=0) > MANY * centre.size)
    if doubted.size:
        desk.hear((yield from second_glance(base, rows, room, centre, seen, doubted)), doubted, final=False)
    return _so_far(desk)


def whole_look(
    base: Array,
    row: Array,
    room: Room,
    claim: Array,
    centre: Array,
    typical: Array,
    size: Array,
    accuracy: Accuracy,
    failing: BoolArray,
) -> Inquiry[Slots]:
    """The slots (m, 1) along one direction (1, n) as the whole difference witness sees them: it may refute.

    `failing` outputs (m,), which were not finite in a quick look, are looked at apart from the others.
    """
    parts = []
    for part in _parts(failing):
        desk = SlotDesk(claim[part], centre[part], typical[part], size[part], accuracy)
        desk.hear((yield from _differences(base, row, room, centre, part)), np.arange(1), replacing=True)
        left = _nearly(desk, _left(desk))
        if part.size > FEW and 0 < left.size <= FEW * TIMES_FEW:
            # Outputs share the intervals that suit the worst of them; a few at a time have better ones.
            for first in range(0, left.size, FEW):
                some = left[first : first + FEW]
                heard = yield from _differences(base, row, room, centre, part[some])
                desk.hear(_among(heard, some, part.size), np.arange(1))
        left = _left(desk)
        if left.size and accuracy.complex_step:
            outputs = part[left]
            reach = np.minimum(room.below, room.above)
            asked = complex_step(base, row, outputs.size, scale=room.scale, f0=centre[outputs], reach=reach)
            exact = yield from of_outputs(asked, outputs)
            desk.hear(_among(exact, left, part.size), np.arange(1), contested=True)
        parts.append((part, _slots(desk.result(), cut_short=_ended(desk.reason))))
    return _assembled(parts, centre.size)


def _differences(base: Array, row: Array, room: Room, centre: Array, outputs: IntArray) -> Inquiry[Testimony]:
    return (yield from of_outputs(finite_difference(base, row, room, centre[outputs]), outputs))


def _nearly(desk: Desk, outputs: IntArray) -> IntArray:
    """Those of some outputs whose bound a better interval might bring below the tolerance."""
    with np.errstate(invalid="ignore"):
        tolerance = desk.tolerance(np.arange(1)).of(desk.claim, desk.value)
        return np.asarray(outputs[(desk.bound <= HOPE * tolerance)[outputs, 0]])


def _left(desk: Desk) -> IntArray:
    """Outputs that another look could still decide."""
    return np.flatnonzero(~(desk.confirmed | desk.refuted | desk.closed | (desk.reason == SPENT))[:, 0])


def _among(testimony: Testimony, outputs: IntArray, m: int) -> Testimony:
    """A testimony on some of m outputs as one on all of them."""
    value, bound = np.full((1, m), np.nan), np.full((1, m), np.inf)
    value[:, outputs], bound[:, outputs] = testimony.value, testimony.bound
    noise = np.full(m, np.nan)
    noise[outputs] = testimony.noise
    reasons = {(row, int(outputs[output])): reason for (row, output), reason in testimony.reasons.items()}
    return Testimony(
        value=value, bound=bound, noise=noise, reasons=reasons, source=testimony.source, works=testimony.works
    )


def _assembled(parts: list[tuple[IntArray, Slots]], m: int) -> Slots:
    def whole(name: str) -> Any:
        result = np.empty((m, 1), dtype=getattr(parts[0][1], name).dtype)
        for part, slots in parts:
            result[part] = getattr(slots, name)
        return result

    names = ("value", "bound", "left", "right", "confirmed", "refuted", "reason")
    return Slots(**{name: whole(name) for name in names}, cut_short=any(slots.cut_short for _, slots in parts))


def _ended(reasons: np.ndarray[tuple[int, ...], np.dtype[np.object_]]) -> bool:
    return bool((reasons == SPENT).any())


def _parts(failing: BoolArray) -> list[IntArray]:
    """Outputs that are looked at together: those that fail apart from the others, and not too many."""
    groups = [np.flatnonzero(failing), np.flatnonzero(~failing)]
    return [group[first : first + SLOTS_AT_ONCE] for group in groups for first in range(0, group.size, SLOTS_AT_ONCE)]


def second_look(
    base: Array,
    rows: Array,
    room: Room,
    claim: Array,
    centre: Array,
    typical: Array,
    size: Array,
    accuracy: Accuracy,
    first: Slots,
    acquitting: BoolArray,
) -> Inquiry[Slots]:
    """Refuted slots keep that verdict only if the whole witness, at other steps along these directions, agrees.

    `first` holds what was seen before, in units of these directions; slots that are not refuted there are not judged.
    """
    desk = SlotDesk(claim, centre, typical, size, accuracy)
    desk.value, desk.bound, desk.left, desk.right = first.value, first.bound, first.left, first.right
    desk.refuted, desk.confirmed = first.refuted.copy(), first.confirmed.copy()
    desk.source[:] = "finite difference"
    everything = np.arange(len(rows))
    heard = yield from finite_difference(base, rows, room, centre)
    desk.second(heard, everything)
    if acquitting.any():
        alone = SlotDesk(claim, centre, typical, size, accuracy)
        alone.hear(heard, everything, replacing=True)
        cleared = acquitting[:, None] & ~desk.refuted & alone.confirmed
        desk.confirmed |= cleared
        desk.value = np.where(acquitting[:, None], alone.value, desk.value)
        desk.bound = np.where(acquitting[:, None], alone.bound, desk.bound)
        desk.reason[cleared] = ""
    # What was moved alone, or with fewer others, is seen better than what was moved with many.
    sharper = desk.refuted & (10 * desk.bound >= heard.bound.T) & np.isfinite(heard.value.T)
    desk.value = np.where(sharper, heard.value.T, desk.value)
    desk.bound = np.where(sharper, heard.bound.T, desk.bound)
    return _slots(desk.result(), cut_short=False)


def _so_far(desk: Desk, *, cut_short: bool = False) -> Slots:
    """What quick looks came to; what they leave open needs no reason yet."""
    return Slots(
        value=desk.value,
        bound=desk.bound,
        left=desk.left,
        right=desk.right,
        confirmed=desk.confirmed,
        refuted=desk.refuted,
        reason=desk.reason,
        cut_short=cut_short,
    )


def _slots(examined: Examined, *, cut_short: bool) -> Slots:
    return Slots(
        value=examined.value,
        bound=examined.bound,
        left=examined.left,
        right=examined.right,
        confirmed=np.asarray(examined.verdict == Verdict.CONFIRMED),
        refuted=np.asarray(examined.verdict == Verdict.REFUTED),
        reason=examined.reason,
        cut_short=cut_short,
    )


def room_of_one(room: Room, d: int, *, scale: float = 1.0) -> Room:
    """The room along one of several directions, on intervals of another width if asked for."""
    part = slice(d, d + 1)
    return Room(
        scale=room.scale[part] * scale,
        typical=room.typical[part],
        widest=room.widest[part] * scale,
        below=room.below[part],
        above=room.above[part],
        grain=room.grain[part],
    )
