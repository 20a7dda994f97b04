"""Interlocks: each gauge is read again and again; what a trip does; how a person clears it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict, replace
from typing import Any

from trapd.config.build import INTERLOCK_UNIT, interlock_of
from trapd.controller.activity import Activity, Part, Pause, Within
from trapd.controller.carry_out import Carried, carry_out
from trapd.controller.desk import Desk
from trapd.controller.drafts import DAEMON, outcome_draft
from trapd.controller.off import silencing
from trapd.controller.ticket import Ticket
from trapd.controller.travel import ARRIVED, expand, take_over
from trapd.errors import BadRequest, Conflict, NotFound
from trapd.guard.interlock import InterlockLimits, InterlockState, clear, step
from trapd.guard.rundown import plan_rundown
from trapd.record import Draft, SameCommit
from trapd.setpoint import Request
from trapd_drivers.errors import DriverError, InstrumentRefused
from trapd_drivers.interfaces import Gauge, Instrument

POLL_S = 0.1
ANSWER_S = 2.0
"""Beyond it a gauge has not been read."""

_STOPPED = ("set", "go", "back", "on", "empty", "scan")
"""What a tripped interlock keeps from happening until a person has cleared it."""


def watching(desk: Desk, name: str, trip: Callable[[str], None]) -> Activity:
    """One interlock, for as long as the daemon runs. ``trip`` is called once for each trip."""
    limits = interlock_of(desk.config.interlocks[name])
    while True:
        reading = yield from _read(desk, name)
        before = desk.situation.interlocks[name]
        after = step(limits, before, reading, desk.clock.monotonic_ns() / 1e9)
        _take(desk, name, after)
        if _told(before) != _told(after):
            desk.note(_draft(limits, after, DAEMON, ""))
        if after.tripped and not before.tripped:
            trip(name)
        yield Pause(POLL_S)


def clearing(desk: Desk, ticket: Ticket) -> Activity:
    """`trapd clear`: refused while the gauge still says what tripped it."""
    request = ticket.request
    name = request.interlock or ""
    if name not in desk.situation.interlocks:
        there_are = ", ".join(desk.situation.interlocks) or "none"
        raise NotFound(f"clear: no interlock {name!r} in the trap file; there are: {there_are}; nothing was cleared")
    if not request.why.strip():
        raise BadRequest("clear: a reason is required (--why); nothing was cleared")
    state = desk.situation.interlocks[name]
    if not state.tripped:
        raise Conflict(f"clear: interlock {name} has not tripped; nothing was cleared")
    limits = interlock_of(desk.config.interlocks[name])
    now_s = desk.clock.monotonic_ns() / 1e9
    cleared = clear(limits, state, now_s)
    entries = yield desk.record.append(_draft(limits, cleared, request.author, request.why))
    _take(desk, name, replace(desk.situation.interlocks[name], tripped=False))
    return {"entry": entries[0].seq, "accepted": True, "state": "done", "interlock": asdict(cleared)}


def require_untripped(desk: Desk, request: Request) -> None:
    """`Conflict` while an interlock has tripped and nobody has cleared it."""
    tripped = [name for name, state in desk.situation.interlocks.items() if state.tripped]
    if tripped and request.kind in _STOPPED:
        raise Conflict(
            f"{request.kind}: interlock {', '.join(tripped)} has tripped; `trapd clear {tripped[0]} --why ...` comes first; "
            "nothing was sent"
        )


def running_down(desk: Desk, why: str) -> Activity:
    """Tickle off, RF to zero, then DC, within slew and voltage limits; as with `off`, each command is sent first and written
    down afterwards. Ends early where an instrument does not follow; whoever asked switches everything off then."""
    yield from silencing(desk, DAEMON, why)
    ramp = plan_rundown(desk.model, desk.situation.values)
    for command in expand(desk, ramp):
        job = carry_out(command, desk.clock, live=True)
        carried: Carried = yield desk.submit(command.intent.instrument, job, urgent=True)
        take_over(desk, command, carried)
        data = {**asdict(command.intent), "step": command.step, "who": DAEMON, "why": why}
        intent = Draft(kind="intent", actor=DAEMON, data=data)
        desk.note(intent, outcome_draft(DAEMON, SameCommit(0), carried.outcome))
        if carried.outcome.state not in ARRIVED:
            break
        yield Pause(command.wait_s)
    return {}


def _read(desk: Desk, name: str) -> Part:
    """In the unit of the levels; None when it cannot be read."""

    def job(instrument: Instrument) -> float:
        assert isinstance(instrument, Gauge)
        value = instrument.read_value()
        if instrument.unit != INTERLOCK_UNIT:
            raise InstrumentRefused(
                f"{instrument.resource}: reads {instrument.unit}, the interlock wants {INTERLOCK_UNIT}"
            )
        return value

    try:
        return (yield Within(desk.workers[desk.wiring.gauges[name]].submit(job), ANSWER_S))
    except (DriverError, TimeoutError):
        return None


def _take(desk: Desk, name: str, state: InterlockState) -> None:
    desk.change(interlocks={**desk.situation.interlocks, name: state})


def _told(state: InterlockState) -> tuple[bool, bool, bool]:
    return state.warned, state.tripped, state.unreadable


def _draft(limits: InterlockLimits, state: InterlockState, author: str, why: str) -> Draft:
    data: dict[str, Any] = {
        "name": limits.name,
        "value": state.value,
        "unit": limits.unit,
        "warned": state.warned,
        "tripped": state.tripped,
        "unreadable": state.unreadable,
        "action": limits.action,
        "why": why,
    }
    return Draft(kind="interlock", actor=author, data=data)
