"""on and empty: RF comes on at the least level and is ramped; before that every supply stands at 0 V."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import chain

from trapd.controller.activity import Activity, Part, Pause
from trapd.controller.declaring import commit_contents
from trapd.controller.desk import Desk
from trapd.controller.drafts import contents_draft
from trapd.controller.looking import DARK_S, look, require_reachable, verified_dark
from trapd.controller.registering import Origin, conclude, refusal, register
from trapd.controller.ticket import Ticket
from trapd.controller.travel import expand, run
from trapd.errors import BadRequest, Conflict, NotConfirmed
from trapd.guard.contents import NOBODY
from trapd.guard.limits import realised
from trapd.setpoint import AMPLITUDE, FREQUENCY, Values
from trapd.wiring import DRIVE_OUTPUT, Command, output_of


def switching_on(desk: Desk, ticket: Ticket) -> Activity:
    """`trapd on`: outputs on at nothing, then a judged ramp to the point, then the warm-up of the file.

    A supply that is on already is ramped from where it stands; a setpoint that the point does not name ends at 0 V.
    """
    request = ticket.request
    _require_why(ticket)
    yield from look(desk)
    situation = desk.situation
    require_reachable(desk, desk.wiring.setpoints)
    if situation.contents.presence != "none":
        raise Conflict(
            f"on: only from an empty trap, and the trap's contents are {situation.contents.presence}; "
            "say `trapd ions none --why ...` if you know it is empty; nothing was sent"
        )
    pending = [name for name in situation.off_pending if name in desk.wiring.holding]  # a tickle ends by itself
    if pending:
        raise Conflict(f"on: `off` is not confirmed yet by {', '.join(pending)}; nothing was sent")
    if situation.outputs[DRIVE_OUTPUT]:
        raise Conflict("on: the drive's output is on already; `set` and `go` move it; nothing was sent")
    point = desk.point(request.point)
    dark = dict.fromkeys(desk.wiring.setpoints, 0.0)
    target = realised(desk.model, {**dark, FREQUENCY: situation.values[FREQUENCY], **point})
    start = _start(desk, target)
    verdict, ramp = yield desk.judge_move(NOBODY, start, target)
    origin = yield from register(desk, ticket, verdict, ramp)
    if ramp is None:
        return refusal(verdict, origin.request)
    supplies = [
        command
        for name in desk.wiring.electrodes
        if not situation.outputs[output_of(name)]
        for command in (desk.wiring.command(desk.model, start, name), desk.wiring.output(name, True))
    ]
    commands = chain(supplies, _drive_on(desk, start), expand(desk, ramp))
    return (yield from conclude(desk, origin, _warming_up(desk, origin, commands, len(ramp.steps)), returns=False))


def emptying(desk: Desk, ticket: Ticket) -> Activity:
    """`trapd empty`: RF off until nothing can be left, then back to a point, or not."""
    request = ticket.request
    _require_why(ticket)
    yield from look(desk)
    require_reachable(desk, desk.wiring.setpoints)
    situation = desk.situation
    off = [name for name, on in situation.outputs.items() if not on]
    if off:
        raise Conflict(f"empty: {', '.join(off)} off already; nothing was sent")
    there = {} if request.stay_off else desk.point(request.point)
    target = realised(desk.model, {**situation.values, **there})
    start = _start(desk, target)
    if request.stay_off:
        target = start
    verdict, ramp = yield desk.judge_move(NOBODY, start, target)
    origin = yield from register(desk, ticket, verdict, ramp)
    if ramp is None:
        return refusal(verdict, origin.request)
    again = [] if request.stay_off else chain(_drive_on(desk, start), expand(desk, ramp))
    return (yield from conclude(desk, origin, _letting_go(desk, origin, again, len(ramp.steps)), returns=False))


def _warming_up(desk: Desk, origin: Origin, commands: Iterable[Command], steps: int) -> Part:
    yield from run(desk, origin, commands, steps)
    yield Pause(desk.config.drive.warm_up_s)


def _letting_go(desk: Desk, origin: Origin, again: Iterable[Command], steps: int) -> Part:
    yield from run(desk, origin, [desk.wiring.output(AMPLITUDE, False)])
    yield Pause(DARK_S)
    if not (yield from verified_dark(desk)):
        raise NotConfirmed(
            f"empty: {desk.wiring.drive} did not confirm RF off after {DARK_S:g} s; the contents stay as they were"
        )
    yield from commit_contents(desk, None, [contents_draft(NOBODY, origin.author, origin.why)], NOBODY)
    yield from run(desk, origin, again, steps)


def _start(desk: Desk, target: Values) -> dict[str, float]:
    """The state right after switch-on: least amplitude at the frequency of the target, supplies where they stand."""
    least = desk.wiring.least_amplitude_v(desk.model, target[FREQUENCY])
    supplies = {name: desk.situation.values[name] for name in desk.wiring.electrodes}
    return {FREQUENCY: target[FREQUENCY], AMPLITUDE: least, **supplies}


def _drive_on(desk: Desk, start: Values) -> list[Command]:
    return [
        desk.wiring.command(desk.model, start, FREQUENCY),
        desk.wiring.command(desk.model, start, AMPLITUDE),
        desk.wiring.output(AMPLITUDE, True),
    ]


def _require_why(ticket: Ticket) -> None:
    if not ticket.request.why.strip():
        raise BadRequest(f"{ticket.request.kind}: a reason is required (--why); nothing was sent")
