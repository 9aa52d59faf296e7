"""A limit on evaluations and on time."""

import re
import time
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.evaluation.calls import Call, Engine, Outcome, assembled
from gradcheck.evaluation.ledger import Ledger

_UNITS = {"": 1.0, "s": 1.0, "sec": 1.0, "min": 60.0, "h": 3600.0}


def seconds_of(time_limit: float | str | None) -> float | None:
    """Seconds of a time limit: a number, or text such as ``"10min"``, ``"90 s"``, ``"2h"``.

    Raises
    ------
    UsageError
        If it is neither, or not > 0.

    Examples
    --------
    >>> seconds_of("10min")
    600.0
    """
    if time_limit is None:
        return None
    text = str(time_limit).strip()
    match = re.fullmatch(r"([0-9.]+)\s*([a-z]*)", text)
    try:
        seconds = float(match.group(1)) * _UNITS[match.group(2)] if match else -1.0
    except (KeyError, ValueError):
        seconds = -1.0
    if not 0 < seconds < float("inf"):
        raise UsageError(f'time_limit is {time_limit!r}; give seconds > 0, or text such as "90s", "10min", "2h"')
    return seconds


def evaluations_of(budget: int | None) -> int | None:
    """A number of evaluations, validated.

    Raises
    ------
    UsageError
        If it is not a whole number >= 1.
    """
    if budget is None:
        return None
    try:
        whole = int(budget) if float(budget).is_integer() and not isinstance(budget, bool | str) else 0
    except (TypeError, ValueError):
        whole = 0
    if whole < 1:
        raise UsageError(f"budget is {budget!r}; give a whole number of evaluations, at least 1")
    return whole


def budgeted(engine: Engine, ledger: Ledger, limit: int | None, seconds: float | None) -> Engine:
    """`engine`, which refuses what goes beyond `limit` evaluations or `seconds`.

    Points are admitted one by one in their order, so the outcome does not depend on how they are spread over workers.
    A refusal is a status, never an exception: algorithms return what they have.
    """
    if limit is None and seconds is None:
        return engine
    deadline = None if seconds is None else time.monotonic() + seconds

    def admit(calls: Sequence[Call]) -> list[Outcome]:
        spent = ledger.evaluations + ledger.calls["jax"] + ledger.calls["autograd"] + ledger.calls["slope"]
        admitted: list[Call] = []
        for call in calls:
            # Claims are the user's own derivative code: looking at them is what the budget is for.
            free = limit is None or call.kind == "claim"
            many = len(call) if free else min(len(call), max(0, (limit or 0) - spent))
            spent += 0 if free else many
            admitted.append(replace(call if many == len(call) else call.at(slice(many)), until=deadline))
        outcomes = iter(engine([call for call in admitted if len(call)]))
        return [
            _completed(next(outcomes) if len(part) else Outcome(), len(part), len(call), ledger)
            for part, call in zip(admitted, calls, strict=True)
        ]

    return admit


def _completed(outcome: Outcome, admitted: int, asked: int, ledger: Ledger) -> Outcome:
    """The outcome of all points asked for; what was not evaluated is counted as refused."""
    ledger.refused += asked - outcome.spent
    if not admitted or admitted == asked:
        return outcome
    places = np.arange(admitted)
    return assembled([(outcome, places, places)], asked, spent=outcome.spent)
