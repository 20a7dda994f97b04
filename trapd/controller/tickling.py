"""One point of a scan: an intent on disk, a burst that ends by itself, a count while it lasts, and the tickle off again."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future
from math import isclose

from trapd.clock import Clock
from trapd.controller.activity import Activity, Part, Within
from trapd.controller.carry_out import Carried, failed
from trapd.controller.counting import Counted, count
from trapd.controller.course import Course
from trapd.controller.desk import Desk
from trapd.controller.drafts import outcome_draft
from trapd.controller.looking import ANSWER_S
from trapd.controller.travel import commit_next
from trapd.errors import Bug, InstrumentUnreachable, NotConfirmed, Superseded
from trapd.scans.plan import Plan
from trapd.setpoint import TICKLE, TICKLE_FREQUENCY, TICKLE_LEVEL, Envelope, Intent, Outcome
from trapd_drivers.errors import DriverError
from trapd_drivers.interfaces import Instrument, RfSource, Scale

TRIES = 3
"""How often a point is taken again whose count may have outlived its burst."""


def tickled_point(course: Course, frequency_hz: float) -> Part:
    """Excite at ``frequency_hz`` for one dwell and count; the `Counted`. The tickle is off when this returns."""
    for _ in range(TRIES):
        counted: Counted | None = yield from _try(course, frequency_hz)
        if counted is not None:
            return counted
    raise NotConfirmed(
        f"{course.tickle}: {TRIES} bursts of {course.plan.burst_s:g} s may have ended before their counts did, the instruments "
        "answer too slowly; none of them was used, the scan ends here"
    )


def _try(course: Course, frequency_hz: float) -> Part:
    """None when the count may have gone on longer than the burst, or the burst was over when it ended: a count of half a
    tickle is not used."""
    desk, plan = course.desk, course.plan
    scales = desk.wiring.scales
    frequency_hz = scales[TICKLE_FREQUENCY].quantise(frequency_hz)
    intent = Intent(
        setpoint=TICKLE,
        value=frequency_hz,
        unit="Hz",
        instrument=course.tickle,
        channel=None,
        quantity="burst",
        level=plan.level_v,
    )
    _require_within(plan.envelope, intent, plan.burst_s)
    more = {"burst_s": plan.burst_s, "dwell_s": plan.dwell_s, "pass_number": course.pass_number}
    draft = course.origin.intent(intent, course.point, **more)
    course.intent = yield from commit_next(desk, course.origin, course.take_happened(), draft)
    job = _burst(intent, plan, scales[TICKLE_FREQUENCY], scales[TICKLE_LEVEL], desk.clock)
    course.burst_ns = desk.clock.monotonic_ns()
    course.job = desk.submit(course.tickle, job)
    carried: Carried = yield from _carry(course, course.job)
    course.happened.append(outcome_draft(course.origin.author, course.intent, carried.outcome))
    _require_begun(course.tickle, carried.outcome)
    counted: Counted = yield from count(desk, plan.dwell_s, frequency_hz)
    lasted: bool = yield from _silence(course)
    return counted if lasted and counted.over_ns <= carried.at_ns + int(plan.burst_s * 1e9) else None


def _require_within(envelope: Envelope, intent: Intent, burst_s: float) -> None:
    """What was judged is what is sent; a plan that leaves its own envelope is our bug."""
    inside = envelope.low_hz <= intent.value <= envelope.high_hz and 0 < intent.level <= envelope.level_v
    if not (inside and burst_s <= envelope.burst_s):
        raise Bug(f"a tickle of {intent.value:.9g} Hz, {intent.level:.4g} V is outside {envelope}; nothing was sent")


def _burst(intent: Intent, plan: Plan, frequency: Scale, level: Scale, clock: Clock) -> Callable[[Instrument], Carried]:
    """A job that never raises. Both values are read back before anything is emitted; the burst counts from just before
    the instrument was told."""

    def job(instrument: Instrument) -> Carried:
        assert isinstance(instrument, RfSource)
        sent_us, at_ns = clock.now_us(), clock.monotonic_ns()
        try:
            if instrument.read_output():  # nothing is changed under a sine that somebody else switched on
                error = "its output is on, and no scan switched it on; no burst was started"
                return Carried(outcome=Outcome(state="not confirmed", sent_us=sent_us, error=error), at_ns=at_ns)
            instrument.set_frequency_hz(intent.value)
            if not _agrees(level, instrument.read_level_v(), intent.level):
                instrument.set_level_v(intent.level)
            found_hz, found_v = instrument.read_frequency_hz(), instrument.read_level_v()
            if not (_agrees(frequency, found_hz, intent.value) and _agrees(level, found_v, intent.level)):
                return Carried(outcome=_differs(intent, found_hz, found_v, sent_us), at_ns=at_ns)
            at_ns = clock.monotonic_ns()
            instrument.start_burst(plan.burst_s)
        except Exception as error:
            return Carried(outcome=failed(error, sent_us), at_ns=at_ns)
        now_us = clock.now_us()
        outcome = Outcome(
            state="confirmed",
            sent_us=sent_us,
            acknowledged_us=now_us,
            verified_us=now_us,
            readback=found_hz,
            difference=found_hz - intent.value,
        )
        return Carried(outcome=outcome, at_ns=at_ns)

    return job


def _agrees(scale: Scale, found: float, wanted: float) -> bool:
    """The programmed value, not a measured one: it must be the very step that was asked for."""
    return isclose(scale.quantise(found), scale.quantise(wanted), rel_tol=1e-9, abs_tol=1e-12)


def _differs(intent: Intent, found_hz: float, found_v: float, sent_us: int) -> Outcome:
    return Outcome(
        state="not confirmed",
        sent_us=sent_us,
        readback=found_hz,
        difference=found_hz - intent.value,
        error=f"reads {found_hz:.10g} Hz, {found_v:.6g} V after {intent.value:.10g} Hz, {intent.level:.6g} V; no burst "
        "was started",
    )


def _carry(course: Course, job: Future[Carried]) -> Part:
    """The job's result. When the scan is stopped meanwhile, what came of the burst is still written down."""
    try:
        return (yield job)
    except Superseded as error:
        course.desk.spawn(
            _late_outcome(course.desk, course.origin.author, course.intent, job, str(error)), to_the_end=True
        )
        raise


def _late_outcome(desk: Desk, author: str, intent: int, job: Future[Carried], why: str) -> Activity:
    try:
        outcome = (yield job).outcome
    except Superseded:  # it was taken out of the instrument's queue before it began
        outcome = Outcome(state="not sent", error=why)
    desk.note(outcome_draft(author, intent, outcome))
    return {}


def _require_begun(tickle: str, outcome: Outcome) -> None:
    if outcome.state != "confirmed":
        kind = InstrumentUnreachable if outcome.state == "unreachable" else NotConfirmed
        raise kind(f"{tickle}: {outcome.error}; the scan ends here, the tickle goes off")


def _silence(course: Course) -> Part:
    """Off as soon as the count is there, and whether the burst lasted until then. It would end by itself a little later; the
    ion cools meanwhile."""

    def job(instrument: Instrument) -> bool:
        assert isinstance(instrument, RfSource)
        lasted = instrument.read_burst() and instrument.read_output()
        instrument.set_output(False)
        return lasted

    try:
        return (yield Within(course.desk.submit(course.tickle, job), ANSWER_S))
    except (DriverError, TimeoutError) as error:
        raise InstrumentUnreachable(f"{course.tickle}: {error or 'no answer'}; its burst ends by itself") from error
