"""Deliberate mistakes, each of which the tests named beside it must catch. `test_mutations.py` makes them one at a time.

``old`` stands exactly once in ``file`` and becomes ``new``; a list that no longer fits the code fails too.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True)
class Mutation:
    name: str
    file: str
    old: str
    new: str
    caught_by: tuple[str, ...]


MUTATIONS = (
    Mutation(
        name="the margin widens the allowed interval",
        file="trapd/guard/allowed.py",
        old="scale = 1 - model.margin if edge >= 0 else 1 + model.margin",
        new="scale = 1 + model.margin if edge >= 0 else 1 - model.margin",
        caught_by=("tests/guard/test_allowed.py",),
    ),
    Mutation(
        name="folded for unfolded beta",
        file="trapd/physics/krein.py",
        old="    return np.minimum(lower, upper), positive\n",
        new="""    from trapd.physics.collocation import half_period

    folded = np.linalg.eigvals(half_period(c.a, c.q).sin2)
    bounded = ((folded.real > 0) & (folded.real < 1) & (abs(folded.imag) < 1e-9)).all(axis=1)
    return np.where(bounded, 1.0, -1.0), np.ones(len(c.a), dtype=bool)
""",
        caught_by=("tests/physics/test_first_region.py", "tests/physics/test_worked_cases.py"),
    ),
    Mutation(
        name="only the first species is judged",
        file="trapd/guard/contents.py",
        old="held = tuple(model.catalogue[name] for name in contents.ions)",
        new="held = tuple(model.catalogue[name] for name in contents.ions)[:1]",
        caught_by=("tests/guard/test_contents.py",),
    ),
    Mutation(
        name="a stretch is judged at its ends only",
        file="trapd/guard/leg.py",
        old="if any(i.low <= low + slack and i.high >= high - slack for i in intervals):",
        new="if all(any(i.low <= end + slack and i.high >= end - slack for i in intervals) for end in (low, high)):",
        caught_by=("tests/guard/test_path.py",),
    ),
    Mutation(
        name="the intent is sent before it is committed",
        file="trapd/record/writer.py",
        old="                self._file.commit(batch.rows, batch.head)\n",
        new="""                for append, entries in batch.answers:
                    append.answer.set_result(entries)
                batch_answers, batch.answers = batch.answers, []
                __import__("time").sleep(0.02)
                self._file.commit(batch.rows, batch.head)
""",
        caught_by=("tests/controller/test_path_of_a_setpoint.py",),
    ),
    Mutation(
        name="the chain forgets the previous digest",
        file="trapd/record/entry.py",
        old="first, previous = head.seq + 1, head.digest",
        new="first, previous = head.seq + 1, NO_DIGEST",
        caught_by=("tests/record/test_entry.py", "tests/record/test_verify.py"),
    ),
    Mutation(
        name="off waits for the ramp in hand",
        file="trapd/controller/controller.py",
        old='        self._supersede("off came first")\n',
        new="""        if self._current is not None:
            self._stage.schedule(0.01, lambda: self._off(ticket))
            return
        self._supersede("off came first")
""",
        caught_by=("tests/controller/test_faults.py",),
    ),
    Mutation(
        name="the gain is taken for exact",
        file="trapd/guard/limits.py",
        old="    low, high = band(model.resonator, low_hz, high_hz)\n",
        new="    low, high = 1.0, 1.0\n",
        caught_by=("tests/guard/test_limits.py",),
    ),
    Mutation(
        name="a readback is never compared",
        file="trapd/controller/carry_out.py",
        old="if abs(difference) <= command.accuracy:",
        new="if difference == difference:",
        caught_by=("tests/controller/test_faults.py",),
    ),
    Mutation(
        name="a start commands the instruments",
        file="trapd/controller/adoption.py",
        old="        surveys = yield from look(desk)\n",
        new="""        surveys = yield from look(desk)
        yield desk.workers[desk.wiring.drive].submit(lambda source: source.set_output(False))  # type: ignore[attr-defined]
""",
        caught_by=("tests/controller/test_path_of_a_setpoint.py",),
    ),
    Mutation(
        name="a burst is started before its intent is committed",
        file="trapd/controller/tickling.py",
        old="""    course.intent = yield from commit_next(desk, course.origin, course.take_happened(), draft)
    job = _burst(intent, plan, scales[TICKLE_FREQUENCY], scales[TICKLE_LEVEL], desk.clock)
    course.burst_ns = desk.clock.monotonic_ns()
    course.job = desk.submit(course.tickle, job)
