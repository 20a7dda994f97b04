"""Bursts of an RF source: on from INITiate for their duration, then nothing, by themselves."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from trapd_simulated import Fault, FaultKind, ManualClock, Rack, RackSettings, RackUseError, RfSourceSettings

SETUP = "FREQ 2 MHZ;VOLT 0.5;:BURS:STAT ON;:BURS:DUR 20 MS"


@pytest.fixture
def rack(clock: ManualClock) -> Rack:
    one = Rack(clock=clock)
    one.front_panel("tickle", SETUP)
    return one


def level_v(rack: Rack, time_s: float | None = None) -> float:
    return rack.electrodes(time_s).levels_v["tickle"]


def active(rack: Rack) -> bool:
    return rack.front_panel("tickle", "BURS:ACT?") == "1"


def test_a_burst_ends_by_itself(rack: Rack, clock: ManualClock) -> None:
    clock.advance(1.0)
    rack.front_panel("tickle", "OUTP ON;:INIT")
    assert [level_v(rack, 1.0 + after_s) for after_s in (0.0, 0.0199, 0.0201, 100.0)] == [0.5, 0.5, 0.0, 0.0]
    clock.advance(0.0199)
    assert active(rack)
    clock.advance(0.0002)
    assert not active(rack)
    assert [level_v(rack, 1.0 + after_s) for after_s in (-0.001, 0.0199, 0.0201)] == [0.0, 0.5, 0.0]
    assert rack.front_panel("tickle", "OUTP?;:BURS:STAT?") == "1;1"


def test_without_initiate_nothing_is_emitted(rack: Rack, clock: ManualClock) -> None:
    rack.front_panel("tickle", "OUTP ON")
    clock.advance(1.0)
    assert level_v(rack) == 0.0
    assert not active(rack)
    rack.front_panel("tickle", "BURS:STAT OFF")
    clock.advance(1.0)
    assert level_v(rack) == pytest.approx(0.5)
    rack.front_panel("tickle", "BURS:STAT ON")
    assert level_v(rack) == 0.0


@pytest.mark.parametrize(
    "end",
    [
        lambda rack: rack.front_panel("tickle", "OUTP OFF"),
        lambda rack: rack.front_panel("tickle", "ABOR"),
        lambda rack: rack.front_panel("tickle", "*RST"),
        lambda rack: rack.power_off("tickle"),
        lambda rack: rack.inject("tickle", FaultKind.TRIP),
    ],
    ids=["output off", "abort", "reset", "power off", "trip"],
)
def test_each_way_to_end_a_burst_ends_it_at_once(rack: Rack, clock: ManualClock, end: Callable[[Rack], object]) -> None:
    rack.front_panel("tickle", "OUTP ON;:INIT")
    clock.advance(0.005)
    assert level_v(rack) == 0.5
    end(rack)
    rack.power_on("tickle")
    assert not active(rack)
    clock.advance(0.05)
    assert level_v(rack) == pytest.approx(0.0, abs=1e-12)


def test_abort_leaves_nothing_at_the_terminals(rack: Rack, clock: ManualClock) -> None:
    rack.front_panel("tickle", "OUTP ON;:INIT")
    clock.advance(0.005)
    rack.front_panel("tickle", "ABOR")
    assert level_v(rack) == 0.0


def test_a_new_burst_replaces_the_one_in_progress(rack: Rack, clock: ManualClock) -> None:
    rack.front_panel("tickle", "OUTP ON;:INIT")
    clock.advance(0.015)
    rack.front_panel("tickle", "INIT")
    assert level_v(rack, 0.034) == 0.5
    assert level_v(rack, 0.036) == 0.0


def test_a_new_duration_is_for_the_next_burst(rack: Rack, clock: ManualClock) -> None:
    rack.front_panel("tickle", "OUTP ON;:INIT")
    clock.advance(0.001)
    rack.front_panel("tickle", "BURS:DUR 5;:FREQ 3 MHZ")
    assert rack.electrodes().frequencies_hz["tickle"] == 3e6
    assert level_v(rack, 0.019) == 0.5
    assert level_v(rack, 0.021) == 0.0


@pytest.mark.parametrize("before", ["BURS:STAT OFF;:OUTP ON", "BURS:STAT ON;:OUTP OFF"])
def test_initiate_is_ignored_unless_both_burst_state_and_output_are_on(rack: Rack, before: str) -> None:
    with pytest.raises(RackUseError, match="-213"):  # SCPI-1999 21.8.11, "Init ignored" [mem]
        rack.front_panel("tickle", before + ";:INIT")


def test_a_refused_setting_leaves_the_old_one_and_the_range_can_be_asked(rack: Rack) -> None:
    with pytest.raises(RackUseError, match="-222"):
        rack.front_panel("tickle", "BURS:DUR 1E6")
    found = [float(one) for one in (rack.front_panel("tickle", "BURS:DUR?;DUR? MIN;DUR? MAX") or "").split(";")]
    assert found == [0.02, 1e-5, 1000.0]


def test_burst_settings_are_lost_at_a_power_cycle(rack: Rack) -> None:
    rack.power_off("tickle")
    rack.power_on("tickle")
    assert rack.front_panel("tickle", "BURS:STAT?") == "0"


def test_an_instrument_may_know_no_bursts(clock: ManualClock) -> None:
    one = Rack(RackSettings(instruments={"rf": RfSourceSettings(bursts=False)}), clock=clock)
    with pytest.raises(RackUseError, match="-113"):
        one.front_panel("rf", "BURS:STAT ON")


def test_a_refused_initiate_starts_nothing(rack: Rack) -> None:
    instrument = rack._instruments["tickle"]
    instrument.execute("OUTP ON")
    rack.inject("tickle", Fault(kind=FaultKind.REFUSE_COMMANDS, times=1))
    instrument.execute("INIT")
    assert level_v(rack) == 0.0
    assert (instrument.execute("SYST:ERR?") or "").startswith("-200")


def test_a_burst_of_the_drive_heats_the_resonator_only_while_it_lasts(clock: ManualClock) -> None:
    rack = Rack(clock=clock)
    rack.front_panel("rf", "FREQ 21.0005 MHZ;VOLT 7;:BURS:STAT ON;:BURS:DUR 300;:OUTP ON;:INIT")
    clock.advance(300.0)
    hot_hz = rack.electrodes().resonator_center_hz - 21.0005e6
    assert hot_hz < -100.0
    clock.advance(300.0)  # the default time constant: exp(-1) is left
    assert rack.electrodes().resonator_center_hz - 21.0005e6 == pytest.approx(hot_hz * 0.36787944, rel=1e-3)
