"""scan: judged once as an envelope, then point by point, pass by pass, until the answer is good enough."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, replace
from typing import Any

from trapd.controller.activity import Activity, Part, Pause
from trapd.controller.aiming import (
    FIRST_SHOTS,
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

RECOOL_S = (0.2, 1.0)
"""How long the tickle stays off before each check of counts that fell under the floor."""


class _VanishedError(Exception):
    """Counts fell under the floor and did not come back."""


def scanning(desk: Desk, ticket: Ticket) -> Activity:
    """The activity behind `trapd scan` and behind every due run."""
    section, counter = section_of(desk, ticket.request.scan)
    yield from look(desk)
    species = require_held(desk, section)
    require_ready(desk)
    situation = desk.situation
    verdict, plan = yield desk.judges.submit(
        judge_scan, desk.model, section, species, situation.contents, situation.values, counter
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
        finding = yield from _conclusion(course, finding)
    except BaseException as error:
        if course.happened:
            course.desk.note(*course.take_happened())
        ends = silencing(course.desk, course.origin.author, f"the scan ended: {error}", course.origin.request)
        course.desk.spawn(ends, to_the_end=True)
        raise
    yield from silencing(course.desk, course.origin.author, "the scan is over", course.origin.request)
    return {"finding": finding}


def _all_passes(course: Course) -> Part:
    plan = course.plan
    try:
        for number in range(1, plan.passes + 1):
            course.pass_number, course.point = number, course.point if number == 1 else 0
            yield from _one_pass(course)
            finding = yield course.desk.judges.submit(estimate, course.points(), plan.question)
            finding = _flagged(course, finding)
            if number == plan.passes or _is_over(course) or is_enough(finding, plan.question, number):
                return finding
            estimated = estimate_draft(course.origin, number, len(course.counted), finding)
            yield from _write(course, estimated)
            yield from _require_unchanged(course)
    except _VanishedError:
        finding = yield course.desk.judges.submit(estimate, course.points(), plan.question)
        return _vanished(course, finding)


def _one_pass(course: Course) -> Part:
    for frequency_hz in course.plan.order(course.origin.request, course.pass_number):
        course.tell()
        if _is_over(course):
            return
        if frequency_hz is None:
            counted = yield from count(course.desk, course.plan.dwell_s)
        else:
            counted = yield from tickled_point(course, frequency_hz)
        course.keep(counted)
        if counted.rate_per_s < course.plan.floor_per_s:
            yield from _confirm(course)


def _confirm(course: Course) -> Part:
    """Counts under the floor may be a deep resonance, or an ion that is hot, dark or gone: the tickle is off; cool, and
    look again before anything is concluded."""
    for recool_s in RECOOL_S:
        yield Pause(recool_s)
        shots = []
        for _ in range(FIRST_SHOTS):
            counted = yield from count(course.desk, course.plan.dwell_s)
            course.keep(counted)
            shots.append(counted)
        if rate_of(shots) >= course.plan.floor_per_s:
            course.scares += 1
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
    if finding.state == "vanished":
        return finding
    return replace(
        finding,
        state="vanished",
        frequency_hz=None,
        uncertainty_hz=None,
        flags=tuple(dict.fromkeys((*finding.flags, "counts_vanished"))),
        message=f"counts fell under the floor of {course.plan.floor_per_s:g} /s and did not come back with the tickle off: "
        "the ion may be dark, hot or lost; the outputs hold",
    )


def _alarm(course: Course, finding: Finding) -> Draft:
    data = {"condition": "counts vanished", "request": course.origin.request, "message": finding.message}
    return Draft(kind="alarm", actor="trapd", data=data)


def _is_over(course: Course) -> bool:
    return course.seconds > course.plan.longest_s


def _require_unchanged(course: Course) -> Part:
    """Between passes the instruments are looked at, as they are while nothing moves."""
    before = course.desk.situation
    yield from look(course.desk)
    after = course.desk.situation
    if (
        after.unreachable.keys() != before.unreachable.keys()
        or after.doubt != before.doubt
        or after.contents != before.contents
    ):
        words = "; ".join((*after.doubt, *(f"{k}: {v}" for k, v in after.unreachable.items()))) or "the contents"
        raise Conflict(f"scan {course.plan.scan}: something changed meanwhile ({words}); the scan ends here")
