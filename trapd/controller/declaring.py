"""ions: a person says what is in the trap. Declaring *held* is refused unless the present state passes."""

from __future__ import annotations

from concurrent.futures import Future
from contextlib import suppress
from dataclasses import asdict, replace

from trapd.controller.activity import Activity, Part
from trapd.controller.desk import Desk
from trapd.controller.drafts import contents_draft, request_draft, verdict_draft
from trapd.controller.looking import follow_darkness, look, require_reachable
from trapd.controller.registering import refusal
from trapd.controller.ticket import Ticket
from trapd.errors import BadRequest, Conflict, NotFound, Superseded, TrapdError
from trapd.record import Draft, Entry
from trapd.setpoint import Contents
from trapd.wiring import DRIVE_OUTPUT


def declaring(desk: Desk, ticket: Ticket) -> Activity:
    """The activity behind `trapd ions`."""
    request = ticket.request
    contents = _checked(desk, ticket)
    yield from look(desk)
    able = contents.presence in ("held", "loading")
    require_reachable(desk, desk.wiring.setpoints if able else [])
    if able and not desk.situation.outputs[DRIVE_OUTPUT]:
        raise Conflict(f"ions {contents.presence}: the drive's output is off, nothing can be held; nothing was changed")
    contents = _completed(desk, contents)
    verdict = yield desk.judge(contents, desk.situation.values)
    accepted = verdict.accepted or contents.presence != "held"
    if accepted and not verdict.accepted:
        verdict = replace(verdict, accepted=True, reasons=(), warnings=verdict.warnings + verdict.reasons)
    drafts = [request_draft(request), verdict_draft(request, verdict)]
    if accepted:
        drafts.append(contents_draft(contents, request.author, request.why))
    yield from desk.write_what_waits()
    entries = yield from commit_contents(desk, ticket, drafts, contents if accepted else None)
    if not accepted:
        return refusal(verdict, entries[0].seq)
    return {
        "entry": entries[0].seq,
        "accepted": True,
        "state": "done",
        "contents": asdict(contents),
        "verdict": asdict(verdict),
    }


def commit_contents(desk: Desk, ticket: Ticket | None, drafts: list[Draft], contents: Contents | None) -> Part:
    """Write drafts that say what is in the trap, and take it over: what is on the disk is what counts, also when the
    request is superseded just then. Until that is known no other request begins."""
    future = desk.record.append(*drafts)
    try:
        entries = yield future
    except Superseded:
        if ticket is not None:
            ticket.registered = True
        desk.contents_open += 1
        desk.spawn(_taken_over(desk, future, contents), to_the_end=True)
        raise
    if contents is not None:
        _take_over(desk, contents)
    return entries


def _taken_over(desk: Desk, future: Future[tuple[Entry, ...]], contents: Contents | None) -> Activity:
    try:
        with suppress(TrapdError):
            yield future
            if contents is not None:
                _take_over(desk, contents)
    finally:
        desk.contents_open -= 1
    return {}


def _take_over(desk: Desk, contents: Contents) -> None:
    desk.change(contents=contents)
    if contents.presence == "loading":
        # Counted on the monotonic clock: a step of the wall clock neither ends nor prolongs a relaxed guard.
        desk.loading_until_ns = desk.clock.monotonic_ns() + int(desk.config.loading.expires_s * 1e9)
    follow_darkness(desk)


def _completed(desk: Desk, contents: Contents) -> Contents:
    """What was not said: who is guarded while loading, and after doubt. Nobody who may be there is dropped."""
    before = desk.situation.contents
    present = before.possible
    if contents.presence == "loading":
        # Of a trap of unknown contents everything in the catalogue may be in it, and stays guarded.
        unknown = before.presence == "unknown" and not present
        ions = dict.fromkeys(desk.model.catalogue, 1) if unknown else present
        expires_us = desk.clock.now_us() + int(desk.config.loading.expires_s * 1e6)
        return replace(contents, ions=ions, expires_us=expires_us)
    if contents.presence == "unknown" and not contents.ions:
        return replace(contents, ions=present)
    return contents


def _checked(desk: Desk, ticket: Ticket) -> Contents:
    request = ticket.request
    contents = request.contents
    if contents is None:
        raise BadRequest("ions: say what is in the trap: 40Ca+=2, none, unknown, or loading 40Ca+; nothing was changed")
    if not request.why.strip():
        raise BadRequest("ions: a reason is required (--why); nothing was changed")
    for name in (*contents.ions, *contents.incoming):
        if name not in desk.model.catalogue:
            raise NotFound(
                f"ions: {name!r} is not in the trap file's [[species]]; there are: {', '.join(desk.model.catalogue)}; "
                "nothing was changed"
            )
    if any(number < 1 for number in contents.ions.values()):
        raise BadRequest("ions: each species is held at least once; say `none` for an empty trap; nothing was changed")
    if contents.presence == "held" and not contents.ions:
        raise BadRequest("ions held: name at least one species; nothing was changed")
    if contents.presence == "loading" and not contents.incoming:
        raise BadRequest("ions loading: name the species that is loaded; nothing was changed")
    return contents
