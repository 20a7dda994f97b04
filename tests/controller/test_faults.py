"""What the controller does when instruments, people or the disk do not do what they should."""

from __future__ import annotations

import time
from concurrent.futures import Future
from pathlib import Path
from typing import Any

import pytest

from tests.controller.bench import ENOUGH_S, HELD, Bench, bench
from trapd.clock import SystemClock
from trapd.errors import (
    Conflict,
    InstrumentUnreachable,
    NotConfirmed,
    QueueFull,
    RecordUnwritable,
    Superseded,
)
from trapd.record import Draft, Entry
from trapd.setpoint import Contents
from trapd_simulated import Fault, FaultKind

SLOW = {"values": {"endcaps": 400.0}}
"""A move of some tenths of a second on the quick bench."""


class DeadDisk:
    """A record that can be told to fail, in place of the real one; what it fails is written nowhere."""

    def __init__(self, record: Any) -> None:
        self._record = record
        self.dead = False

    def append(self, *drafts: Draft) -> Future[tuple[Entry, ...]]:
        if not self.dead:
            return self._record.append(*drafts)  # type: ignore[no-any-return]
        future: Future[tuple[Entry, ...]] = Future()
        future.set_exception(RecordUnwritable("no space left; nothing was sent"))
        return future


def kill_disk(made: Bench) -> DeadDisk:
    disk = DeadDisk(made.record)
    made.controller._desk.record = disk
    disk.dead = True
    return disk


def moving(made: Bench) -> bool:
    situation = made.controller.situation
    return situation.moving is not None and situation.moving.step > 5


def test_an_instrument_that_ignores_a_command_stops_the_move_there(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.IGNORE_COMMANDS))
        with pytest.raises(NotConfirmed, match=r"endcaps reads 12.* the outputs hold"):
            made.ask("set", values={"endcaps": 150.0})
        assert made.controller.situation.values["endcaps"] == 120.0
        assert made.entries("outcome")[-1].data["state"] == "not confirmed"
        made.wait(lambda: made.entries("result")[-1].data["state"] == "failed")
        made.rack.clear("dc")
        assert made.ask("set", values={"endcaps": 130.0})["state"] == "done"


def test_an_instrument_that_refuses_a_command_is_quoted(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.REFUSE_COMMANDS, value=-221))
        with pytest.raises(NotConfirmed, match="-221"):
            made.ask("set", values={"endcaps": 150.0})


def test_a_readback_far_off_stops_the_move(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.READBACK_OFFSET, value=7.0, channel=1))
        with pytest.raises(NotConfirmed, match="endcaps reads"):
            made.ask("set", values={"endcaps": 150.0})


def test_a_dead_instrument_refuses_what_touches_it_and_nothing_else(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.HANG))
        with pytest.raises(InstrumentUnreachable, match="endcaps: dc does not answer"):
            made.ask("set", values={"endcaps": 150.0})
        assert made.ask("set", values={"drive.amplitude": 262.0})["state"] == "done"
        assert set(made.controller.situation.unreachable) == {"dc"}
        assert made.controller.situation.values["endcaps"] == 120.0
        made.rack.clear("dc")
        assert made.ask("set", values={"endcaps": 130.0})["state"] == "done"
        assert made.controller.situation.unreachable == {}


