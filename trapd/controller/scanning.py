"""scan: judged once as an envelope, then point by point, pass by pass, until the answer is good enough."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, replace
from typing import Any

from trapd.controller.activity import Activity, Part, Pause
from trapd.controller.aiming import (
    enough_shots,
    first_shots,
    judge_scan,
    rate_of,
    require_held,
    require_ready,
    section_of,
)
from trapd.controller.counting import count
from trapd.controller.course import Course
from trapd.controller.desk import Desk
from trapd.controller.looking import look
from trapd.controller.off import silencing
from trapd.controller.registering import conclude, enter, refusal
from trapd.controller.scan_drafts import due_run_draft, estimate_draft, finding_drafts, plan_draft
from trapd.controller.situation import Measured
from trapd.controller.ticket import Ticket
from trapd.controller.tickling import tickled_point
from trapd.errors import Conflict, TrapdError
from trapd.record import Draft
from trapd.scans.estimate import Finding, estimate, is_enough

LOOK_S = 10.0
"""How old a look at the instruments may be while a scan goes on."""

RECOOL_S = (0.2, 1.0)
"""How long the tickle stays off before each check of counts that fell under the floor."""


class _VanishedError(Exception):
    """Counts fell under the floor and did not come back."""


def scanning(desk: Desk, ticket: Ticket) -> Activity:
    """The activity behind `trapd scan` and behind every due run."""
    section, counter = section_of(desk, ticket.request.scan)
    yield from desk.wait_until_rested()
    yield from look(desk)
    looked_ns = desk.clock.monotonic_ns()
    species = require_held(desk, section)
    require_ready(desk)
    situation = desk.situation
    verdict, plan = yield desk.judges.submit(
        judge_scan,
        desk.model,
        section,
        species,
        desk.wiring.tickle_level_v(section.tickle_v),
        situation.contents,
        situation.values,
        counter,
    )
    if plan is None or not verdict.accepted:
        origin = yield from enter(desk, ticket, verdict, None, {})
        return refusal(verdict, origin.request)
    first = yield from first_shots(desk, plan)
    due = ticket.request.due
    more = [] if due is None else [due_run_draft(due, desk.clock.now_us())]
    told = {"plan": asdict(plan)}
    origin = yield from enter(desk, ticket, verdict, plan_draft(ticket.request, plan), told, *more)
    assert desk.wiring.tickle is not None
    course = Course(
        desk=desk,
        origin=origin,
        plan=plan,
        due=due,
        tickle=desk.wiring.tickle,
        judged=situation,
        looked_ns=looked_ns,
        began_us=first[0].at_us,
        began_ns=first[0].at_ns,
    )
    for counted in first:
        course.keep(counted)
    return (yield from conclude(desk, origin, _measuring(course)))


def _measuring(course: Course) -> Part:
    """However it ends, the tickle is off afterwards and what was counted is written down."""
    try:
        finding = yield from _all_passes(course)
    except BaseException as error:
        _abandon(course, error)
        raise
    return (yield from course.desk.to_its_end(_ending(course, finding)))


def _abandon(course: Course, error: BaseException) -> None:
    """A burst that its instrument has not begun yet must not begin after the tickle was told off; and nothing else moves
    before the last one has surely ended, whether or not its instrument still answers."""
    desk = course.desk
    if course.job is not None:
        course.job.cancel()
        desk.rest(course.plan.burst_s, course.burst_ns)
    if course.happened:
        desk.note(*course.take_happened())
    ends = silencing(desk, course.origin.author, f"the scan ended: {error}", course.origin.request)
    desk.spawn(ends, to_the_end=True)


def _ending(course: Course, finding: Finding) -> Activity:
    yield from silencing(course.desk, course.origin.author, "the scan is over", course.origin.request)
    told = yield from _conclusion(course, finding)
    return {"finding": told}


def _all_passes(course: Course) -> Part:
    plan, desk = course.plan, course.desk
    try:
        for number in range(1, plan.passes + 1):
            course.pass_number, course.point = number, course.point if number == 1 else 0
            yield from _one_pass(course)
            yield from _require_unchanged(course)
            finding = yield desk.estimates.submit(estimate, course.points(), plan.question)
            finding = _flagged(course, finding)
            if finding.state == "vanished":
                yield from _confirm(course)
                return replace(_vanished(course, finding), state="unclear", message="The counts vanished for a while.")
            if number == plan.passes or _is_over(course) or is_enough(finding, plan.question, number):
                return finding
            yield from _write(course, estimate_draft(course.origin, number, len(course.counted), finding))
    except _VanishedError:
        yield from look(desk)  # RF may be off; whatever it is, it is known then
        finding = yield desk.estimates.submit(estimate, course.points(), plan.question)
        return _vanished(course, finding)


def _one_pass(course: Course) -> Part:
    for frequency_hz in course.plan.order(course.origin.request, course.pass_number):
        course.tell()
        if _is_over(course):
            return
        if course.desk.clock.monotonic_ns() - course.looked_ns > LOOK_S * 1e9:
            yield from _require_unchanged(course)
        if frequency_hz is None:
            counted = yield from count(course.desk, course.plan.dwell_s)
        else:
            counted = yield from tickled_point(course, frequency_hz)
        course.keep(counted)
        latest = course.counted[-enough_shots(course.plan) :]
        if counted.rate_per_s < course.plan.floor_per_s and rate_of(latest) < course.plan.floor_per_s:
            yield from _confirm(course)


def _confirm(course: Course) -> Part:
    """Counts under the floor may be a deep resonance, or an ion that is hot, dark or gone: the tickle is off; cool, and
    look again before anything is concluded."""
    for recool_s in RECOOL_S:
        yield Pause(recool_s)
        shots = []
        for _ in range(enough_shots(course.plan)):
            counted = yield from count(course.desk, course.plan.dwell_s)
            course.keep(counted)
            shots.append(counted)
        if rate_of(shots) >= course.plan.floor_per_s:
            return
    raise _VanishedError


def _conclusion(course: Course, finding: Finding) -> Part:
    """The finding on disk, with the secular frequency when there is one; what it says of the present situation."""
    desk, plan = course.desk, course.plan
    drafts = finding_drafts(
        course.origin,
        plan,
        finding,
        began_us=course.began_us,
        passes=course.pass_number,
        points=len(course.counted),
        first=len(course.happened),
    )
    if finding.state == "vanished":
        drafts.append(_alarm(course, finding))
        desk.change(doubt=(*desk.situation.doubt, finding.message))
    entries = yield from _write(course, *drafts)
    told = next(one for one in entries if one.kind == "finding")
    if finding.state == "found":
        desk.change(measured={**desk.situation.measured, plan.scan: _measured(course, finding, told.data, told.seq)})
    return {**told.data, "seq": told.seq}


def _write(course: Course, *drafts: Draft) -> Part:
    """What happened, and these, in one commit. A scan whose record cannot be written ends."""
    happened = course.take_happened()
    try:
        return (yield course.desk.record.append(*happened, *drafts))
    except TrapdError:
        course.desk.note(*happened)
        raise


def _measured(course: Course, finding: Finding, data: Mapping[str, Any], entry: int) -> Measured:
    assert finding.frequency_hz is not None
    assert finding.uncertainty_hz is not None
    return Measured(
        entry=entry,
        scan=course.plan.scan,
        species=course.plan.species,
        mode=course.plan.mode,
        frequency_hz=finding.frequency_hz,
        uncertainty_hz=finding.uncertainty_hz,
        predicted_hz=course.plan.predicted_hz,
        predicted_uncertainty_hz=course.plan.predicted_uncertainty_hz,
        at_us=data["at_us"],
        values=dict(course.desk.situation.values),
    )


def _flagged(course: Course, finding: Finding) -> Finding:
    """What only the scan itself knows of its result."""
    flags = list(finding.flags)
    if finding.frequency_hz is not None and course.plan.is_ambiguous(finding.frequency_hz):
        flags.append("identity_ambiguous")
    if _is_over(course):
        flags.append("timeout")
    return replace(finding, flags=tuple(dict.fromkeys(flags)))


def _vanished(course: Course, finding: Finding) -> Finding:
    """Without a number, whatever was seen before: who relies on it would rely on a scan that lost its ion."""
    floor_per_s = course.plan.floor_per_s
    known = finding.message if finding.state == "vanished" else "The counts vanished."
    return Finding(
        state="vanished",
        flags=("counts_vanished",),
        message=f"{known} They stayed under {floor_per_s:g} /s with the tickle off: the ion may be dark, hot or lost. The "
        "outputs hold.",
        rate_per_s=finding.rate_per_s,
    )


def _alarm(course: Course, finding: Finding) -> Draft:
    data = {"condition": "counts vanished", "request": course.origin.request, "message": finding.message}
    return Draft(kind="alarm", actor="trapd", data=data)


def _is_over(course: Course) -> bool:
    return course.seconds > course.plan.longest_s


def _require_unchanged(course: Course) -> Part:
    """The instruments are looked at as they are while nothing moves: what was judged must still stand."""
    judged = course.judged
    yield from look(course.desk)
    course.looked_ns = course.desk.clock.monotonic_ns()
    now = course.desk.situation
    changed = [name for name, value in now.values.items() if value != judged.values.get(name)]
    changed += [name for name, on in now.outputs.items() if on != judged.outputs.get(name)]
    changed += [name for name in now.unreachable if name not in judged.unreachable]
    changed += ["contents"] if now.contents != judged.contents else []
    changed += ["tickle.output"] if now.tickling else []
    if changed:
        words = "; ".join(now.doubt) or "somebody has changed it"
        raise Conflict(
            f"scan {course.plan.scan}: {', '.join(changed)}: no longer as judged ({words}); the scan ends here"
        )
