"""What is left behind when something comes in between: each case once went wrong or nearly did."""

from __future__ import annotations

import threading
import time
from concurrent.futures import Future
from pathlib import Path
from typing import Any

import pytest

from tests.controller.bench import ENOUGH_S, HELD, QUICK, Bench, bench
from tests.controller.test_faults import SLOW, kill_disk, moving
from trapd.errors import InstrumentUnreachable, NotConfirmed, Superseded, TrapdError
from trapd.record import Draft, Entry
from trapd.remember import remember
from trapd.setpoint import Contents
from trapd_simulated import Fault, FaultKind


class SlowDisk:
    """The real record, whose answers come late."""

    def __init__(self, made: Bench, seconds: float) -> None:
        self._record, self._seconds = made.record, seconds
        made.controller._desk.record = self
        self.asked: list[str] = []

    def append(self, *drafts: Draft) -> Future[tuple[Entry, ...]]:
        self.asked += [draft.kind for draft in drafts]
        late: Future[tuple[Entry, ...]] = Future()
        written = self._record.append(*drafts)
        threading.Timer(self._seconds, lambda: late.set_result(written.result())).start()
        return late


def close(made: Bench) -> None:
    """As a daemon ends: controller, links, record."""
    made.controller.close()
    for worker in made.controller._desk.workers.values():
        worker.close(5.0)
    made.record.close()


def open_intents(made: Bench) -> set[int]:
    return {e.seq for e in made.entries("intent")} - {e.data["intent"] for e in made.entries("outcome")}


