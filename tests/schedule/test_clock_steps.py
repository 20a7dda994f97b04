"""Each due time has exactly one entry, whatever the clock, the daemon, the disk and people do."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import Future
from dataclasses import asdict, replace
from datetime import UTC, datetime
from types import SimpleNamespace
from typing import Any

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from tests.schedule.stage import (
    HALF_HOURLY,
    HELD,
    HOUR_US,
    MINUTE_US,
    NOON_US,
    FakeController,
    ManualClock,
    Stage,
    run_drafts,
)
from trapd.config.records import DueSection
from trapd.controller import SchedulePause, Ticket
from trapd.errors import Conflict, RecordUnwritable
from trapd.record import Draft, DueRun
from trapd.schedule import Schedule


def test_an_hour_that_comes_twice_is_run_once(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    for minutes in (30, 60, 90):
        bench.at(NOON_US + minutes * MINUTE_US)
    bench.clock.step(-3600)
    bench.look()
    for minutes in (60, 90, 120):
        bench.at(NOON_US + minutes * MINUTE_US)
    assert bench.states() == [(30, "run"), (60, "run"), (90, "run"), (120, "run")]
    assert bench.entries("clock") == [{"step_s": -3600.0}]


def test_a_step_forward_misses_what_it_leaves_out(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.clock.step(2 * 3600 + 60)
    bench.look()
    assert bench.states() == [(30, "missed"), (60, "missed"), (90, "missed"), (120, "late")]
    assert bench.due()[0].reason == "the clock stepped forward by 7260 s, or the machine slept"
    assert bench.entries("clock") == [{"step_s": 7260.0}]


def test_a_new_schedule_on_a_clock_that_was_ahead_begins_with_the_right_time(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.clock.step(-2 * 3600)
    bench.look()
    bench.at(NOON_US - 90 * MINUTE_US)
    bench.at(NOON_US)
    assert bench.states() == [(-90, "run"), (-60, "missed"), (-30, "missed"), (0, "run")]


def test_a_clock_that_is_steered_does_not_step(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    for _ in range(100):
        bench.clock.elapse(1.0)
        bench.clock.step(500e-6)  # adjtimex(2), ntpd: 500 ppm is the most a clock is steered [mem]
        bench.schedule.look()
    assert bench.entries("clock") == []


def test_a_step_that_could_not_be_written_is_written_late(bench: Stage) -> None:
    failed: Future[Any] = Future()
    failed.set_exception(RecordUnwritable("the disk is full"))
    schedule = bench.begin(HALF_HOURLY)
    schedule._record = SimpleNamespace(append=lambda *drafts: failed)  # type: ignore[assignment]
    bench.clock.step(60)
    schedule.look()
    schedule._record = bench.record
    schedule.look()
    step = {"step_s": 60.0, "written_late": True, "happened_us": NOON_US + MINUTE_US}
    assert bench.entries("clock") == [step]


class Killed(BaseException):
    """SIGKILL."""


class Memory:
    """A record without a disk; it fails when ``broken``, and with ``treacherous`` it has written nevertheless."""

    def __init__(self, clock: ManualClock) -> None:
        self.clock, self.broken, self.treacherous, self.stored = clock, False, False, []

    def append(self, *drafts: Draft) -> Future[tuple[Any, ...]]:
        future: Future[tuple[Any, ...]] = Future()
        if self.broken and not self.treacherous:
            future.set_exception(RecordUnwritable("the disk is full"))
            return future
        first = len(self.stored) + 1
        new = [
            SimpleNamespace(seq=seq, kind=draft.kind, data=draft.data, time_us=self.clock.now_us())
            for seq, draft in enumerate(drafts, first)
        ]
        self.stored += new
        if self.broken:
            future.set_exception(RecordUnwritable("the disk failed in the commit"))
        else:
            future.set_result(tuple(new))
        return future

    def entries(self, *, kind: str, newest: bool = False) -> tuple[Any, ...]:
        return tuple(one for one in self.stored if one.kind == kind)

    def due_runs(self, *, schedule: str, newest: bool = False, limit: int = 1000) -> tuple[DueRun, ...]:
        found = [one for one in self.entries(kind="due_run") if one.data["schedule"] == schedule]
        return tuple(DueRun(seq=one.seq, **one.data) for one in found[-limit:])

    def newest_due(self, schedule: str) -> int | None:
        return max((one.due_us for one in self.due_runs(schedule=schedule)), default=None)


NIGHTLY = DueSection(name="nightly", scan="z", cron="7 3,15 * * *")
SECTIONS = (replace(HALF_HOURLY, cron="*/20 * * * *"), NIGHTLY)


def scan_minutes(name: str, after_us: int, until_us: int) -> list[int]:
    """The two crons, asked of every minute."""
    minutes = range(after_us // MINUTE_US + 1, until_us // MINUTE_US + 1)
    moments = [(minute * MINUTE_US, datetime.fromtimestamp(minute * 60, UTC)) for minute in minutes]
    if name == "x":
        return [at_us for at_us, moment in moments if moment.minute in (0, 20, 40)]
    return [at_us for at_us, moment in moments if moment.minute == 7 and moment.hour in (3, 15)]


class Life:
    """One trap through many accidents. Both schedules have an entry before the first of them."""

    def __init__(self) -> None:
        self.clock = ManualClock()
        self.record = Memory(self.clock)
        self.first_us = NOON_US - 12 * HOUR_US
        self.furthest_us = NOON_US
        self.controller = FakeController(self.record, self.clock)
        self.start()
        for section in SECTIONS:
            data = {"schedule": section.name, "scan": section.scan, "due_us": self.first_us, "state": "run"}
            data |= {"late_s": 0.0, "request": None, "reason": ""}
            self.record.append(Draft(kind="due_run", actor="trapd", data=data))
        self.start()

    def start(self) -> None:
        configuration = {"schedule": [asdict(section) for section in SECTIONS]}
        disk, self.record.broken = self.record.broken, False
        self.record.append(Draft(kind="configuration", actor="trapd", data=configuration))
        self.record.broken = disk
        parts: Any = {"controller": self.controller, "record": self.record, "reader": self.record}
        self.schedule = Schedule(SECTIONS, clock=self.clock, **parts)

    def look(self) -> None:
        self.furthest_us = max(self.furthest_us, self.clock.wall_us)
        try:
            self.schedule.look()
        except Killed:
            self.start()
        self.furthest_us = max(self.furthest_us, self.clock.wall_us)

    def suffer(self, accident: str, seconds: int) -> None:
        getattr(self, accident)(seconds)
        self.look()

    def sleep(self, seconds: int) -> None:
        self.clock.elapse(seconds)

    def watch(self, seconds: int) -> None:
        for _ in range(8):
            self.clock.elapse(seconds / 8)
            self.look()

    def step(self, seconds: int) -> None:
        self.clock.step(seconds)

    def step_back(self, seconds: int) -> None:
        self.clock.step(-seconds)

    def restart(self, seconds: int) -> None:
        self.clock.elapse(seconds)
        self.start()

    def restart_in_the_past(self, seconds: int) -> None:
        self.clock.step(-seconds)
        self.start()

    def pause(self, seconds: int) -> None:
        until_us = self.clock.wall_us + seconds * 1_000_000
        self.controller.situation = replace(HELD, pause=SchedulePause(entry=1, who="ada", why="", until_us=until_us))

    def resume(self, seconds: int) -> None:
        self.controller.situation = HELD

    def disk_breaks(self, seconds: int) -> None:
        self.record.broken, self.record.treacherous = True, seconds % 2 == 0

    def disk_mended(self, seconds: int) -> None:
        self.record.broken = False

    def busy(self, seconds: int) -> None:
        self._once(lambda ticket: (self.clock.elapse(seconds), self.run(ticket)))

    def busy_while_the_clock_steps(self, seconds: int) -> None:
        self._once(lambda ticket: (self.run(ticket), self.clock.step(seconds if seconds % 2 else -seconds)))

    def refuse(self, seconds: int) -> None:
        self._once(lambda ticket: ticket.fail(Conflict("counts are below the floor")))

    def kill(self, seconds: int) -> None:
        """In the middle of a request, before or after it is on the disk."""

        def die(ticket: Ticket) -> None:
            if seconds % 2:
                self.run(ticket)
            raise Killed

        self._once(die)

    def run(self, ticket: Ticket) -> None:
        due = ticket.request.due
        assert due is not None
        pause = self.controller.situation.pause
        assert pause is None or pause.until_us <= self.clock.wall_us
        written = self.record.append(*run_drafts(due, self.clock))
        if written.exception() is not None:
            ticket.fail(RecordUnwritable("the disk is full"))
            return
        ticket.finish({"entry": written.result()[0].seq, "accepted": True})

    def _once(self, answer: Any) -> None:
        def then_as_usual(ticket: Ticket) -> None:
            self.controller.answer = self.run
            answer(ticket)

        self.controller.answer = then_as_usual

    def end(self) -> None:
        """All is well again, and time passes whatever was reached."""
        self.record.broken = False
        self.controller.situation, self.controller.answer = HELD, self.run
        self.clock.elapse((self.furthest_us - self.clock.wall_us) / 1e6 + 60)
        for _ in range(8):
            self.look()


ACCIDENTS = (
    *("sleep", "watch", "step", "step_back", "restart", "restart_in_the_past", "pause", "resume"),
    *("disk_breaks", "disk_mended", "busy", "busy_while_the_clock_steps", "refuse", "kill"),
)


@settings(max_examples=150, deadline=None)
@given(st.lists(st.tuples(st.sampled_from(ACCIDENTS), st.integers(1, 7200)), max_size=25))
@example([("kill", 2), ("sleep", 1200), ("disk_breaks", 2), ("step_back", 1)])  # it found these
def test_each_due_time_has_exactly_one_entry(accidents: Sequence[tuple[str, int]]) -> None:
    life = Life()
    life.controller.answer = life.run
    for accident, seconds in accidents:
        life.suffer(accident, seconds)
    life.end()
    for section in SECTIONS:
        due = [one.due_us for one in life.record.due_runs(schedule=section.name, limit=10**6)]
        assert due == [life.first_us, *scan_minutes(section.name, life.first_us, life.clock.wall_us)]


@pytest.mark.parametrize("accident", ACCIDENTS)
def test_every_accident_does_something(accident: str) -> None:
    quiet, life = Life(), Life()
    life.controller.answer, quiet.controller.answer = life.run, quiet.run
    for before in ("pause", "disk_breaks"):
        if accident == {"pause": "resume", "disk_breaks": "disk_mended"}[before]:
            life.suffer(before, 7201)
            quiet.suffer(before, 7201)
    life.suffer(accident, 3601)
    for one in (life, quiet):
        one.watch(4000)

    def told(one: Life) -> list[Any]:
        return [(entry.kind, entry.data) for entry in one.record.stored]

    assert told(life) != told(quiet)
