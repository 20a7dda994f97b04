"""The bench against closed forms and an independent integrator."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from trapd_simulated import (
    ChannelSettings,
    DcSupplySettings,
    ManualClock,
    Rack,
    RackSettings,
    ResonatorSettings,
    RfSourceSettings,
)
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.rf_source import RfSource
from trapd_simulated.settings import InstrumentSettings


def rack_of(clock: ManualClock, resonator: ResonatorSettings | None = None, **rf: float) -> Rack:
    instruments: dict[str, InstrumentSettings] = {
        "rf": RfSourceSettings(**rf),  # type: ignore[arg-type]
        "dc": DcSupplySettings(channels=(ChannelSettings(low_v=-500.0, high_v=500.0),)),
    }
    return Rack(RackSettings(instruments=instruments, resonator=resonator or ResonatorSettings()), clock=clock)


@pytest.mark.parametrize("frequency_hz", [20.90e6, 20.98e6, 21.0005e6, 21.02e6, 21.10e6])
def test_the_electrode_sees_the_single_pole_response_of_the_resonator(clock: ManualClock, frequency_hz: float) -> None:
    """|1 / (1 + 2jQ delta)|, the response of a lightly damped resonator near its center (any text on resonance)."""
    rack = rack_of(clock, ResonatorSettings(warmup_shift_hz=0.0))
    rack.front_panel("rf", f"FREQ {frequency_hz};VOLT 6.5;:OUTP ON")
    clock.advance(1.0)
    detuning = (frequency_hz - 21.0005e6) / 21.0005e6
    expected_v = 6.5 * 38.2 * abs(1.0 / complex(1.0, 2.0 * 200.0 * detuning))
    truth = rack.electrodes()
    assert truth.drive_amplitude_v == pytest.approx(expected_v, rel=1e-12)
    assert truth.drive_frequency_hz == frequency_hz
    assert truth.rf_outputs["rf"]


def test_the_level_settles_exponentially(clock: ManualClock) -> None:
    rack = rack_of(clock, settle_s=2e-3)
    rack.front_panel("rf", "VOLT 8;:OUTP ON")
    for time_s in (1e-3, 2e-3, 7e-3):
        assert rack.electrodes(time_s).levels_v["rf"] == pytest.approx(-8.0 * math.expm1(-time_s / 2e-3), rel=1e-12)
    clock.advance(2e-3)
    rack.front_panel("rf", "OUTP OFF")
    left_v = -8.0 * math.expm1(-1.0)
    assert rack.electrodes(5e-3).levels_v["rf"] == pytest.approx(left_v * math.exp(-3e-3 / 2e-3), rel=1e-12)


def test_crossing_a_range_boundary_interrupts_the_output(clock: ManualClock) -> None:
    instruments: dict[str, InstrumentSettings] = {
        "rf": RfSourceSettings(settle_s=0.0, range_boundaries_v=(2.0,), range_dropout_s=5e-3)
    }
    rack = Rack(RackSettings(instruments=instruments), clock=clock)
    rack.front_panel("rf", "VOLT 1.9;:OUTP ON")
    clock.advance(1.0)
    assert rack.electrodes().levels_v["rf"] == pytest.approx(1.9)
    rack.front_panel("rf", "VOLT 2.1")
    assert rack.electrodes(1.0049).levels_v["rf"] == 0.0
    assert rack.electrodes(1.0051).levels_v["rf"] == pytest.approx(2.1)
    clock.advance(1.0)
    rack.front_panel("rf", "VOLT 3")
    assert rack.electrodes().levels_v["rf"] == pytest.approx(3.0)


def settling_electrode(commands: list[tuple[float, float]], end_s: float) -> Callable[[float], float]:
    """Independent: terminals slew at 2000 V/s, lag 3 ms, integrated piece by piece between the corners."""
    terminal_v, inputs = 0.0, []
    for index, (start_s, to_v) in enumerate(commands):
        until_s = commands[index + 1][0] if index + 1 < len(commands) else end_s
        slew_end_s = min(start_s + abs(to_v - terminal_v) / 2000.0, until_s)
        inputs.append((start_s, terminal_v, math.copysign(2000.0, to_v - terminal_v), slew_end_s))
        terminal_v += math.copysign(2000.0, to_v - terminal_v) * (slew_end_s - start_s)
        inputs.append((slew_end_s, terminal_v, 0.0, until_s))
    voltage, pieces = 0.0, []
    for start_s, from_v, slope, until_s in inputs:
        if until_s <= start_s:
            continue

        def rate(t: float, v: np.ndarray, s: float = start_s, u: float = from_v, k: float = slope) -> np.ndarray:
            return (u + k * (t - s) - v) / 3e-3

        piece = solve_ivp(rate, (start_s, until_s), [voltage], rtol=1e-11, atol=1e-11, dense_output=True)
        voltage = float(piece.y[0, -1])
        pieces.append((until_s, piece.sol))
    return lambda t: float(next(solution for until_s, solution in pieces if t <= until_s)(t)[0])


def test_the_electrode_lags_the_supply_as_an_integrated_low_pass(clock: ManualClock) -> None:
    commands = [(0.0, 100.0), (0.020, -40.0), (0.060, 300.0), (0.230, 300.5), (0.236, 0.0)]
    rack = rack_of(clock)
    rack.front_panel("dc", "OUTP ON")
    for index, (start_s, to_v) in enumerate(commands):
        clock.advance(start_s - clock.now_s())
        rack.front_panel("dc", f"VOLT {to_v}")
        assert index == 0 or clock.now_s() == pytest.approx(start_s)
    clock.advance(0.5 - clock.now_s())
    expected = settling_electrode(commands, 0.5)
    for time_s in np.linspace(0.0, 0.499, 173):
        assert rack.electrodes(float(time_s)).voltages_v["dc"][1] == pytest.approx(expected(float(time_s)), abs=1e-7)


def test_who_asks_when_does_not_change_the_outcome() -> None:
    def run(questions: int) -> float:
        clock = ManualClock()
        rack = rack_of(clock)
        rack.front_panel("rf", "FREQ 21.01 MHZ;VOLT 8;:OUTP ON")
        for _ in range(questions):
            clock.advance(200.0 / questions)
            rack.electrodes()
        rack.front_panel("rf", "VOLT 9")
        clock.advance(0.01)
        return rack.electrodes().drive_amplitude_v

    assert run(1) == pytest.approx(run(1000), rel=1e-10)


def test_warming_up_moves_the_center_as_the_integrated_heat_balance(clock: ManualClock) -> None:
    """The power falls as the center moves away: solve_ivp has the feedback at every step, the bench at each of 64."""
    resonator = ResonatorSettings(
        center_hz=21e6, loaded_q=500.0, warmup_shift_hz=-20e3, warmup_reference_v=300.0, warmup_time_s=300.0
    )
    rack = rack_of(clock, resonator)
    rack.front_panel("rf", "FREQ 21 MHZ;VOLT 7.5;:OUTP ON")

    def rate(t: float, shift_hz: np.ndarray) -> np.ndarray:
        amplitude_v = 7.5 * 38.2 / abs(1.0 + 2j * 500.0 * (21e6 / (21e6 + shift_hz[0]) - 1.0))
        return np.array([(-20e3 * (amplitude_v / 300.0) ** 2 - shift_hz[0]) / 300.0])

    expected = solve_ivp(rate, (0.0, 2000.0), [0.0], rtol=1e-9, dense_output=True).sol
    for time_s in (10.0, 100.0, 300.0, 1000.0, 2000.0):
        clock.advance(time_s - clock.now_s())
        shift_hz = rack.electrodes().resonator_center_hz - 21e6
        assert shift_hz == pytest.approx(float(expected(time_s)[0]), rel=0.03)
    rack.front_panel("rf", "OUTP OFF")
    hot_hz = rack.electrodes().resonator_center_hz - 21e6
    clock.advance(300.0)
    assert rack.electrodes().resonator_center_hz - 21e6 == pytest.approx(hot_hz * math.exp(-1.0), rel=1e-6)


def test_constant_heat_warms_exactly_exponentially(clock: ManualClock) -> None:
    resonator = ResonatorSettings(loaded_q=1e-6, warmup_shift_hz=-800.0, warmup_reference_v=300.0, warmup_time_s=50.0)
    rack = rack_of(clock, resonator)
    clock.advance(3.3)
    rack.front_panel("rf", "VOLT 5;:OUTP ON")
    final_hz = -800.0 * (5.0 * 38.2 / 300.0) ** 2
    for later_s in (1.0, 20.0, 400.0):
        found_hz = rack.electrodes(3.3 + later_s).resonator_center_hz - 21.0005e6
        assert found_hz == pytest.approx(-final_hz * math.expm1(-later_s / 50.0), abs=1e-6)


@pytest.mark.parametrize("sign", [1, -1])
def test_the_protection_trips_at_the_moment_of_over_voltage_and_latches(clock: ManualClock, sign: int) -> None:
    rack = rack_of(clock)
    rack.front_panel("dc", f"VOLT:PROT 100;:OUTP ON;:VOLT {sign * 200}")
    assert rack.electrodes(0.05).dc_outputs["dc"][1]
    clock.advance(1.0)
    truth = rack.electrodes(0.0501)  # slewing at 2000 V/s it passed 100 V at 50 ms
    assert not truth.dc_outputs["dc"][1]
    assert truth.terminals_v["dc"][1] == pytest.approx(sign * (100.0 - 0.2), abs=1e-6)
    assert rack.electrodes().voltages_v["dc"][1] == pytest.approx(0.0, abs=1e-9)


def test_a_tripped_output_stays_off_until_cleared_and_enabled_again(dc: DcSupply, clock: ManualClock) -> None:
    dc.execute("VOLT 200;VOLT:PROT 100;:OUTP ON;OUTP2 ON")
    clock.advance(1.0)
    assert dc.execute("VOLT:PROT:TRIP?;:OUTP?;OUTP2?") == "1;0;1"
    dc.execute("OUTP ON")
    assert (dc.execute("SYST:ERR?") or "").startswith("-221")
    dc.execute("VOLT 50;VOLT:PROT:CLE")
    assert dc.execute("VOLT:PROT:TRIP?;:OUTP?") == "0;0"
    dc.execute("OUTP ON")
    clock.advance(1.0)
    assert dc.execute("VOLT:PROT:TRIP?;:OUTP?") == "0;1"


def test_a_protection_level_below_the_present_voltage_trips_now_and_not_earlier(clock: ManualClock) -> None:
    rack = rack_of(clock)
    rack.front_panel("dc", "VOLT 200;:OUTP ON")
    clock.advance(1.0)
    rack.front_panel("dc", "VOLT:PROT 150")
    assert rack.front_panel("dc", "VOLT:PROT:TRIP?;:OUTP?") == "1;0"
    assert rack.electrodes(0.9).dc_outputs["dc"][1]
    assert rack.electrodes(1.01).terminals_v["dc"][1] == pytest.approx(200.0 - 0.01 * 2000.0)


def test_values_are_quantised_to_the_resolution(dc: DcSupply, rf: RfSource) -> None:
    dc.execute("VOLT 12.3449;:SOUR2:VOLT -1.23456")
    rf.execute("FREQ 21000000.4;VOLT 1.23456")
    assert [float(part) for part in (dc.execute("VOLT?;:SOUR2:VOLT?") or "").split(";")] == [12.34, -1.235]
    assert [float(part) for part in (rf.execute("FREQ?;VOLT?") or "").split(";")] == [21e6, 1.2346]


def test_readback_is_off_by_a_little_and_within_the_stated_accuracy(dc: DcSupply, clock: ManualClock) -> None:
    dc.execute("VOLT 400;:OUTP ON")
    clock.advance(1.0)
    errors_v = [float(dc.execute("MEAS:VOLT? (@1)") or 0) - 400.0 for _ in range(500)]
    assert max(map(abs, errors_v)) < 3e-2 + 2e-4 * 400.0
    assert len(set(errors_v)) > 400
    assert abs(float(np.mean(errors_v))) > 2.0 * float(np.std(errors_v)) / math.sqrt(500)


def test_a_seed_repeats_every_readback_and_another_does_not() -> None:
    def readings(seed: int) -> list[str | None]:
        rack = Rack(seed=seed, clock=ManualClock())
        return [rack.front_panel("dc", "MEAS:VOLT? (@1:4)") for _ in range(5)]

    assert readings(3) == readings(3)
    assert readings(3) != readings(4)


def test_the_truth_before_memory_begins_is_an_error_and_not_a_guess(clock: ManualClock) -> None:
    with pytest.raises(ValueError, match="earliest"):
        rack_of(clock).electrodes(-1.0)


def test_everything_is_off_and_at_its_least_when_the_rack_is_switched_on(clock: ManualClock) -> None:
    truth = Rack(clock=clock).electrodes()
    assert truth.drive_amplitude_v == 0.0
    assert not any(truth.rf_outputs.values())
    assert not any(truth.dc_outputs["dc"].values())
    assert set(truth.voltages_v["dc"].values()) == {0.0}
