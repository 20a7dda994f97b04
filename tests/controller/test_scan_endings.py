"""How a scan can end badly, and must not: bursts after off, states that are no longer those judged, answers given twice."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from concurrent.futures import Future
from pathlib import Path
from typing import Any

import pytest

from tests.controller.bench import SCANNED, Bench, bench
from tests.controller.test_scans import LONG, begin, hold, is_silent, open_intents
from trapd.config.records import DueSection
from trapd.errors import BadRequest, Conflict, NotConfirmed, RecordUnwritable, Superseded
from trapd.record import Draft, Entry, Reader
from trapd.schedule import Schedule
from trapd.setpoint import Contents, Due, Request
from trapd_simulated import Rack, RackSettings


@pytest.fixture
def holding(tmp_path: Path) -> Iterator[Bench]:
    with bench(tmp_path, LONG) as made:
        hold(made)
        yield made


def due_now(made: Bench) -> Due:
    return Due(schedule="x", scan="x", due_us=made.controller._desk.clock.now_us())


@pytest.mark.parametrize("kind", ["set", "stop"])
def test_a_burst_that_waits_in_its_instrument_s_queue_does_not_come_after_the_off(holding: Bench, kind: str) -> None:
    """The moment at which it is forced: between the submit of a burst and its instrument's thread taking it."""
    desk = holding.controller._desk
    real, asked, bursts = desk.submit, {}, []

    def submit(instrument: str, job: Any, *, urgent: bool = False) -> Future[Any]:
        if instrument == "tickle" and not urgent and "burst" in job.__qualname__:
            bursts.append(job)
            if len(bursts) == 3:
                blocked, free = threading.Event(), threading.Event()
                desk.workers["tickle"].submit(lambda _: (blocked.set(), free.wait(5)))
                blocked.wait(5)
                future = real(instrument, job, urgent=urgent)
                fields = {"values": {"endcaps": 125.0}} if kind == "set" else {}
                asked["ticket"] = holding.submit(kind, **fields)
                threading.Timer(0.3, free.set).start()
                return future
        return real(instrument, job, urgent=urgent)

    desk.submit = submit  # type: ignore[method-assign]
    request = Request(kind="scan", author="schedule", why="due", scan="x", due=due_now(holding))
    ticket = holding.controller.submit(request)
    with pytest.raises(Superseded):
        ticket.done.result(30)
    asked["ticket"].done.result(30)
    assert is_silent(holding)
    holding.wait(lambda: open_intents(holding) == [])
    told = [m.text for m in holding.rack.received if m.instrument == "tickle" and "?" not in m.text.split(";")[0]]
    assert told[-1].startswith("OUTP OFF")


def test_what_waits_for_the_record_does_not_go_on_after_off(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED) as made:
        made.wait_until_empty()
        disk = SlowDisk(made)
        made.submit("stop").done.result(5)  # its entry cannot be written, and waits
        made.controller._desk.retry_due_ns = made.controller._desk.clock.monotonic_ns() + 10**12
        disk.mode = "slow"
        on = made.submit("on")
        time.sleep(0.5)  # it waits for that entry
        disk.mode = "well"
        made.ask("off")
        before = made.received()
        disk.gate.set()
        with pytest.raises(Superseded):
            on.done.result(10)
        time.sleep(0.3)
        assert [m.text for m in made.rack.received_after(before) if "ON" in m.text] == []


class SlowDisk:
    def __init__(self, made: Bench) -> None:
        self.mode, self.gate, self._real = "failing", threading.Event(), made.record
        made.controller._desk.record = self

    def append(self, *drafts: Draft) -> Future[tuple[Entry, ...]]:
        future: Future[tuple[Entry, ...]] = Future()
        if self.mode == "failing":
            future.set_exception(RecordUnwritable("no space left"))
            return future
        written = self._real.append(*drafts)
        if self.mode == "well":
            return written

        def answer() -> None:
            self.gate.wait(20)
            future.set_result(written.result())

        threading.Thread(target=answer, daemon=True).start()
        return future


def test_a_hung_tickle_does_not_hide_what_the_other_instruments_show(holding: Bench) -> None:
    ticket = begin(holding)
    holding.rack.inject("tickle", "hang")
    with pytest.raises(Exception, match="tickle"):
        ticket.done.result(30)  # type: ignore[attr-defined]
    holding.wait(lambda: holding.controller.situation.off_pending == ("tickle",))
    holding.rack.front_panel("dc", "VOLT 180")
    holding.ask("set", values={"rods": 1.5})
    assert holding.controller.situation.values["endcaps"] == pytest.approx(180.0, abs=0.5)


def test_a_tickle_that_somebody_switched_on_is_neither_counted_with_nor_changed(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED) as made:
        hold(made)
        for text in ("FREQ 100000", "VOLT 0.5", "OUTP ON"):
            made.rack.front_panel("tickle", text)
        before = made.received()
        with pytest.raises(
            Conflict, match="the tickle's output is on, and no scan switched it on; `trapd stop` switches it"
        ):
            made.ask("scan", scan="x")
        assert not [m for m in made.rack.received_after(before) if m.instrument == "tickle" and "FREQ " in m.text]
        made.ask("stop")
        made.wait(lambda: is_silent(made) and not made.controller.situation.tickling)