def test_a_front_panel_change_is_found_recorded_and_judged_from(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.front_panel("dc", "SOUR1:VOLT 180")
        made.ask("set", values={"rods": 1.5})
        found = made.entries("found")[-1].data
        assert found["differences"] == ["endcaps reads 180 V, last commanded 120 V"]
        assert made.controller.situation.values["endcaps"] == 180.0
        made.wait(lambda: made.rack.electrodes().terminals_v["dc"][1] == 180.0)  # the supply slews


def test_a_power_cycle_makes_the_contents_unknown_and_nothing_comes_back_by_itself(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.power_cycle("dc", 0.01)
        with pytest.raises(Conflict, match="are off"):
            made.ask("set", values={"rods": 1.5})
        assert made.controller.situation.contents.presence == "unknown"
        assert made.controller.situation.values["endcaps"] == 0.0
        assert not any(made.rack.electrodes().dc_outputs["dc"].values())


def test_off_in_a_ramp_is_next_and_the_ramp_says_what_happened(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        answer = made.ask("off")
        assert answer["off"] is True
        assert max(one["after_s"] for one in answer["instruments"].values()) < 0.25
        with pytest.raises(Superseded, match="off came first"):
            ramp.done.result(ENOUGH_S)
        after_off = made.received()
        electrodes = made.rack.electrodes()
        assert not electrodes.rf_outputs["rf"]
        assert not any(electrodes.dc_outputs["dc"].values())
        made.wait(lambda: made.entries("result")[-1].data["state"] == "stopped")
        with_outcome = {entry.data["intent"] for entry in made.entries("outcome")}
        made.wait(
            lambda: (
                {entry.seq for entry in made.entries("intent")} == with_outcome
                or not with_outcome.update(e.data["intent"] for e in made.entries("outcome"))
            )
        )
        assert made.commands(after_off) == []


def test_off_waits_for_no_queue(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        waiting = [made.submit("set", values={"endcaps": 400.0 - k}) for k in range(10)]
        made.wait(lambda: moving(made))
        assert made.ask("off")["off"] is True
        for ticket in waiting:
            with pytest.raises(Superseded):
                ticket.done.result(ENOUGH_S)


@pytest.mark.parametrize("hung", ["rf", "dc"])
def test_off_with_a_hung_instrument_switches_the_others_off_and_names_it(tmp_path: Path, hung: str) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject(hung, Fault(kind=FaultKind.HANG))
        answer = made.ask("off")
        other = {"rf": "dc", "dc": "rf"}[hung]
        assert answer["off"] is False
        assert answer["instruments"][hung]["off"] is False
        assert answer["instruments"][other]["off"] is True
        assert answer["instruments"][other]["after_s"] < 0.5
        assert made.controller.situation.off_pending == (hung,)
        made.rack.clear(hung)
        made.wait(lambda: made.controller.situation.off_pending == ())
        electrodes = made.rack.electrodes()
        assert not electrodes.rf_outputs["rf"]
        assert not any(electrodes.dc_outputs["dc"].values())


def test_off_interrupts_an_exchange_that_hangs_in_the_middle_of_a_ramp(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        made.rack.inject("dc", Fault(kind=FaultKind.HANG, times=1))
        time.sleep(0.02)  # the exchange in hand now hangs; nothing tells when it began
        answer = made.ask("off")
        assert answer["off"] is True
        assert answer["instruments"]["dc"]["after_s"] < 1.0
        with pytest.raises((Superseded, InstrumentUnreachable)):
            ramp.done.result(ENOUGH_S)


def test_without_a_record_nothing_moves_and_off_still_works(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        disk = kill_disk(made)
        before = made.received()
        with pytest.raises(RecordUnwritable, match="nothing was sent"):
            made.ask("set", values={"endcaps": 150.0})
        assert made.commands(before) == []
        answer = made.ask("off")
        assert (answer["off"], answer["recorded"], answer["entry"]) == (True, False, None)
        assert made.controller.situation.unwritten > 0
        disk.dead = False
        made.wait(lambda: bool(made.entries("off")))
        late = made.entries("off")[-1]
        assert late.data["written_late"] is True
        assert late.actor == "ada"


def test_a_record_that_dies_in_a_ramp_stops_it_at_the_last_verified_step(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        disk = kill_disk(made)
        with pytest.raises(RecordUnwritable):
            ramp.done.result(ENOUGH_S)
        stands = made.controller.situation.values["endcaps"]
        assert 120.0 < stands < 400.0
        assert made.rack.electrodes().terminals_v["dc"][1] == pytest.approx(stands, abs=0.01)
        disk.dead = False
        intents = {e.seq for e in made.entries("intent")}
        made.wait(lambda: intents == {e.data["intent"] for e in made.entries("outcome")})
        made.wait(lambda: made.entries("result")[-1].data["state"] == "failed")


def test_a_stop_holds_where_it_is(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        assert made.ask("stop")["stopped"] is True
        with pytest.raises(Superseded, match="stop"):
            ramp.done.result(ENOUGH_S)
        time.sleep(0.1)
        here = made.rack.electrodes()
        assert here.rf_outputs["rf"]
        assert 120.0 < here.terminals_v["dc"][1] < 400.0
        assert made.ask("set", values={"rods": 1.5})["state"] == "done"


def test_one_request_too_many_is_answered_at_once(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        tickets = [made.submit("set", values={"endcaps": 300.0 + k}) for k in range(30)]
        with pytest.raises(QueueFull, match="16 requests wait already; nothing was sent"):
            tickets[-1].done.result(5.0)
        made.ask("off")


def test_empty_lets_go_waits_and_comes_back(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        answer = made.ask("empty")
        assert answer["state"] == "done"
        assert answer["values"]["drive.amplitude"] == pytest.approx(260.0, abs=0.01)
        assert made.controller.situation.contents.presence == "none"
        outputs = [e for e in made.entries("intent") if e.data["setpoint"] == "drive.output"][-2:]
        assert [e.data["level"] for e in outputs] == [0.0, 1.0]
        assert (outputs[1].monotonic_ns - outputs[0].monotonic_ns) / 1e9 > 1.0


def test_empty_can_stay_off(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        assert made.ask("empty", stay_off=True)["state"] == "done"
        assert not made.rack.electrodes().rf_outputs["rf"]
        assert made.controller.situation.contents.presence == "none"


class Wound(SystemClock):
    """The system's clocks, each wound by hand."""

    wall_ahead_us = 0
    monotonic_ahead_ns = 0

    def now_us(self) -> int:
        return super().now_us() + self.wall_ahead_us

    def monotonic_ns(self) -> int:
        return super().monotonic_ns() + self.monotonic_ahead_ns


def test_loading_that_is_not_concluded_becomes_unknown_and_guards_both(tmp_path: Path) -> None:
    clock = Wound()
    with bench(tmp_path, clock=clock) as made:
        made.switch_on()
        made.ask("ions", contents=Contents(presence="loading", incoming=("40Ca+",)))
        assert made.controller.situation.contents.presence == "loading"
        clock.wall_ahead_us = 86_400_000_000  # a step of the wall clock neither ends nor prolongs it
        time.sleep(0.6)
        assert made.controller.situation.contents.presence == "loading"
        clock.monotonic_ahead_ns = 601_000_000_000  # [loading] expires after 10 minutes when the file does not say
        made.wait(lambda: made.controller.situation.contents.presence == "unknown")
        assert made.controller.situation.contents.ions == {"40Ca+": 2}


def test_unknown_keeps_the_last_held_guarded(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.ask("ions", contents=Contents(presence="unknown"))
        assert made.controller.situation.contents.ions == HELD.ions
        assert made.ask("set", values={"drive.amplitude": 60.0})["accepted"] is False


def test_a_reason_is_required_where_contents_change(tmp_path: Path) -> None:
    from trapd.errors import BadRequest

    with bench(tmp_path) as made:
        made.wait_until_empty()
        for kind, fields in (("on", {}), ("ions", {"contents": HELD})):
            with pytest.raises(BadRequest, match="a reason is required"):
                made.ask(kind, why=" ", **fields)


def test_the_next_controller_finds_what_the_last_one_left(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        first.switch_on()
        first.ask("set", values={"endcaps": 150.0})
        first.controller.close()
        first.record.close()
        for worker in first.controller._desk.workers.values():
            worker.close(5.0)
        first.rack.front_panel("dc", "SOUR2:VOLT 2")
        sent = first.received()
        with bench(tmp_path, rack=first.rack) as second:
            situation = second.controller.situation
            assert situation.values["endcaps"] == 150.0
            assert situation.contents.presence == "unknown"
            assert situation.contents.ions == HELD.ions
            assert situation.doubt == ("rods reads 2 V, last commanded 1 V",)
            assert second.commands(sent) == []
            assert second.ask("back")["state"] == "done"
            assert second.controller.situation.values["endcaps"] == 120.0


def test_an_instrument_that_is_dead_at_the_start_does_not_take_off_away_and_may_come_later(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        first.switch_on()
        first.controller.close()
        first.record.close()
        for worker in first.controller._desk.workers.values():
            worker.close(5.0)
        first.rack.inject("dc", Fault(kind=FaultKind.REFUSE_CONNECTIONS))
        with bench(tmp_path, rack=first.rack) as second:
            assert set(second.controller.situation.unreachable) == {"dc"}
            assert second.controller.situation.values["endcaps"] == 120.0  # last commanded; nobody can say more
            with pytest.raises(InstrumentUnreachable):
                second.ask("set", values={"endcaps": 130.0})
            first.rack.clear("dc")
            assert second.ask("set", values={"endcaps": 130.0})["state"] == "done"


def test_off_works_while_an_instrument_was_never_there(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        first.switch_on()
        first.controller.close()
        first.record.close()
        for worker in first.controller._desk.workers.values():
            worker.close(5.0)
        first.rack.inject("dc", Fault(kind=FaultKind.REFUSE_CONNECTIONS))
        with bench(tmp_path, rack=first.rack) as second:
            answer = second.ask("off")
            assert answer["instruments"]["rf"]["off"] is True
            assert answer["instruments"]["dc"]["off"] is False
            assert not first.rack.electrodes().rf_outputs["rf"]
