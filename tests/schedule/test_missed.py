"""A time at which nobody was there to run has its entry all the same, and only what fell to this schedule."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from tests.schedule.stage import HALF_HOURLY, HOUR_US, MINUTE_US, NOON_US, ManualClock, Stage, stage
from tests.traps import NORTH_BENCH, SCANS, write
from trapd.config.digest import as_data
from trapd.config.read import read
from trapd.record import Draft, verify
from trapd.schedule.baseline import read_since


def test_a_due_time_is_run_once(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.at(NOON_US + 30 * MINUTE_US)
    bench.at(NOON_US + 31 * MINUTE_US)
    assert bench.states() == [(30, "run")]
    (request,) = bench.controller.requests
    assert (request.kind, request.author, request.scan) == ("scan", "schedule", "x")
    assert request.why == "due 2026-03-01T12:30:00Z"
    assert request.due is not None
    assert (request.due.schedule, request.due.due_us) == ("x", NOON_US + 30 * MINUTE_US)


def test_three_due_times_over_a_stopped_daemon_are_three_missed(tmp_path: Path) -> None:
    clock = ManualClock()
    with stage(tmp_path, clock) as one:
        one.begin(HALF_HOURLY)
        one.at(NOON_US + 30 * MINUTE_US)
    clock.elapse(100 * 60)
    with stage(tmp_path, clock) as two:
        two.begin(HALF_HOURLY)
        two.look()
        assert two.states() == [(30, "run"), (60, "missed"), (90, "missed"), (120, "missed")]
        assert {one.reason for one in two.due()[1:]} == {"the daemon was not running"}
        assert two.controller.requests == []
        assert [one.late_s for one in two.due()[1:]] == [4200.0, 2400.0, 600.0]  # 13:00, 13:30, 14:00 seen at 14:10
        assert verify(two.record.path).problems == ()


def test_a_new_schedule_has_missed_nothing(bench: Stage) -> None:
    bench.configure()
    bench.clock.elapse(2 * 3600)
    bench.begin(HALF_HOURLY)
    bench.look()
    assert bench.states() == []


def test_a_schedule_that_never_came_due_answers_from_its_first_configuration_on(bench: Stage) -> None:
    bench.configure(replace(HALF_HOURLY, cron="0 * * * *"))
    bench.clock.elapse(40 * 60)
    bench.configure(HALF_HOURLY)
    bench.clock.elapse(60)
    bench.configure(HALF_HOURLY)
    bench.clock.elapse(40 * 60)
    bench.begin(HALF_HOURLY)
    assert bench.states() == [(60, "missed")]


def test_a_cron_that_was_changed_answers_from_the_change_on(bench: Stage) -> None:
    hourly = replace(HALF_HOURLY, cron="0 * * * *")
    bench.begin(hourly)
    bench.at(NOON_US + HOUR_US)
    bench.clock.elapse(2 * 3600)
    bench.begin(HALF_HOURLY)
    assert bench.states() == [(60, "run")], "nothing was due each half hour before"


def test_a_schedule_that_was_taken_out_and_comes_back_answers_for_no_time_between(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.at(NOON_US + 30 * MINUTE_US)
    bench.configure()
    bench.clock.elapse(3 * 3600)
    bench.begin(HALF_HOURLY)
    assert bench.states() == [(30, "run")]


def test_the_daemons_own_configuration_entry_is_understood(bench: Stage, tmp_path: Path) -> None:
    config = as_data(read(write(tmp_path, NORTH_BENCH + SCANS)))
    bench.record.append(Draft(kind="configuration", actor="trapd", data=config)).result()
    assert read_since(bench.reader, HALF_HOURLY, 0, NOON_US + HOUR_US) == NOON_US


def test_of_more_than_500_the_oldest_are_told_in_one(bench: Stage) -> None:
    every_minute = replace(HALF_HOURLY, cron="* * * * *")
    bench.configure(every_minute)
    bench.clock.elapse(12 * 3600)
    before = bench.record.last_seq
    bench.begin(every_minute)
    due = bench.due()
    assert [one.due_us for one in due] == [NOON_US + minute * MINUTE_US for minute in range(221, 721)]
    assert due[0].reason == "the daemon was not running; and 220 before it since 2026-03-01T12:01:00Z"
    assert {one.reason for one in due[1:]} == {"the daemon was not running"}
    assert bench.record.last_seq == before + 501


def test_a_busy_runner_runs_the_newest_and_misses_the_others(bench: Stage) -> None:
    def takes_long(ticket: object) -> None:
        bench.clock.elapse(100 * 60)
        bench.controller.answer = bench.controller.run
        bench.controller.run(ticket)  # type: ignore[arg-type]

    bench.begin(HALF_HOURLY)
    bench.controller.answer = takes_long
    bench.at(NOON_US + 30 * MINUTE_US)
    assert bench.states() == [(30, "late"), (60, "missed"), (90, "missed"), (120, "late")]
    busy = "a scan of the schedule was still waiting or running"
    assert {one.reason for one in bench.due() if one.state == "missed"} == {busy}
    bench.at(NOON_US + 200 * MINUTE_US)
    assert bench.due()[4].reason == "nobody looked at the time", "what hindered before is over"


def test_two_scans_due_together_run_one_after_the_other(bench: Stage) -> None:
    other = replace(HALF_HOURLY, name="other", scan="y")
    bench.begin(HALF_HOURLY, other)
    bench.at(NOON_US + 30 * MINUTE_US)
    assert [request.scan for request in bench.controller.requests] == ["x", "y"]
    assert (bench.states(), bench.states("other")) == ([(30, "run")], [(30, "run")])


def test_a_machine_that_stood_still_tells_so(bench: Stage) -> None:
    bench.begin(HALF_HOURLY)
    bench.at(NOON_US + 70 * MINUTE_US)
    assert bench.states() == [(30, "missed"), (60, "late")]
    assert bench.due()[0].reason == "nobody looked at the time"


def test_what_comes_next_is_told_with_what_came_last(bench: Stage) -> None:
    nightly = replace(HALF_HOURLY, name="nightly", cron="0 2 * * *")
    schedule = bench.begin(nightly, HALF_HOURLY)
    bench.at(NOON_US + 30 * MINUTE_US)
    first, second = schedule.upcoming()
    assert (first["schedule"], first["scan"], first["due_us"]) == ("x", "x", NOON_US + HOUR_US)
    assert (first["last"]["state"], first["last"]["due_us"]) == ("run", NOON_US + 30 * MINUTE_US)
    assert (second["schedule"], second["cron"], second["due_us"]) == ("nightly", "0 2 * * *", NOON_US + 14 * HOUR_US)
    assert second["last"] is None
