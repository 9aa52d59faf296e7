"""Runs several inquiries against one gate, round by round."""

from collections.abc import Mapping
from dataclasses import replace
from typing import Any, TypeVar

from gradcheck.evaluation.protocol import Gate, Inquiry, Request

Result = TypeVar("Result")


def conduct(inquiries: Mapping[str, Inquiry[Any]], gate: Gate) -> dict[str, Any]:
    """Results of all inquiries, by key.

    Each round gathers one request from every inquiry that is still waiting and hands them to the gate in a fixed order
    (worth, then key): never by completion, so that workers change nothing about the outcome. An inquiry whose request
    was refused sees it in the status and returns what it has.
    """
    waiting: dict[str, tuple[Inquiry[Any], Request]] = {}
    done: dict[str, Any] = {}
    for key, inquiry in inquiries.items():
        try:
            waiting[key] = inquiry, next(inquiry)
        except StopIteration as end:
            done[key] = end.value
    while waiting:
        keys = sorted(waiting, key=lambda key: (-waiting[key][1].worth, key))
        replies = gate([waiting[key][1] for key in keys])
        for key, reply in zip(keys, replies, strict=True):
            inquiry = waiting[key][0]
            try:
                waiting[key] = inquiry, inquiry.send(reply)
            except StopIteration as end:
                done[key] = end.value
                del waiting[key]
    return {key: done[key] for key in inquiries}


def conduct_one(inquiry: Inquiry[Result], gate: Gate) -> Result:
    """The result of a single inquiry."""
    result: Result = conduct({"": inquiry}, gate)[""]
    return result


def addressed(inquiry: Inquiry[Result], **where: Any) -> Inquiry[Result]:
    """`inquiry` with every request completed by `where` (``function=``, ``worth=`` ...).

    Algorithms stay ignorant of which function of a problem they look at; the verb that starts them tells the gate.
    """
    try:
        request = next(inquiry)
        while True:
            request = inquiry.send((yield replace(request, **where)))
    except StopIteration as end:
        result: Result = end.value
        return result


def counted(inquiry: Inquiry[Result]) -> Inquiry[tuple[Result, int]]:
    """The result of `inquiry`, and how many evaluations it asked for, cached or not: what it costs on its own."""
    asked = 0
    try:
        request = next(inquiry)
        while True:
            asked += request.offsets.size
            request = inquiry.send((yield request))
    except StopIteration as end:
        return end.value, asked
