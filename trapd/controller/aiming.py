"""What a scan needs before it begins: who is held, instruments that answer, a plan, and photons."""

from __future__ import annotations

from math import ceil

from trapd.config.records import CounterSection, ScanSection
from trapd.controller.activity import Part
from trapd.controller.counting import Counted, count
from trapd.controller.desk import Desk
from trapd.controller.looking import require_reachable
from trapd.errors import Conflict, InstrumentUnreachable, NotFound
from trapd.guard.model import GuardModel
from trapd.guard.tickle import judge_tickle
from trapd.guard.verdict import judge
from trapd.scans.plan import Plan, plan_scan
from trapd.scans.prediction import predictions
from trapd.setpoint import Contents, Request, Values, Verdict

LEAST_SHOTS, LEAST_COUNTS = 3, 30
"""Counts with the tickle off before anything is emitted (somebody must be home), and whenever they fall under the floor:
so many, and so long that the floor itself would give this many photons."""


def section_of(desk: Desk, name: str | None) -> tuple[ScanSection, CounterSection]:
    """What the trap file says of the scan and of the counter."""
    scans, counter = desk.config.scans, desk.config.counter
    if name is None or name not in scans or counter is None:
        there_are = f"there are: {', '.join(scans)}" if scans else "there is none"
        raise NotFound(f"no scan {name!r} in the trap file; {there_are}; nothing was sent")
    return scans[name], counter


def require_known(desk: Desk, request: Request) -> None:
    """`NotFound` or `BadRequest` for a name that is none: what cannot be stops nothing that runs."""
    desk.require_setpoints(request.values)
    if request.point is not None:
        desk.point(request.point)
    if request.scan is not None:
        section_of(desk, request.scan)


def require_held(desk: Desk, section: ScanSection) -> str:
    """The species whose mode is measured; a scan wants to know who it tickles."""
    contents = desk.situation.contents
    held = ", ".join(contents.ions) or "nothing"
    if contents.presence != "held":
        raise Conflict(
            f"scan {section.name}: the trap's contents are {contents.presence}; say `trapd ions ...` first; nothing was sent"
        )
    if section.species is None and len(contents.ions) == 1:
        return next(iter(contents.ions))
    if section.species is None:
        raise Conflict(
            f"scan {section.name}: {held} are held and scans.{section.name}.species does not say which; nothing was sent"
        )
    if section.species not in contents.ions:
        raise Conflict(f"scan {section.name}: {section.species} is not held, {held} is; nothing was sent")
    return section.species


def require_ready(desk: Desk) -> None:
    """Everything on, everybody answering."""
    require_reachable(desk, desk.wiring.setpoints)
    situation = desk.situation
    off = [name for name, on in situation.outputs.items() if not on]
    if off:
        raise Conflict(f"scan: {', '.join(off)} off; nothing was sent")
    for name in (desk.wiring.tickle, desk.wiring.counter):
        if name is None or name in situation.unreachable:
            why = situation.unreachable.get(name or "", "it is not in the trap file")
            raise InstrumentUnreachable(f"scan: {name} does not answer ({why}); nothing was sent")
    if desk.wiring.tickle in situation.off_pending:
        raise Conflict(f"scan: {desk.wiring.tickle} is not confirmed off yet; nothing was sent")
    if situation.tickling:
        raise Conflict(
            "scan: the tickle's output is on, and no scan switched it on; `trapd stop` switches it off; nothing was sent"
        )


def judge_scan(
    model: GuardModel,
    section: ScanSection,
    species: str,
    level_v: float,
    contents: Contents,
    values: Values,
    counter: CounterSection,
) -> tuple[Verdict, Plan | None]:
    """The plan where the mode is expected at ``values``, and the verdict on it. Without a plan the state is refused;
    `Conflict` where it is not, but a part of the band in which the amplitude may stand holds nothing."""
    modes = predictions(model, contents.ions, values, section.model_uncertainty)
    here = next((one for one in modes if (one.species, one.mode) == (species, section.mode)), None)
    if here is None or model.tickle is None:
        verdict = judge(model, contents, values)
        if verdict.accepted:
            raise Conflict(
                f"scan {section.name}: {species} has no secular frequency over the whole band of the drive's gain; "
                "nothing was sent"
            )
        return verdict, None
    others = [one for one in modes if one is not here]
    plan = plan_scan(section, here, others, model.tickle, level_v, counter.floor_per_s)
    return judge_tickle(model, contents, values, plan.envelope), plan


def enough_shots(plan: Plan) -> int:
    """How many counts tell the floor from nobody."""
    return max(LEAST_SHOTS, ceil(LEAST_COUNTS / (plan.floor_per_s * plan.dwell_s)))


def first_shots(desk: Desk, plan: Plan) -> Part:
    """Counts with the tickle off, enough of them: they are the first points of the scan."""
    shots: list[Counted] = []
    for _ in range(enough_shots(plan)):
        counted = yield from count(desk, plan.dwell_s)
        shots.append(counted)
    if rate_of(shots) < plan.floor_per_s:
        raise Conflict(
            f"scan {plan.scan}: {rate_of(shots):.4g} counts a second are below the floor of {plan.floor_per_s:g}: "
            "nobody is home, or the light is off; the tickle stays off"
        )
    return shots


def rate_of(shots: list[Counted]) -> float:
    """Counts a second over all of them."""
    return sum(one.counts for one in shots) / sum(one.dwell_s for one in shots)
