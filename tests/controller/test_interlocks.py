"""Interlocks: a gauge beyond its level stops what moves, and does what the file says, whatever else hangs."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

from tests.controller.bench import HELD, QUICK, Bench, bench
from trapd.errors import BadRequest, Conflict, NotFound, Superseded
from trapd.record import verify
from trapd_simulated import Fault, FaultKind, Rack, RackSettings

INTERLOCK = """
[instruments.vacuum]
driver = "scpi-gauge"
resource = "TCPIP::127.0.0.1::5029::SOCKET"

[interlocks.vacuum]
instrument = "vacuum"
warn_above = "2e-9 mbar"
trip_above = "1e-6 mbar"
action = "{action}"
"""
SLOW = {"values": {"endcaps": 800.0}}


def with_action(action: str, more: str = "") -> str:
    return QUICK + INTERLOCK.format(action=action) + more


def held(made: Bench) -> None:
    made.switch_on()


def vent(made: Bench, pressure_mbar: float | None = 1e-4) -> None:
    made.rack.set_pressure("vacuum", pressure_mbar)


def tripped(made: Bench) -> bool:
    return made.controller.situation.interlocks["vacuum"].tripped


def test_hold_stops_what_moves_and_leaves_every_output(tmp_path: Path) -> None:
    toml = with_action("hold").replace('slew = "5000 V/s"', 'slew = "50 V/s"')
    with bench(tmp_path, toml) as made:
        held(made)
        moving = made.submit("set", **SLOW)
        made.wait(lambda: made.controller.situation.moving is not None)
        vent(made)
        with pytest.raises(Superseded, match="interlock vacuum tripped"):
            moving.done.result(10)
        outputs = made.rack.electrodes()
        assert outputs.rf_outputs["rf"] is True
        assert outputs.dc_outputs["dc"][1] is True


def test_off_goes_off_in_a_quarter_of_a_second_while_another_instrument_hangs(tmp_path: Path) -> None:
    with bench(tmp_path, with_action("off")) as made:
        held(made)
        made.rack.inject("dc", Fault(kind=FaultKind.HANG))
        began = time.monotonic()
        vent(made)
        made.wait(lambda: not made.rack.electrodes().rf_outputs["rf"])
        assert time.monotonic() - began < 0.25 + 0.25  # the poll, and what a busy machine needs
        made.rack.clear("dc")
        made.wait(lambda: not any(made.rack.electrodes().dc_outputs["dc"].values()))
        made.wait(lambda: [e.actor for e in made.entries("off")][:1] == ["trapd"])


def test_ramp_down_takes_rf_to_nothing_within_its_slew_then_dc_then_switches_off(tmp_path: Path) -> None:
    with bench(tmp_path, with_action("ramp down")) as made:
        held(made)
        before = made.received()
        vent(made)
        made.wait(lambda: bool(made.entries("off")))
        told = [m.text.split(";")[0] for m in made.rack.received_after(before) if "?" not in m.text.split(";")[0]]
        levels = [float(one.split()[1]) for one in told if one.startswith("VOLT ")]
        assert levels == sorted(levels, reverse=True)
        assert levels[-1] == 0.0
        assert len(levels) > 50  # 260 V in steps of 2 V, and not refused where the ions are lost on the way
        first_dc = next(at for at, one in enumerate(told) if one.startswith("SOUR1"))
        assert all(not one.startswith("VOLT ") for one in told[first_dc:])
        assert made.rack.electrodes().rf_outputs["rf"] is False
        assert verify(made.path).ok


def test_a_trip_is_latched_until_a_person_clears_it_with_a_reason(tmp_path: Path) -> None:
    with bench(tmp_path, with_action("hold")) as made:
        held(made)
        vent(made)
        made.wait(lambda: tripped(made))
        vent(made, 1e-10)
        made.wait(lambda: (made.controller.situation.interlocks["vacuum"].value or 1.0) < 1e-6)
        for kind, fields in (("set", {"values": {"endcaps": 125.0}}), ("go", {}), ("back", {})):
            with pytest.raises(
                Conflict, match=r"interlock vacuum has tripped; `trapd clear vacuum --why ...` comes first"
            ):
                made.ask(kind, **fields)
        made.ask("ions", contents=HELD)  # saying what is so is no move
        with pytest.raises(BadRequest, match="a reason is required"):
            made.ask("clear", interlock="vacuum", why=" ")
        with pytest.raises(NotFound, match="no interlock 'door' in the trap file; there are: vacuum"):
            made.ask("clear", interlock="door")
        assert made.ask("clear", interlock="vacuum", why="pump is back")["interlock"]["tripped"] is False
        assert made.ask("set", values={"endcaps": 125.0})["state"] == "done"
        last = made.entries("interlock")[-1]
        assert (last.actor, last.data["tripped"], last.data["why"]) == ("ada", False, "pump is back")


def test_it_is_not_cleared_while_the_pressure_is_still_high(tmp_path: Path) -> None:
    with bench(tmp_path, with_action("hold")) as made:
        vent(made)
        made.wait(lambda: tripped(made))
        with pytest.raises(Conflict, match="nothing was cleared"):
            made.ask("clear", interlock="vacuum")
        assert tripped(made)


def test_the_latch_outlives_the_daemon(tmp_path: Path) -> None:
    with Rack(RackSettings(), seed=1) as rack:
        with bench(tmp_path, with_action("hold"), rack=rack) as first:
            vent(first)
            first.wait(lambda: tripped(first) and bool(first.entries("interlock")))
        rack.set_pressure("vacuum", 1e-10)
        with bench(tmp_path, with_action("hold"), rack=rack) as second:
            assert tripped(second)
            second.wait_until_empty()
            with pytest.raises(Conflict, match="has tripped"):
                second.ask("on")


def test_a_gauge_that_cannot_be_read_warns_in_time_and_never_trips(tmp_path: Path) -> None:
    with bench(tmp_path, with_action("off", 'unreadable = "0.5 s"\n')) as made:
        held(made)
        made.wait(lambda: made.controller.situation.interlocks["vacuum"].value is not None)
        made.rack.power_off("vacuum")
        made.wait(lambda: made.controller.situation.interlocks["vacuum"].unreadable)
        assert not tripped(made)
        assert made.rack.electrodes().rf_outputs["rf"] is True
        made.wait(lambda: made.entries("interlock")[-1].data["unreadable"] is True)
        made.rack.power_on("vacuum")
        made.wait(lambda: not made.controller.situation.interlocks["vacuum"].unreadable)


def test_a_warning_changes_nothing_but_is_written_down(tmp_path: Path) -> None:
    with bench(tmp_path, with_action("off")) as made:
        held(made)
        vent(made, 1e-8)
        made.wait(lambda: made.controller.situation.interlocks["vacuum"].warned)
        assert made.ask("set", values={"endcaps": 125.0})["state"] == "done"
        made.wait(lambda: [e.data["warned"] for e in made.entries("interlock")][-1:] == [True])
