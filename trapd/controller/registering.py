"""A request's entries: request, verdict and ramp in one commit before it begins, its result at the end."""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import asdict, dataclass
from typing import Any

from trapd.controller.activity import Activity, Part
from trapd.controller.desk import Desk
from trapd.controller.drafts import ramp_draft, request_draft, result_draft, unregistered_drafts, verdict_draft
from trapd.controller.looking import looking
from trapd.controller.ticket import Ticket
from trapd.errors import Bug, Superseded, TrapdError
from trapd.record import Draft, Entry
from trapd.setpoint import Intent, Ramp, Verdict


@dataclass(frozen=True, kw_only=True)
class Origin:
    """What every intent of a move or a scan refers to: the entries it came from, who and why. ``ramp``: the judged way,
    a scan's plan included."""

    request: int
    verdict: int
    ramp: int | None
    author: str
    why: str

    def intent(self, intent: Intent, step: int, **more: Any) -> Draft:
        """``more``: what the intent says beyond its table."""
        data = {
            **asdict(intent),
            "request": self.request,
            "verdict": self.verdict,
            "ramp": self.ramp,
            "step": step,
            "who": self.author,
            "why": self.why,
            **more,
        }
        return Draft(kind="intent", actor=self.author, data=data)


def register(desk: Desk, ticket: Ticket, verdict: Verdict, ramp: Ramp | None) -> Part:
    """Request, verdict and ramp in one commit. Tells whoever asked; returns the `Origin` of the move's intents."""
    if ramp is None:
        return (yield from enter(desk, ticket, verdict, None, {}))
    told = {"duration_s": ramp.duration_s, "steps": len(ramp.steps)}
    return (yield from enter(desk, ticket, verdict, ramp_draft(ticket.request, ramp), told))


def enter(
    desk: Desk, ticket: Ticket, verdict: Verdict, way: Draft | None, told: Mapping[str, Any], *more: Draft
) -> Part:
    """Request, verdict and the judged way of an accepted request in one commit, with ``more``; without a way it is refused
    and nothing follows. Tells whoever asked, ``told`` included."""
    yield from desk.write_what_waits()
    request = ticket.request
    drafts = [request_draft(request), verdict_draft(request, verdict)]
    if way is not None:
        drafts += [way, *more]
    entries: tuple[Entry, ...] = yield from commit(desk, ticket, drafts)
    origin = Origin(
        request=entries[0].seq,
        verdict=entries[1].seq,
        ramp=None if way is None else entries[2].seq,
        author=request.author,
        why=request.why,
    )
    if way is None:
        ticket.tell(refusal(verdict, origin.request))
    else:
        ticket.tell({"entry": origin.request, "accepted": True, "verdict": asdict(verdict), **told})
    return origin


def commit(desk: Desk, ticket: Ticket, drafts: list[Draft]) -> Part:
    """Write a request's first entries; the request itself is the first draft.

    If the request is superseded just then, its entries may still come to stand, and they get their result.
    """
    future = desk.record.append(*drafts)
    try:
        return (yield future)
    except Superseded as error:
        ticket.registered = ticket.answered_later = True
        desk.spawn(_never_begun(desk, ticket, future, error), to_the_end=True)
        raise


def _never_begun(desk: Desk, ticket: Ticket, future: Future[tuple[Entry, ...]], error: TrapdError) -> Activity:
    here = desk.situation.values
    try:
        entries = yield future
    except TrapdError:
        desk.note(*unregistered_drafts(ticket.request, here, error))
    else:
        desk.note(result_draft(ticket.request.author, entries[0].seq, here, here, returns=False, error=error))
    ticket.fail(error)
    return {}


def refusal(verdict: Verdict, entry: int) -> dict[str, Any]:
    return {"entry": entry, "accepted": False, "verdict": asdict(verdict)}


def conclude(desk: Desk, origin: Origin, part: Part, *, returns: bool = True) -> Activity:
    """Run a part of an activity to its end, however it ends, and write down how it ended; the answer of the request.

    ``returns``: `back` may lead to where this move began. What the part returns is in the answer.
    """
    start = desk.situation.values

    def result(error: TrapdError | None) -> Draft:
        end = desk.situation.values
        moved = returns and dict(end) != dict(start)
        return result_draft(origin.author, origin.request, start, end, returns=moved, error=error)

    try:
        more = yield from part
    except Exception as error:
        known = error if isinstance(error, TrapdError) else Bug(f"{type(error).__name__}: {error}")
        desk.note(result(known))
        if not isinstance(error, Superseded):
            desk.change(doubt=(*desk.situation.doubt, str(known)))
            desk.spawn(looking(desk))
        raise
    finally:
        desk.change(moving=None, scanning=None)
    if not returns:
        desk.change(previous=None, doubt=())  # everything has been commanded anew
    elif dict(desk.situation.values) != dict(start):
        desk.change(previous=dict(start))
    with suppress(TrapdError):  # done is done; if that could not be written it is kept and written later
        yield desk.note(result(None))
    answer = {"entry": origin.request, "accepted": True, "state": "done", "values": dict(desk.situation.values)}
    return answer | (more or {})