""",
        new="""    job = _burst(intent, plan, scales[TICKLE_FREQUENCY], scales[TICKLE_LEVEL], desk.clock)
    course.burst_ns = desk.clock.monotonic_ns()
    course.job = desk.submit(course.tickle, job)
    course.intent = yield from commit_next(desk, course.origin, course.take_happened(), draft)
""",
        caught_by=(
            "tests/controller/test_scans.py::test_every_burst_had_its_intent_on_disk_when_the_rack_received_it",
        ),
    ),
    Mutation(
        name="counts under the floor do not keep a scan from beginning",
        file="trapd/controller/aiming.py",
        old="if rate_of(shots) < plan.floor_per_s:",
        new="if rate_of(shots) < 0:",
        caught_by=("tests/controller/test_scans.py::test_without_photons_nothing_is_tickled",),
    ),
    Mutation(
        name="vanished counts are fitted through",
        file="trapd/scans/estimate.py",
        old="    if lost is not None:\n",
        new="    if lost is not None and not points.counts.any():\n",
        caught_by=("tests/scans/test_estimate.py",),
    ),
    Mutation(
        name="the hypothesis that nothing is there is dropped",
        file="trapd/scans/estimate.py",
        old="    if ratio < evidence.threshold:\n",
        new="    if ratio < 0:\n",
        caught_by=("tests/scans/test_estimate.py",),
    ),
    Mutation(
        name="a scan stops on one lucky pass",
        file="trapd/scans/estimate.py",
        old="if passes < _FEWEST_PASSES or",
        new="if passes < 1 or",
        caught_by=("tests/scans/test_estimate.py",),
    ),
    Mutation(
        name="anybody ends another person's scan",
        file="trapd/controller/precedence.py",
        old="running.due is not None or request.interrupt or running.author == request.author",
        new="True",
        caught_by=("tests/controller/test_scans.py::test_another_persons_scan_goes_on_unless_interrupt_is_said",),
    ),
    Mutation(
        name="a claim is ignored",
        file="trapd/controller/precedence.py",
        old="if claim is None or request.interrupt or",
        new="if claim is None or claim is not None or",
        caught_by=("tests/controller/test_claims.py",),
    ),
    Mutation(
        name="a start forgets the tickle",
        file="trapd/controller/adoption.py",
        old="""        yield from silencing(desk, DAEMON, "after a start")\n""",
        new="",
        caught_by=("tests/controller/test_scans.py::test_a_start_tells_the_tickle_off_and_nothing_else_anything",),
    ),
    Mutation(
        name="what has an entry already is written again",
        file="trapd/schedule/schedule.py",
        old="""those that are not there yet. Raises `RecordFailed`.\"\"\"
        self._read_newest(row)
""",
        new="""those that are not there yet. Raises `RecordFailed`.\"\"\"
""",
        caught_by=("tests/schedule/test_hindered.py",),
    ),
    Mutation(
        name="what has an entry already is run again",
        file="trapd/schedule/schedule.py",
        old="        self._read_newest(row)  # a commit that failed may have come to stand all the same\n",
        new="",
        caught_by=("tests/schedule/test_clock_steps.py::test_each_due_time_has_exactly_one_entry",),
    ),
    Mutation(
        name="after a step back due times are due again",
        file="trapd/schedule/schedule.py",
        old="return max(self.newest_us, self.since_us)",
        new="return min(self.newest_us, self.since_us) or self.since_us",
        caught_by=("tests/schedule/test_clock_steps.py",),
    ),
    Mutation(
        name="the alarm sleeps on when the clock is set back",
        file="trapd/schedule/schedule.py",
        old="        self._alarm.set()\n",
        new="",
        caught_by=("tests/schedule/test_alarm.py",),
    ),
    Mutation(
        name="a paused schedule goes on",
        file="trapd/schedule/due_times.py",
        old="if pause is not None and now_us < pause.until_us:",
        new="if pause is not None and now_us > pause.until_us:",
        caught_by=("tests/schedule/test_hindered.py",),
    ),
    Mutation(
        name="a trip ends by itself",
        file="trapd/guard/interlock.py",
        old="tripped=state.tripped or _long_enough(",
        new="tripped=_long_enough(",
        caught_by=("tests/guard/test_interlock.py",),
    ),
    Mutation(
        name="a gauge that cannot be read trips",
        file="trapd/guard/interlock.py",
        old="return replace(state, unreadable=_unreadable(limits, state, now_s))",
        new="return replace(state, unreadable=_unreadable(limits, state, now_s), tripped=True)",
        caught_by=("tests/guard/test_interlock.py",),
    ),
)
