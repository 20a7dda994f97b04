"""The alarm clock: a real APScheduler with a clock that a test sets."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from types import SimpleNamespace

import pytest

from tests.schedule.stage import HALF_HOURLY, Stage
from trapd.schedule.alarm import Alarm

NOON = datetime(2026, 3, 1, 12, 0, 0, tzinfo=UTC)


class WallClock:
    """What APScheduler takes for `datetime`."""

    def __init__(self) -> None:
        self.at = NOON + timedelta(seconds=30)

    def now(self, zone: object) -> datetime:
        return self.at


@pytest.fixture
def wall(monkeypatch: pytest.MonkeyPatch) -> WallClock:
    wall = WallClock()
    monkeypatch.setattr("apscheduler.schedulers.base.datetime", wall)
    return wall


@pytest.fixture
def rung() -> threading.Event:
    return threading.Event()


@pytest.fixture
def alarm(wall: WallClock, rung: threading.Event) -> Iterator[Alarm]:
    alarm = Alarm({"x": "* * * * *"}, rung.set)
    alarm.start()
    yield alarm
    alarm.stop()


def sleeps_s(alarm: Alarm) -> float:
    """One round of the scheduler, and how long it would sleep after it."""
    wait_s = alarm._scheduler._process_jobs()
    assert isinstance(wait_s, float)
    return wait_s


def test_it_rings_when_something_is_due(alarm: Alarm, wall: WallClock, rung: threading.Event) -> None:
    assert sleeps_s(alarm) == 30.0
    assert not rung.is_set()
    wall.at += timedelta(seconds=30)
    alarm._scheduler.wakeup()
    assert rung.wait(10)


def test_after_a_step_back_it_would_be_silent_and_is_not(alarm: Alarm, wall: WallClock, rung: threading.Event) -> None:
    wall.at -= timedelta(hours=1)
    assert sleeps_s(alarm) == 3630.0, "this is why its jobs are set again"
    alarm.set()
    assert sleeps_s(alarm) == 30.0
    wall.at += timedelta(seconds=30)
    alarm._scheduler.wakeup()
    assert rung.wait(10)


def test_after_a_step_forward_it_does_not_sleep_on(alarm: Alarm, wall: WallClock, rung: threading.Event) -> None:
    wall.at += timedelta(hours=2)
    alarm.set()
    assert sleeps_s(alarm) == 30.0


def test_many_times_at_once_ring_once(alarm: Alarm, wall: WallClock) -> None:
    rings: list[None] = []
    alarm._ring = lambda: rings.append(None)
    alarm.set()
    wall.at += timedelta(hours=2)
    assert sleeps_s(alarm) == 30.0
    alarm._scheduler._executors["default"].shutdown()
    assert len(rings) == 1


def test_an_alarm_that_fails_is_logged_and_rings_all_the_same(
    wall: WallClock, caplog: pytest.LogCaptureFixture
) -> None:
    rung, fail = threading.Event(), [True]

    def ring() -> None:
        if fail:
            fail.clear()
            raise OSError("no more threads")
        rung.set()

    alarm = Alarm({"x": "* * * * *"}, ring)
    alarm.start()
    wall.at += timedelta(seconds=30)
    alarm._scheduler.wakeup()
    assert rung.wait(10)
    alarm.stop()
    assert "the alarm of x failed: no more threads" in caplog.text


def test_an_alarm_that_never_started_can_be_stopped() -> None:
    Alarm({"x": "* * * * *"}, lambda: None).stop()


@pytest.mark.parametrize("seconds", [-3600, 7200])
def test_the_schedule_sets_its_alarm_again_after_each_step(bench: Stage, seconds: float) -> None:
    calls: list[None] = []
    schedule = bench.begin(HALF_HOURLY)
    schedule._alarm = SimpleNamespace(set=lambda: calls.append(None), stop=lambda: None)  # type: ignore[assignment]
    bench.clock.elapse(20 * 60)
    schedule.look()
    assert calls == []
    bench.clock.step(seconds)
    schedule.look()
    schedule.look()
    assert len(calls) == 1


def test_the_alarm_wakes_the_runner(bench: Stage, wall: WallClock, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("trapd.schedule.schedule.TICK_S", 600.0)
    looked, run = threading.Event(), bench.controller.run

    def run_and_tell(ticket: object) -> None:
        run(ticket)  # type: ignore[arg-type]
        looked.set()

    wall.at = NOON + timedelta(minutes=29, seconds=59.95)
    schedule = bench.begin(HALF_HOURLY)
    bench.controller.answer = run_and_tell
    schedule.start()
    bench.clock.elapse(30 * 60)
    wall.at = NOON + timedelta(minutes=30)
    assert looked.wait(10)
    schedule.close(10)
    assert bench.states() == [(30, "run")]
