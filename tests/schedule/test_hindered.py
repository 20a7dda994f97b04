"""What is due and cannot be run is skipped, with the reason; and nothing is run that cannot be written down."""

from __future__ import annotations

import threading
from concurrent.futures import Future
from dataclasses import replace
from typing import Any

import pytest

from tests.schedule.stage import HALF_HOURLY, HELD, HOUR_US, MINUTE_US, NOON_US, Stage
from trapd.controller import Claim, SchedulePause, Ticket
from trapd.errors import Conflict, InstrumentUnreachable, QueueFull, RecordUnwritable, Superseded
from trapd.record import Draft, Entry
from trapd.setpoint import Contents

FIRST_US = NOON_US + 30 * MINUTE_US


def only(bench: Stage) -> tuple[str, str]:
    (one,) = bench.due()
    return one.state, one.reason


def test_a_pause_skips_until_it_ends(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.hold(pause=SchedulePause(entry=1, who="ada", why="laser is down", until_us=FIRST_US + 1))
    bench.at(FIRST_US)
    assert only(bench) == ("skipped", "ada paused the schedule until 2026-03-01T12:30:00Z: laser is down")
    bench.hold(pause=SchedulePause(entry=1, who="ada", why="", until_us=NOON_US + HOUR_US))
    bench.at(NOON_US + HOUR_US)
    assert bench.states() == [(30, "skipped"), (60, "run")]


@pytest.mark.parametrize(("until_us", "words"), [(None, ""), (NOON_US + HOUR_US, " until 2026-03-01T13:00:00Z")])
def test_a_claim_of_anybody_skips(bench: Stage, until_us: int | None, words: str) -> None:
    bench.begin(HALF_HOURLY)
    bench.hold(claim=Claim(entry=1, who="ada", why="alignment", until_us=until_us))
    bench.at(FIRST_US)
    assert only(bench) == ("skipped", f"ada keeps the trap{words}: alignment")
    assert bench.controller.requests == []


def test_a_claim_that_has_ended_hinders_nothing(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.hold(claim=Claim(entry=1, who="ada", why="alignment", until_us=FIRST_US))
    bench.at(FIRST_US)
    assert bench.states() == [(30, "run")]


@pytest.mark.parametrize(
    ("contents", "reason"),
    [
        (Contents(presence="unknown"), "the trap's contents are unknown"),
        (Contents(presence="none"), "the trap is empty"),
        (Contents(presence="loading", incoming=("40Ca+",)), "the trap is being loaded"),
    ],
)
def test_without_ions_that_are_held_it_is_skipped(bench: Stage, contents: Contents, reason: str) -> None:
    bench.begin(HALF_HOURLY)
    bench.hold(contents=contents)
    bench.at(FIRST_US)
    assert only(bench) == ("skipped", reason)


@pytest.mark.parametrize(
    ("error", "reason"),
    [
        (Conflict("counts are below the floor\none\ntwo\nthree"), "counts are below the floor\none\ntwo"),
        (InstrumentUnreachable("the counter does not answer"), "the counter does not answer"),
        (QueueFull("16 requests wait already"), "16 requests wait already"),
        (ValueError(), "ValueError"),
    ],
)
def test_what_the_controller_does_not_take_is_skipped_with_its_reason(
    bench: Stage, error: Exception, reason: str
) -> None:
    bench.begin(HALF_HOURLY)
    bench.controller.answer = lambda ticket: ticket.fail(error)
    bench.at(FIRST_US)
    assert only(bench) == ("skipped", reason)
    assert len(bench.controller.requests) == 1


def test_a_refusal_names_its_request_and_the_rules(bench: Stage) -> None:
    def refuse(ticket: Ticket) -> None:
        (entry,) = bench.record.append(Draft(kind="request", actor="schedule", data={})).result()
        verdict = {"reasons": ({"message": "the tickle is too strong"}, {"message": "too near the edge"})}
        ticket.finish({"entry": entry.seq, "accepted": False, "verdict": verdict})

    bench.begin(HALF_HOURLY)
    bench.controller.answer = refuse
    bench.at(FIRST_US)
    (one,) = bench.due()
    assert (one.state, one.reason) == ("skipped", "the tickle is too strong\ntoo near the edge")
    assert one.request is not None
    assert bench.reader.entry(one.request).kind == "request"


def test_a_run_that_ends_badly_has_its_one_entry(bench: Stage) -> None:
    def fail_later(ticket: Ticket) -> None:
        bench.controller.accept(ticket)
        ticket.fail(Superseded("a person's request came first"))

    bench.begin(HALF_HOURLY)
    bench.controller.answer = fail_later
    bench.at(FIRST_US)
    bench.look()
    assert bench.states() == [(30, "run")]


class Disk:
    """Stands between the schedule and the record; ``broken`` fails what comes, ``treacherous`` writes it and says no."""

    def __init__(self, bench: Stage) -> None:
        self.bench, self.broken, self.treacherous, self.tries = bench, False, False, 0

    def append(self, *drafts: Draft) -> Future[tuple[Entry, ...]]:
        self.tries += 1
        if not (self.broken or self.treacherous):
            return self.bench.record.append(*drafts)
        if self.treacherous:
            self.bench.record.append(*drafts).result()
        failed: Future[tuple[Entry, ...]] = Future()
        failed.set_exception(RecordUnwritable("the disk is full"))
        return failed


@pytest.fixture
def disk(bench: Stage) -> Disk:
    disk = Disk(bench)
    bench.begin(HALF_HOURLY)._record = disk  # type: ignore[assignment]
    return disk


def test_a_refused_run_is_written_down_when_the_disk_is_back_and_not_tried_again(bench: Stage, disk: Disk) -> None:
    disk.broken = True
    bench.controller.answer = lambda ticket: ticket.fail(RecordUnwritable("the disk is full"))
    bench.at(FIRST_US)
    bench.at(FIRST_US + MINUTE_US)
    assert (bench.due(), len(bench.controller.requests)) == ([], 1)
    disk.broken = False
    bench.at(FIRST_US + 2 * MINUTE_US)
    assert only(bench) == ("skipped", "the disk is full")
    assert len(bench.controller.requests) == 1


def test_while_a_missed_one_cannot_be_written_nothing_is_run(bench: Stage, disk: Disk) -> None:
    disk.broken = True
    bench.at(NOON_US + HOUR_US)
    assert bench.controller.requests == []
    disk.broken = False
    bench.at(NOON_US + HOUR_US + MINUTE_US)
    assert bench.states() == [(30, "missed"), (60, "late")]
    assert bench.due()[0].reason == "the record could not be written"


def test_what_stands_after_a_failed_commit_is_not_written_twice(bench: Stage, disk: Disk) -> None:
    disk.treacherous = True
    bench.schedule.look()
    bench.clock.elapse(HOUR_US / 1e6)
    bench.schedule.look()
    disk.treacherous = False
    bench.look()
    assert bench.states() == [(30, "missed"), (60, "run")]


def test_a_run_that_the_controller_wrote_before_it_failed_is_not_skipped_as_well(bench: Stage) -> None:
    def fail_after_commit(ticket: Ticket) -> None:
        bench.controller.accept(Ticket(ticket.request))
        ticket.fail(RecordUnwritable("the disk failed in the commit"))

    bench.begin(HALF_HOURLY)
    bench.controller.answer = fail_after_commit
    bench.at(FIRST_US)
    assert bench.states() == [(30, "run")]


def waiting_for(bench: Stage, answer: Any) -> threading.Event:
    """Set when the schedule's own thread has handed its request over and ``answer`` has seen it."""
    handed = threading.Event()

    def hand_over(ticket: Ticket) -> None:
        answer(ticket)
        handed.set()

    bench.begin(HALF_HOURLY)
    bench.controller.answer = hand_over
    bench.clock.elapse(30 * 60)
    bench.schedule.start()
    return handed


def test_one_scan_is_over_before_the_next_begins(bench: Stage, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("trapd.schedule.schedule.TICK_S", 600.0)
    first, second, run = threading.Event(), threading.Event(), bench.controller.run
    tickets: list[Ticket] = []

    def answer(ticket: Ticket) -> None:
        tickets.append(ticket)
        if len(tickets) == 1:
            bench.controller.accept(ticket)
            first.set()
        else:
            run(ticket)
            second.set()

    bench.begin(HALF_HOURLY, replace(HALF_HOURLY, name="other"))
    bench.controller.answer = answer
    bench.clock.elapse(30 * 60)
    bench.schedule.start()
    assert first.wait(10)
    assert not second.wait(0.05)
    tickets[0].finish({"state": "done"})
    assert second.wait(10), "and then it is begun at once"
    bench.schedule.close(10)


def test_closing_withdraws_a_request_that_waits_its_turn(bench: Stage) -> None:
    bench.controller.withdraw = lambda ticket: ticket.fail(Superseded("whoever asked went away"))  # type: ignore[method-assign]
    assert waiting_for(bench, lambda ticket: None).wait(10)
    bench.schedule.close(10)
    assert not bench.schedule._thread.is_alive()
    assert only(bench) == ("skipped", "the daemon was stopping")


def test_closing_does_not_wait_for_a_scan_that_runs(bench: Stage) -> None:
    assert waiting_for(bench, bench.controller.accept).wait(10)
    bench.schedule.close(10)
    assert not bench.schedule._thread.is_alive()
    assert bench.states() == [(30, "run")]
    assert bench.controller.withdrawn == []
    assert bench.schedule.upcoming()[0]["last"]["state"] == "run", "known while it ran"


def test_closing_gives_up_on_a_controller_that_does_not_answer(bench: Stage) -> None:
    assert waiting_for(bench, lambda ticket: None).wait(10)
    bench.schedule.close(0.05)
    bench.schedule._thread.join(10)
    assert not bench.schedule._thread.is_alive()
    assert bench.due() == [], "the next start says that it was missed"


def test_after_closing_nothing_is_run(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.schedule.start()
    bench.schedule.close(10)
    bench.at(FIRST_US)
    assert bench.controller.requests == []


def test_the_thread_goes_on_after_a_bug(bench: Stage) -> None:
    handed, run = threading.Event(), bench.controller.run

    def stumble(ticket: Ticket) -> None:
        bench.controller.answer = run_at_last
        raise KeyError("a bug")

    def run_at_last(ticket: Ticket) -> None:
        run(ticket)
        handed.set()

    bench.begin(HALF_HOURLY)
    bench.controller.answer = stumble
    bench.clock.elapse(30 * 60)
    bench.schedule.start()
    bench.schedule._wake.set()
    assert handed.wait(10)
    bench.schedule.close(10)
    assert bench.states() == [(30, "run")]
    assert bench.controller.situation == HELD