def test_a_bug_in_one_driver_does_not_keep_the_others_on(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        source = made.controller._desk.workers["rf"].instrument
        broken = type(source).set_output

        def bug(self: Any, on: bool) -> None:
            raise ValueError("no such unit")

        type(source).set_output = bug  # type: ignore[method-assign, assignment]
        try:
            answer = made.ask("off")
        finally:
            type(source).set_output = broken  # type: ignore[method-assign]
        assert answer["off"] is False
        assert answer["instruments"]["rf"]["error"] == "no such unit"
        assert not any(made.rack.electrodes().dc_outputs["dc"].values())
        made.wait(lambda: made.controller.situation.off_pending == ())
        assert not made.rack.electrodes().rf_outputs["rf"]


def test_a_bug_in_a_driver_leaves_an_outcome_and_a_result(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        supply = made.controller._desk.workers["dc"].instrument
        read = type(supply).read_voltage_v
        type(supply).read_voltage_v = lambda self, channel: 1 / 0  # type: ignore[method-assign, attr-defined]
        try:
            with pytest.raises(TrapdError):
                made.ask("set", values={"endcaps": 130.0})
        finally:
            type(supply).read_voltage_v = read  # type: ignore[method-assign, attr-defined]
        assert made.ask("set", values={"endcaps": 130.0})["state"] == "done"
        assert open_intents(made) == set()


def test_a_request_right_after_off_waits_for_it_and_sees_what_it_did(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("rf", Fault(kind=FaultKind.HANG))
        off = made.submit("off")
        time.sleep(0.02)  # DC goes off a quarter of a second after RF was tried
        late = made.submit("set", values={"endcaps": 130.0})
        assert off.done.result(ENOUGH_S)["instruments"]["dc"]["off"] is True
        with pytest.raises(TrapdError):
            late.done.result(ENOUGH_S)
        situation = made.controller.situation
        assert not any(on for name, on in situation.outputs.items() if name != "drive.output")
        assert situation.values["endcaps"] == 0.0


@pytest.mark.parametrize(
    ("instrument", "panel", "setpoint"), [("dc", "OUTP1 OFF", "endcaps"), ("rf", "OUTP OFF", "drive.amplitude")]
)
def test_an_output_that_goes_off_in_a_ramp_stops_it(tmp_path: Path, instrument: str, panel: str, setpoint: str) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        target = {"endcaps": 400.0, "drive.amplitude": 380.0}[setpoint]
        ramp = made.submit("set", values={setpoint: target})
        made.wait(lambda: moving(made))
        made.rack.front_panel(instrument, panel)
        with pytest.raises(NotConfirmed, match=r"its output is off|reads 0\.\d+ V after"):
            ramp.done.result(ENOUGH_S)
        assert made.entries("outcome")[-1].data["readback"] < 1.0
        made.wait(lambda: made.controller.situation.values[setpoint] == 0.0)


def test_rf_found_off_puts_the_contents_in_doubt_at_once(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.front_panel("rf", "OUTP OFF")
        with pytest.raises(TrapdError):
            made.ask("set", values={"rods": 1.5})
        assert made.controller.situation.contents == Contents(presence="unknown", ions=HELD.ions)


def test_the_end_of_the_daemon_does_not_call_a_command_in_flight_unsent(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        made.rack.inject("dc", Fault(kind=FaultKind.SLOW_REPLY, delay_s=0.3, times=1))
        time.sleep(0.05)
        close(made)
        with pytest.raises(Superseded):
            ramp.done.result(ENOUGH_S)
        outcomes = {e.data["intent"]: e.data["state"] for e in made.entries("outcome")}
        last = max(e.seq for e in made.entries("intent") if outcomes.get(e.seq) != "not sent")
        told = next(e.data["value"] for e in made.entries("intent") if e.seq == last)
        assert made.rack.electrodes().terminals_v["dc"][1] == pytest.approx(told, abs=0.01)


def test_a_stop_while_an_intent_is_being_written_withdraws_it(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        disk = SlowDisk(made, 0.1)
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: "intent" in disk.asked)
        before = made.received()
        made.ask("stop")
        with pytest.raises(Superseded):
            ramp.done.result(ENOUGH_S)
        made.wait(lambda: open_intents(made) == set())
        made.wait(lambda: made.entries("outcome")[-1].data["state"] == "not sent")
        assert made.commands(before) == []


def test_a_stop_while_the_request_is_being_written_gives_it_its_one_result(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        disk = SlowDisk(made, 0.1)
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: "ramp" in disk.asked)
        assert made.ask("stop")["stopped"] is True
        with pytest.raises(Superseded):
            ramp.done.result(ENOUGH_S)
        request = made.entries("request")[-1]
        assert request.data["values"] == SLOW["values"]
        made.wait(lambda: made.entries("result")[-1].data["request"] == request.seq)
        assert made.entries("result")[-1].data["state"] == "stopped"
        assert [e.data["values"] for e in made.entries("request")].count(SLOW["values"]) == 1


def test_contents_on_the_disk_are_the_contents_in_force_also_when_the_request_was_stopped(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        disk = SlowDisk(made, 0.1)
        ticket = made.submit("ions", contents=Contents(presence="none"))
        made.wait(lambda: "contents" in disk.asked)
        made.ask("stop")
        with pytest.raises(Superseded):
            ticket.done.result(ENOUGH_S)
        made.wait(lambda: made.controller.situation.contents.presence == "none")
        made.wait(lambda: made.entries("contents")[-1].data["presence"] == "none")


def test_a_stopped_move_knows_where_it_stands(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        made.rack.inject("dc", Fault(kind=FaultKind.SLOW_REPLY, delay_s=0.2, times=1))
        time.sleep(0.05)
        made.ask("stop")
        with pytest.raises(Superseded):
            ramp.done.result(ENOUGH_S)
        time.sleep(0.5)
        stands = made.rack.electrodes().terminals_v["dc"][1]
        assert made.controller.situation.values["endcaps"] == pytest.approx(stands, abs=0.01)
        before = len(made.entries("found"))
        made.ask("set", values={"rods": 1.5})
        assert len(made.entries("found")) == before, "nothing differs that nobody changed"


def test_another_setpoint_waits_until_a_stopped_one_has_settled(tmp_path: Path) -> None:
    toml = QUICK.replace('lag = "3 ms"', 'lag = "200 ms"')
    with bench(tmp_path, toml) as made:
        made.switch_on()
        ramp = made.submit("set", **SLOW)
        made.wait(lambda: moving(made))
        made.ask("stop")
        with pytest.raises(Superseded):
            ramp.done.result(ENOUGH_S)
        stopped_at = time.monotonic()
        made.ask("set", values={"drive.amplitude": 262.0})
        # By hand: the residue of 45 V or more is under a tenth of the margin (0.1 x 5 % x 165 V) after 200 ms x ln(54).
        assert time.monotonic() - stopped_at > 0.5


def test_a_first_start_without_the_synthesizer_says_so_and_goes_on_when_it_comes(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        first.switch_on()
        close(first)
        first.rack.inject("rf", Fault(kind=FaultKind.REFUSE_CONNECTIONS))
        elsewhere = tmp_path / "new record"
        elsewhere.mkdir()
        with bench(elsewhere, rack=first.rack) as second:
            for kind, fields in (("set", {"values": {"endcaps": 130.0}}), ("ions", {"contents": HELD})):
                with pytest.raises(InstrumentUnreachable, match=r"drive\.frequency: rf does not answer"):
                    second.ask(kind, **fields)
            first.rack.clear("rf")
            assert second.ask("set", values={"endcaps": 130.0})["state"] == "done"


def test_a_start_compares_whatever_was_commanded_before(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        first.switch_on()
        close(first)
        elsewhere = tmp_path / "other record"
        elsewhere.mkdir()
        with bench(elsewhere, rack=first.rack) as second:
            second.ask("set", values={"endcaps": 130.0})  # all that this record will ever know
            close(second)
            first.rack.front_panel("dc", "SOUR1:VOLT 300")
            with bench(elsewhere, rack=first.rack) as third:
                assert third.controller.situation.doubt == ("endcaps reads 300 V, last commanded 130 V",)


def test_what_was_written_late_comes_before_anything_new(tmp_path: Path) -> None:
    from trapd.record import Reader

    with bench(tmp_path) as made:
        made.switch_on()
        disk = kill_disk(made)
        made.ask("off")
        disk.dead = False
        made.wait(lambda: made.controller.situation.contents.presence == "none")
        made.ask("on")
        kinds = [e.kind for e in made.entries()]
        assert kinds.index("off") < len(kinds) - 1 - kinds[::-1].index("ramp")
        with Reader.open(made.path) as reader:
            remembered = remember(reader)
        assert all(remembered.outputs.values())
        assert remembered.values["endcaps"] == 120.0


def test_what_could_not_be_written_is_tried_a_last_time_at_the_end(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        disk = kill_disk(made)
        made.ask("off")
        made.controller._desk.retry_due_ns = 2**62  # no retry of its own before the end
        disk.dead = False
        close(made)
        assert made.entries("off")[-1].data["written_late"] is True


def test_off_does_not_wait_for_a_very_long_ramp_to_be_made(tmp_path: Path) -> None:
    toml = QUICK.replace('slew = "5000 V/s", step = "5 V"', 'slew = "5000 V/s", step = "0.03 V"')
    assert toml != QUICK
    with bench(tmp_path, toml) as made:
        made.wait_until_empty()
        longest = 0.0
        ticket = made.submit("on")
        until = time.monotonic() + 1.0
        while time.monotonic() < until and not ticket.recorded.done():
            began = time.perf_counter()
            seen = threading.Event()
            made.controller._stage.post(seen.set)
            assert seen.wait(5.0)
            longest = max(longest, time.perf_counter() - began)
        assert made.ask("off")["off"] is True
        assert longest < 0.25


def test_a_move_that_moves_nothing_leaves_the_way_back_as_it_was(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.ask("set", values={"endcaps": 125.0})
        made.ask("set", values={"endcaps": 125.0})
        assert made.ask("back")["values"]["endcaps"] == 120.0


def test_held_is_not_taken_on_trust_while_an_instrument_does_not_answer(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on(held=False)
        made.rack.inject("rf", Fault(kind=FaultKind.HANG))
        with pytest.raises(InstrumentUnreachable):
            made.ask("ions", contents=HELD)
        assert made.controller.situation.contents.presence == "none"


def test_a_species_that_left_the_file_puts_the_whole_catalogue_under_guard(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        first.switch_on()
        close(first)
        toml = QUICK.replace('ion = "40Ca+"', 'ion = "44Ca+"')
        with bench(tmp_path, toml, rack=first.rack) as second:
            assert second.controller.situation.contents == Contents(presence="unknown")
            found = second.entries("found")[-1].data
            assert found["no_longer_in_the_file"] == ["40Ca+"]
            assert second.ask("set", values={"drive.amplitude": 60.0})["accepted"] is False


def test_loading_into_a_trap_of_unknown_contents_guards_the_catalogue(tmp_path: Path) -> None:
    toml = QUICK.replace('ion = "40Ca+"\n', 'ion = "40Ca+"\n\n[[species]]\nion = "88Sr+"\n')
    with bench(tmp_path, toml) as made:
        made.switch_on(held=False)
        made.ask("ions", contents=Contents(presence="unknown"))
        made.ask("ions", contents=Contents(presence="loading", incoming=("40Ca+",)))
        assert set(made.controller.situation.contents.ions) == {"40Ca+", "88Sr+"}


def test_a_request_nobody_waits_for_any_more_is_dropped_before_its_turn(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        first = made.submit("set", **SLOW)
        waiting = made.submit("set", values={"rods": 3.0})
        made.wait(lambda: moving(made))
        made.controller.withdraw(waiting)
        with pytest.raises(Superseded, match="went away before its turn"):
            waiting.done.result(ENOUGH_S)
        assert first.done.result(ENOUGH_S)["state"] == "done"
        assert made.controller.situation.values["rods"] == 1.0


def test_a_full_queue_is_a_refusal_and_stands_in_the_record(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        tickets = [made.submit("set", values={"endcaps": 300.0 + k}) for k in range(18)]
        made.ask("off")
        assert tickets[-1].done.exception(ENOUGH_S) is not None
        made.wait(lambda: any(e.data["code"] == "queue_full" for e in made.entries("result")))


def test_no_request_begins_while_contents_are_being_written(tmp_path: Path) -> None:
    """A move judged for an empty trap must not run once somebody's *held* stands on the disk."""
    with bench(tmp_path) as made:
        made.switch_on(held=False)
        disk = SlowDisk(made, 0.15)
        held = made.submit("ions", contents=HELD)
        made.wait(lambda: "contents" in disk.asked)
        made.ask("stop")
        answer = made.ask("set", values={"drive.amplitude": 20.0})
        with pytest.raises(Superseded):
            held.done.result(ENOUGH_S)
        assert answer["accepted"] is False
        assert made.controller.situation.contents == HELD


def test_a_second_off_does_not_forget_what_the_first_is_still_trying(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.HANG))
        made.ask("off")
        made.rack.front_panel("rf", "OUTP ON")
        made.rack.inject("rf", Fault(kind=FaultKind.HANG))
        made.ask("off")
        assert set(made.controller.situation.off_pending) == {"rf", "dc"}
        made.rack.clear("dc")
        made.wait(lambda: made.controller.situation.off_pending == ("rf",))
        made.rack.clear("rf")
        made.wait(lambda: made.controller.situation.off_pending == ())
        assert not made.rack.electrodes().rf_outputs["rf"]


def test_off_is_done_although_its_reason_cannot_be_written(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        answer = made.ask("off", why="\ud800")  # a lone surrogate is no text
        assert answer["off"] is True
        assert answer["recorded"] is False
        made.wait(lambda: made.controller.situation.contents.presence == "none")


def test_a_stop_in_the_dark_of_empty_leaves_nobody_held(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        ticket = made.submit("empty")
        made.wait(lambda: made.controller.situation.outputs["drive.output"] is False)
        made.ask("stop")
        with pytest.raises(Superseded):
            ticket.done.result(ENOUGH_S)
        made.wait(lambda: made.controller.situation.contents.presence == "none")
        assert not made.rack.electrodes().rf_outputs["rf"]


def test_a_power_cycle_seen_by_a_look_that_was_stopped_is_not_forgotten(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.power_cycle("dc", 0.01)
        made.rack.front_panel("dc", "SOUR1:VOLT 120;:OUTP1 ON;:SOUR2:VOLT 1;:OUTP2 ON;:OUTP3 ON")
        made.rack.inject("rf", Fault(kind=FaultKind.SLOW_REPLY, delay_s=0.5, times=1))
        first = made.submit("set", values={"rods": 1.5})
        time.sleep(0.2)
        made.ask("stop")
        with pytest.raises(Superseded):
            first.done.result(ENOUGH_S)
        made.ask("set", values={"rods": 1.2})
        assert made.controller.situation.contents == Contents(presence="unknown", ions=HELD.ions)
        made.wait(
            lambda: any("dc was switched on" in " ".join(e.data.get("differences", ())) for e in made.entries("found"))
        )


@pytest.mark.parametrize(
    ("before", "then", "guarded"),
    [
        (
            Contents(presence="loading", incoming=("40Ca+",)),
            Contents(presence="loading", incoming=("88Sr+",)),
            {"40Ca+"},
        ),
        (Contents(presence="loading", incoming=("40Ca+",)), Contents(presence="unknown"), {"40Ca+"}),
    ],
)
def test_what_was_loading_is_guarded_by_whatever_is_declared_next(
    tmp_path: Path, before: Contents, then: Contents, guarded: set[str]
) -> None:
    toml = QUICK.replace('ion = "40Ca+"\n', 'ion = "40Ca+"\n\n[[species]]\nion = "88Sr+"\n')
    with bench(tmp_path, toml) as made:
        made.switch_on(held=False)
        made.ask("ions", contents=before)
        made.ask("ions", contents=then)
        assert guarded <= set(made.controller.situation.contents.ions)
