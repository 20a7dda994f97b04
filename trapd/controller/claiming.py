"""claim, release, pause, resume: data that others respect, written down before it counts. Nothing is sent."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import asdict
from typing import Any

from trapd.controller.activity import Activity, Pause
from trapd.controller.desk import Desk
from trapd.controller.interlocking import clearing, require_untripped
from trapd.controller.precedence import claimed_by_another, paused
from trapd.controller.situation import Claim, SchedulePause
from trapd.controller.ticket import Ticket
from trapd.errors import BadRequest, Conflict
from trapd.record import Draft
from trapd.setpoint import Request

_SOON_S = 0.005


def claiming(desk: Desk, ticket: Ticket) -> Activity:
    """From here on others need ``interrupt``, and the schedule waits."""
    request = ticket.request
    _require_why(ticket)
    _require_future(desk, ticket)
    while desk.claiming:  # two at once: the second one is held to what the first became
        yield Pause(_SOON_S)
    refusal = claimed_by_another(desk.situation.claim, request)
    if refusal is not None:
        raise refusal
    desk.claiming = True
    try:
        data = {"state": "claimed", "who": request.author, "why": request.why, "until_us": request.until_us}
        entry = (yield desk.record.append(Draft(kind="claim", actor=request.author, data=data)))[0].seq
    finally:
        desk.claiming = False
    desk.change(claim=Claim(entry=entry, who=request.author, why=request.why, until_us=request.until_us))
    return _answer(desk, entry)


def releasing(desk: Desk, ticket: Ticket) -> Activity:
    claim, request = desk.situation.claim, ticket.request
    if claim is None:
        raise Conflict("release: nobody claims the trap; nothing was changed")
    if claim.who != request.author and not request.interrupt:
        raise Conflict(f"release: {claim.who} claims the trap ({claim.why}); --interrupt ends it all the same")
    return (yield from _end_claim(desk, request.author, "released", request.why))


def revoking(desk: Desk, author: str, why: str) -> Activity:
    """Off and trips end every claim."""
    return (yield from _end_claim(desk, author, "revoked", why))


def pausing(desk: Desk, ticket: Ticket) -> Activity:
    """Nothing of the schedule begins before the time given; a scheduled scan that runs goes on."""
    request = ticket.request
    _require_why(ticket)
    _require_future(desk, ticket)
    if request.until_us is None:
        raise BadRequest("pause: say until when (--until); nothing was changed")
    data = {"state": "paused", "why": request.why, "until_us": request.until_us}
    entry = (yield desk.record.append(Draft(kind="pause", actor=request.author, data=data)))[0].seq
    pause = SchedulePause(entry=entry, who=request.author, why=request.why, until_us=request.until_us)
    desk.change(pause=pause)
    return _answer(desk, entry)


def resuming(desk: Desk, ticket: Ticket) -> Activity:
    if desk.situation.pause is None:
        raise Conflict("resume: the schedule is not paused; nothing was changed")
    request = ticket.request
    data = {"state": "resumed", "why": request.why, "until_us": None}
    entry = (yield desk.record.append(Draft(kind="pause", actor=request.author, data=data)))[0].seq
    desk.change(pause=None)
    return _answer(desk, entry)


IMMEDIATE: Mapping[str, Callable[[Desk, Ticket], Activity]] = {
    "claim": claiming,
    "release": releasing,
    "pause": pausing,
    "resume": resuming,
    "clear": clearing,
}
"""Requests that wait behind nothing."""


def drop_what_is_over(desk: Desk) -> None:
    """A claim or pause whose time has passed. Its entry says until when; no other one is needed."""
    now_us, situation = desk.clock.now_us(), desk.situation
    if situation.claim is not None and (situation.claim.until_us or now_us) < now_us:
        desk.change(claim=None)
    if situation.pause is not None and situation.pause.until_us < now_us:
        desk.change(pause=None)


def require_allowed(desk: Desk, request: Request) -> None:
    """`Conflict` under somebody else's claim, and for the schedule in a pause."""
    drop_what_is_over(desk)
    situation = desk.situation
    refusal = claimed_by_another(situation.claim, request) or paused(situation.pause, request)
    if refusal is not None:
        raise refusal
    require_untripped(desk, request)


def _end_claim(desk: Desk, author: str, state: str, why: str) -> Activity:
    claim = desk.situation.claim
    who = None if claim is None else claim.who
    draft = Draft(kind="claim", actor=author, data={"state": state, "who": who, "why": why, "until_us": None})
    desk.change(claim=None)
    entry = (yield desk.note(draft))[0].seq
    return _answer(desk, entry)


def _answer(desk: Desk, entry: int) -> dict[str, Any]:
    claim, pause = desk.situation.claim, desk.situation.pause
    return {
        "entry": entry,
        "accepted": True,
        "state": "done",
        "claim": claim and asdict(claim),
        "pause": pause and asdict(pause),
    }


def _require_why(ticket: Ticket) -> None:
    if not ticket.request.why.strip():
        raise BadRequest(f"{ticket.request.kind}: a reason is required (--why); nothing was changed")


def _require_future(desk: Desk, ticket: Ticket) -> None:
    until_us = ticket.request.until_us
    if until_us is not None and until_us <= desk.clock.now_us():
        raise BadRequest(f"{ticket.request.kind}: the time given has passed already; nothing was changed")
