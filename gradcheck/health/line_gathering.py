"""Several quests on one line share their samples: one request a round, within a budget."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Reply, Status
from gradcheck.health.line_samples import Line, Quest, Samples, no_samples
from gradcheck.records.arrays import Array, BoolArray, IntArray

HUGE = 1e100  # products of such values overflow
ABREAST = 4  # quests at a time
MOST_ROUNDS = 5000  # a quest that asks only for what is known already would never end


@dataclass(slots=True, kw_only=True, eq=False)
class Gathering:
    """The samples of a line while they are gathered.

    Attributes
    ----------
    exponents : ndarray of int, shape (m,)
        Values are kept times 2**-exponent: 0 unless their squares would overflow or vanish.
    asked : int
        Points asked for, which the budget limits; `evaluations` is what they cost (cached ones cost nothing).
    refused : bool
        The gate refused something: nothing more is asked.
    complete : bool
        False if a quest was ended by the budget.
    """

    line: Line
    budget: int
    worth: float
    samples: Samples = field(default_factory=no_samples)
    exponents: IntArray | None = None
    asked: int = 0
    evaluations: int = 0
    refused: bool = False
    complete: bool = True

    def sampled(self, t: Array) -> Inquiry[None]:
        """Add samples at t to those known."""
        wanted = self.samples.missing(self.line.realised(t))
        if wanted.size == 0:
            return
        reply, answered = yield from self._answers(wanted, fresh=False)
        if not answered.any():
            return
        values = np.asarray(reply.values[0], dtype=float)
        if self.exponents is None:
            self.exponents = _exponents(values)
        self.samples = self.samples.joined(
            wanted[answered], np.ldexp(values, -self.exponents)[answered], reply.status[0][answered]
        )

    def repeated(self, t: Array) -> Inquiry[tuple[Array, BoolArray]]:
        """Values (k, m) at known abscissae, evaluated once more, and which of them were answered."""
        reply, answered = yield from self._answers(t, fresh=True)
        return np.ldexp(np.asarray(reply.values[0], dtype=float), -self.known_exponents()), answered

    def known_exponents(self) -> IntArray:
        """(m,): the exponents, once there are samples."""
        return np.zeros(0, dtype=np.intp) if self.exponents is None else self.exponents

    def affords(self, points: int) -> bool:
        """Whether so many more points may be asked for."""
        return not self.refused and self.asked + points <= self.budget

    def pursued(self, quests: Mapping[int, Quest[Any]]) -> Inquiry[dict[int, Any]]:
        """Follow all quests until they end or the budget does: the results of those that ended, by key."""
        done: dict[int, Any] = {}
        waiting: dict[int, tuple[Quest[Any], Array]] = {}
        for key, quest in quests.items():
            _advance(key, quest, None, waiting, done)
        for _ in range(MOST_ROUNDS):
            served, together = self._served(waiting)
            if not waiting:
                return done
            yield from self.sampled(together)
            for key in served:
                if self.refused:
                    break
                _advance(key, waiting[key][0], self.samples, waiting, done)
        for quest, _ in waiting.values():
            quest.close()
        self.complete = False
        return done

    def _served(self, waiting: dict[int, tuple[Quest[Any], Array]]) -> tuple[list[int], Array]:
        """The quests whose turn it is, and their abscissae; those that cannot be afforded are ended.

        Only the first few quests go on at a time: when the budget ends, some have come to a result, rather than none.
        """
        served: list[int] = []
        together = np.empty(0)
        for key, (quest, t) in list(waiting.items()):
            if len(served) == ABREAST:
                break
            union = np.concatenate([together, t])
            if self.affords(self.samples.missing(self.line.realised(union)).size):
                together = union
                served.append(key)
                continue
            quest.close()
            del waiting[key]
            self.complete = False
        return served, together

    def _answers(self, t: Array, *, fresh: bool) -> Inquiry[tuple[Reply, BoolArray]]:
        reply = yield self.line.request(t, worth=self.worth, fresh=fresh)
        self.asked += t.size
        self.evaluations += reply.spent
        answered = np.asarray(reply.status[0] != Status.REFUSED)
        if not answered.all():
            self.refused, self.complete = True, False
        return reply, answered


def _exponents(values: Array) -> IntArray:
    """(m,): powers of two that bring outputs of extreme size to about 1."""
    size = np.where(np.isfinite(values), np.abs(values), 0.0).max(axis=0, initial=0.0)
    extreme = (size > HUGE) | ((size < 1.0 / HUGE) & (size > 0.0))
    return np.where(extreme, np.frexp(size)[1], 0).astype(np.intp)


def _advance(
    key: int,
    quest: Quest[Any],
    samples: Samples | None,
    waiting: dict[int, tuple[Quest[Any], Array]],
    done: dict[int, Any],
) -> None:
    try:
        # Windows and extrapolants over values of any size overflow now and then; that makes them unsure, not wrong.
        with np.errstate(all="ignore"):
            wanted = next(quest) if samples is None else quest.send(samples)
    except StopIteration as end:
        done[key] = end.value
        waiting.pop(key, None)
    else:
        waiting[key] = quest, np.atleast_1d(wanted)
