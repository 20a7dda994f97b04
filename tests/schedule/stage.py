"""A schedule on a stage: a clock set by hand, a real record, and a controller that does as it is told."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any

from trapd.config.records import DueSection
from trapd.controller import Situation, Ticket
from trapd.record import Draft, DueRun, Reader, Record
from trapd.schedule import Schedule
from trapd.setpoint import Contents, Due, Request

NOON_US = 1_772_366_400_000_000  # 2026-03-01T12:00:00Z, a Sunday
MINUTE_US = 60_000_000
HOUR_US = 60 * MINUTE_US
HALF_HOURLY = DueSection(name="x", scan="x", cron="*/30 * * * *")
HELD = Situation(values={}, outputs={}, contents=Contents(presence="held", ions={"40Ca+": 1}))


class ManualClock:
    """Both clocks stand until they are told."""

    def __init__(self) -> None:
        self.wall_us, self.at_us = NOON_US, 1_000_000

    def now_us(self) -> int:
        return self.wall_us

    def monotonic_ns(self) -> int:
        return self.at_us * 1000

    def elapse(self, seconds: float) -> None:
        self.wall_us += round(seconds * 1e6)
        self.at_us += round(seconds * 1e6)

    def step(self, seconds: float) -> None:
        self.wall_us += round(seconds * 1e6)


def run_drafts(due: Due, clock: ManualClock) -> tuple[Draft, Draft]:
    """What the controller commits for a due run that it begins."""
    late_s = (clock.now_us() - due.due_us) / 1e6
    data = {**asdict(due), "state": "run" if late_s <= 10 else "late", "late_s": late_s, "request": None, "reason": ""}
    return Draft(kind="request", actor="schedule", data={}), Draft(kind="due_run", actor="trapd", data=data)


class FakeController:
    """``answer`` gets each ticket; it accepts and finishes unless a test says otherwise."""

    def __init__(self, record: Any, clock: ManualClock) -> None:
        self.record, self.clock = record, clock
        self.situation = HELD
        self.requests: list[Request] = []
        self.withdrawn: list[Ticket] = []
        self.answer: Callable[[Ticket], None] = self.run

    def submit(self, request: Request) -> Ticket:
        ticket = Ticket(request)
        self.requests.append(request)
        self.answer(ticket)
        return ticket

    def withdraw(self, ticket: Ticket) -> None:
        self.withdrawn.append(ticket)

    def accept(self, ticket: Ticket) -> None:
        assert ticket.request.due is not None
        first, _ = self.record.append(*run_drafts(ticket.request.due, self.clock)).result()
        ticket.tell({"entry": first.seq, "accepted": True})

    def run(self, ticket: Ticket) -> None:
        self.accept(ticket)
        ticket.finish({"state": "done"})


class Stage:
    def __init__(self, path: Path, clock: ManualClock) -> None:
        self.clock = clock
        self.record = Record.open(path, clock=clock, boot_id="test")
        self.reader = Reader.open(path)
        self.controller = FakeController(self.record, clock)
        self.schedule: Schedule

    def configure(self, *sections: DueSection) -> None:
        data = {"schedule": [asdict(section) for section in sections]}
        self.record.append(Draft(kind="configuration", actor="trapd", data=data)).result()

    def begin(self, *sections: DueSection) -> Schedule:
        """The daemon starts: its configuration first, then the schedule. Its thread is not started."""
        self.configure(*sections)
        self.schedule = Schedule(
            sections,
            controller=self.controller,  # type: ignore[arg-type]
            record=self.record,
            reader=self.reader,
            clock=self.clock,
        )
        self.schedule.look()
        return self.schedule

    def at(self, wall_us: int) -> None:
        """Time passes until then, and the schedule looks until it has nothing to do."""
        self.clock.elapse((wall_us - self.clock.wall_us) / 1e6)
        self.look()

    def look(self) -> None:
        for _ in range(4):
            self.schedule.look()

    def due(self, schedule: str = "x") -> list[DueRun]:
        return list(self.reader.due_runs(schedule=schedule, limit=100_000))

    def states(self, schedule: str = "x") -> list[tuple[float, str]]:
        """Minutes after noon, and what became of it."""
        return [((one.due_us - NOON_US) / MINUTE_US, one.state) for one in self.due(schedule)]

    def entries(self, kind: str) -> list[dict[str, Any]]:
        self.record.append(Draft(kind="heartbeat", actor="test", data={})).result()  # what was queued is written
        return [dict(entry.data) for entry in self.reader.entries(kind=kind)]

    def hold(self, **changes: Any) -> None:
        self.controller.situation = replace(HELD, **changes)


@contextmanager
def stage(folder: Path, clock: ManualClock | None = None) -> Iterator[Stage]:
    one = Stage(folder / "trap.sqlite", clock or ManualClock())
    try:
        yield one
    finally:
        one.reader.close()
        assert one.record.close(10.0)
