"""set, go and back: look, judge, record, step, read back, compare."""

from __future__ import annotations

from trapd.controller.activity import Activity
from trapd.controller.desk import Desk
from trapd.controller.looking import look, require_reachable
from trapd.controller.registering import conclude, refusal, register
from trapd.controller.ticket import Ticket
from trapd.controller.travel import expand, run
from trapd.errors import BadRequest, Conflict
from trapd.guard.limits import realised
from trapd.setpoint import Request
from trapd.wiring import DRIVE_OUTPUT


def changing(desk: Desk, ticket: Ticket) -> Activity:
    """The activity behind set, go and back."""
    yield from look(desk)
    require_reachable(desk, [])
    target = target_of(desk, ticket.request)
    present = desk.situation.values
    require_reachable(desk, [name for name in target if target[name] != present[name]])
    verdict, ramp = yield desk.judge_move(desk.situation.contents, present, target)
    origin = yield from register(desk, ticket, verdict, ramp)
    if ramp is None:
        return refusal(verdict, origin.request)
    return (yield from conclude(desk, origin, run(desk, origin, expand(desk, ramp), len(ramp.steps))))


def target_of(desk: Desk, request: Request) -> dict[str, float]:
    """The state a request asks for, as the instruments will really take it."""
    situation = desk.situation
    off = [name for name, on in situation.outputs.items() if not on]
    if off:
        first = "`trapd on`" if not situation.outputs[DRIVE_OUTPUT] else "`trapd off`, and then `trapd on`,"
        raise Conflict(
            f"{request.kind}: {', '.join(off)} {'is' if len(off) == 1 else 'are'} off; {first} comes first; "
            "nothing was sent"
        )
    if request.kind == "back":
        if situation.previous is None:
            raise Conflict("back: no move has completed yet; nothing was sent")
        asked = situation.previous
    elif request.kind == "go":
        asked = desk.point(request.point)
    else:
        asked = request.values
    desk.require_setpoints(asked)
    if not asked:
        raise BadRequest("no setpoint was named; nothing was sent")
    target = realised(desk.model, {**situation.values, **asked})
    # What was not asked for stays exactly where it was found.
    kept = {name: value for name, value in situation.values.items() if name not in asked}
    return {**target, **kept}