def test_a_change_in_the_last_pass_leaves_no_frequency_of_a_state_that_was_left(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED.replace('target = "50 Hz"', 'target = "1 Hz"\npasses = 2')) as made:
        hold(made)
        ticket = made.submit("scan", scan="x")
        made.wait(lambda: (s := made.controller.situation.scanning) is not None and s.pass_number == 2 and s.point >= 5)
        made.rack.front_panel("dc", "VOLT 121")
        with pytest.raises(Conflict, match="endcaps: no longer as judged"):
            ticket.done.result(60)
        assert made.entries("secular_frequency") == []


def test_what_was_found_before_the_scan_and_judged_from_does_not_end_it(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED.replace('target = "50 Hz"', 'target = "1 Hz"\npasses = 2')) as made:
        hold(made)
        made.rack.front_panel("dc", "VOLT 125")
        assert made.ask("scan", scan="x")["finding"]["state"] == "found"


def test_a_due_run_that_is_superseded_while_it_is_written_down_has_one_entry(tmp_path: Path) -> None:
    """With a commit that takes its time, as on a busy disk, and a person's request in the middle of it."""
    with bench(tmp_path, SCANNED) as made, Reader.open(made.path) as reader:
        hold(made)
        asked: dict[str, Any] = {}
        clock, real = made.controller._desk.clock, made.record._file.commit

        def commit(rows: Any, head: Any) -> Any:
            if "due_runs" in rows and not asked:
                asked["set"] = made.submit("set", values={"endcaps": 121.0})
                time.sleep(0.5)
            return real(rows, head)

        made.record._file.commit = commit  # type: ignore[method-assign]
        section = DueSection(name="x", scan="x", cron="* * * * *")
        schedule = Schedule([section], controller=made.controller, record=made.record, reader=reader, clock=clock)
        due_us = clock.now_us() // 60_000_000 * 60_000_000
        schedule._start_us = due_us - 1
        schedule._rows[0].newest_us, schedule._rows[0].since_us = 0, due_us - 60_000_000
        schedule.look()
        assert asked["set"].done.result(20)["state"] == "done"
        assert [e.data["due_us"] for e in made.entries("due_run")] == [due_us]


def test_claims_and_pauses_hold_for_what_waited_before_them(holding: Bench) -> None:
    begin(holding)
    due = Request(kind="scan", author="schedule", why="due", scan="x", due=due_now(holding))
    waiting = holding.controller.submit(due)
    holding.ask("claim")
    holding.ask("set", values={"endcaps": 121.0})  # ends ada's own scan; the due one would be next
    with pytest.raises(Conflict, match="ada claims the trap"):
        waiting.recorded.result(10)


def test_of_two_claims_at_once_one_is_refused(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED) as made:
        tickets = [made.controller.submit(Request(kind="claim", author=who, why="mine")) for who in ("ada", "ben")]
        assert tickets[0].done.result(5)["claim"]["who"] == "ada"
        with pytest.raises(Conflict, match="ada claims the trap"):
            tickets[1].done.result(5)


def test_a_dead_tickle_does_not_keep_the_trap_off(tmp_path: Path) -> None:
    with Rack(RackSettings(), seed=1) as rack:
        rack.power_off("tickle")
        with bench(tmp_path, SCANNED, rack=rack) as made:
            made.wait_until_empty()
            assert made.ask("on")["state"] == "done"


def test_a_count_that_came_after_its_burst_is_not_used(holding: Bench) -> None:
    counter: Any = holding.controller._desk.workers["counter"].instrument
    started, read = {}, counter.read_count
    start = counter.start_count

    def start_count(gate_s: float) -> None:
        started["at"] = time.monotonic()
        start(gate_s)

    counter.start_count = start_count
    counter.read_count = lambda: None if time.monotonic() - started["at"] < 0.7 else read()
    with pytest.raises(NotConfirmed, match=r"3 bursts of 0.52 s may have ended before their counts did"):
        holding.ask("scan", scan="x")
    assert [e for e in holding.entries("scan_point") if e.data["frequency_hz"] is not None] == []


def test_a_burst_that_somebody_cut_short_is_not_used(holding: Bench) -> None:
    tickle: Any = holding.controller._desk.workers["tickle"].instrument
    start = tickle.start_burst

    def start_burst(duration_s: float) -> None:
        start(duration_s)
        holding.rack.front_panel("tickle", "OUTP OFF")

    tickle.start_burst = start_burst
    with pytest.raises(NotConfirmed):
        holding.ask("scan", scan="x")
    assert [e for e in holding.entries("scan_point") if e.data["frequency_hz"] is not None] == []


def test_a_request_that_cannot_be_stops_no_scan(holding: Bench) -> None:
    begin(holding, author="schedule", due=due_now(holding))
    with pytest.raises(BadRequest, match="no setpoint 'nosuch'"):
        holding.ask("set", values={"nosuch": 1.0})
    assert holding.controller.situation.scanning is not None


def test_a_counter_that_was_switched_off_and_on_does_not_make_the_contents_doubtful(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED) as made:
        hold(made)
        made.rack.power_cycle("counter")
        made.ask("set", values={"endcaps": 121.0})
        assert made.controller.situation.contents == Contents(presence="held", ions={"40Ca+": 1})


def test_nothing_moves_before_a_burst_that_nobody_could_end_has_ended_by_itself(tmp_path: Path) -> None:
    with bench(tmp_path, LONG.replace('dwell = "20 ms"', 'dwell = "1.5 s"')) as made:
        hold(made)
        begin(made, author="schedule", due=due_now(made))
        made.rack.inject("tickle", "hang")
        moved: list[float] = []
        made.submit("set", values={"endcaps": 125.0}).done.result(30)
        moved.append(made.rack.electrodes().levels_v["tickle"])
        assert moved == [0.0]
