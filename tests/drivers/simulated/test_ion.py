"""The ion: how it moves, how it is lost, how it is reached from outside."""

from __future__ import annotations

import math
import threading
import time
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from tests.drivers.simulated.ion_bench import NOTHING, QUIET, STEADY, Bench
from trapd_simulated import Rack, ResonatorSettings, RfSourceSettings, SettingsError, ask, load
from trapd_simulated.control import ControlServer


def oscillator(damping_per_s: float) -> tuple[Bench, float]:
    """No drive, but a static well along all three axes: a textbook oscillator, and its omega."""
    well = ((8e7, 0.0, 0.0), (0.0, 6e7, 0.0), (0.0, 0.0, 2e7))
    ion = replace(QUIET, electrodes={}, stray_curvature_v_per_m2=well, damping_per_s=damping_per_s, cooling_half_m=1.0)
    bench = Bench(ion)
    bench.tell("rf", "OUTP OFF")
    bench.clock.advance(1.0)
    bench.rack.load_ion()
    return bench, math.sqrt(ion.charge_c * 8e7 / ion.mass_kg)


@pytest.mark.parametrize("detuning_hz", [0.0, 400.0, -3000.0])
def test_a_driven_ion_moves_as_the_textbook_oscillator(detuning_hz: float) -> None:
    """A = (Q E / m) / sqrt((w0^2 - w^2)^2 + (G w)^2), in any text on mechanics."""
    bench, omega0 = oscillator(damping_per_s=8000.0)
    frequency_hz = round(omega0 / (2.0 * math.pi) + detuning_hz)
    bench.tell("tickle", f"BURS:STAT OFF;:FREQ {frequency_hz}")
    bench.clock.advance(0.1)
    omega, push = 2.0 * math.pi * frequency_hz, STEADY.charge_c * 105.0 * 0.0005 / STEADY.mass_kg
    expected_m = push / math.hypot(omega0**2 - omega**2, 8000.0 * omega)
    assert bench.rack.ion_state().amplitude_m[0] == pytest.approx(expected_m, rel=1e-3)


def test_a_free_orbit_decays_at_half_the_damping() -> None:
    bench, _ = oscillator(damping_per_s=2000.0)
    amplitudes = []
    for _ in range(3):
        bench.clock.advance(1e-3)
        amplitudes.append(bench.rack.ion_state().amplitude_m[0])
    for before, after in pairwise(amplitudes):
        assert after / before == pytest.approx(math.exp(-2000.0 * 1e-3 / 2.0), rel=1e-3)


def edge_bench(q: float) -> Bench:
    """Undamped, nothing but the drive; ``q`` at 5 V of the synthesizer."""
    omega, volts = 2.0 * math.pi * 21e6, 5.0 * 38.0
    curvature = q * QUIET.mass_kg * omega**2 / (2.0 * QUIET.charge_c * volts)
    drive = ((curvature, 0.0, 0.0), (0.0, -curvature, 0.0), NOTHING)
    ion = replace(QUIET, electrodes={}, drive_curvature_per_m2=drive, damping_per_s=0.0, cooling_half_m=1.0)
    bench = Bench(ion, resonator=ResonatorSettings(gain=38.0, center_hz=21e6, warmup_shift_hz=0.0))
    bench.tell("rf", "VOLT 4.5")
    bench.clock.advance(0.1)
    bench.rack.load_ion()
    return bench


@pytest.mark.parametrize(("q", "present"), [(0.908046333734577594 - 2e-4, True), (0.908046333734577594 + 2e-4, False)])
def test_an_ion_ramped_past_the_edge_is_lost_and_one_ramped_up_to_it_is_not(q: float, present: bool) -> None:
    """The edge of the first region at a = 0 [mem + calc]."""
    bench = edge_bench(q)
    for volts in np.linspace(4.5, 5.0, 101):
        bench.tell("rf", f"VOLT {volts:.4f}")
        bench.clock.advance(0.02)
    bench.clock.advance(1.0)
    state = bench.rack.ion_state()
    assert state.present is present
    if not present:
        assert state.lost_at_s is not None
        assert bench.clock.now_s() - 1.02 <= state.lost_at_s <= bench.clock.now_s()
        assert bench.count(None) < 30  # the dark counts: a mean of 4


def test_without_the_drive_the_ion_is_lost_within_milliseconds() -> None:
    bench = Bench()
    off_s = bench.clock.now_s()
    bench.tell("rf", "OUTP OFF")
    bench.clock.advance(10.0)
    state = bench.rack.ion_state()
    assert not state.present
    assert state.lost_at_s is not None
    assert 0.0 < state.lost_at_s - off_s < 0.02
    bench.rack.load_ion()
    bench.clock.advance(0.005)
    assert not bench.rack.ion_state().present


def test_an_ion_driven_too_hard_runs_away() -> None:
    bench = Bench()
    bench.tell("tickle", f"FREQ {bench.rack.spectrum('x'):.0f};VOLT 0.01;:BURS:DUR 1;:INIT")
    bench.clock.advance(0.5)
    state = bench.rack.ion_state()
    assert not state.present
    assert "along x" in state.why


def test_a_shim_moves_the_ion_and_neither_shakes_nor_loses_it() -> None:
    """20 V at 310 /m are 6 kV/m: tens of micrometres, reached through the 3 ms of the electrode's wire."""
    bench = Bench()
    bright = bench.count(None)
    bench.tell("dc", "SOUR3:VOLT 20")
    for _ in range(30):
        bench.clock.advance(1e-3)
        assert max(bench.rack.ion_state().amplitude_m) < 0.3e-6
    assert bench.count(None) > 0.7 * bright


def test_an_ion_taken_out_stays_out_and_counts_vanish() -> None:
    bench = Bench()
    assert bench.count(None) > 400  # the mean is 604
    bench.rack.lose_ion()
    assert bench.count(None) < 30
    assert bench.rack.ion_state().why == "taken out by hand"


def test_a_month_without_questions_and_thousands_of_changes_cost_no_memory_of_them() -> None:
    bench = Bench()
    for step in range(4200):  # more than a timeline remembers
        bench.tell("rf", f"VOLT {6.8421 - 1e-4 * (step % 2)}")
        bench.clock.advance(0.001)
    bench.clock.advance(30 * 86400.0)
    assert bench.rack.ion_state().present
    assert bench.count(None) > 400


def test_the_control_port_loads_and_loses() -> None:
    with Rack() as rack, ControlServer(rack, 0, threading.Event()) as server:
        ask(server.port, "load")
        deadline = time.monotonic() + 5.0
        while ask(server.port, "describe")["ion"] and time.monotonic() < deadline:
            time.sleep(0.01)
        dark = ask(server.port, "ion")
        assert not dark["present"]  # no drive is on
        assert dark["lost_at_s"] is not None
        rack.front_panel("rf", "FREQ 21 MHZ;VOLT 6.8421;:OUTP ON")
        rack.front_panel("dc", "VOLT 120;:OUTP ON")
        time.sleep(0.15)
        ask(server.port, "load")
        assert ask(server.port, "ion")["present"]
        assert 2e6 < ask(server.port, "spectrum", mode_axis="x") < 2.2e6
        ask(server.port, "lose")
        assert not ask(server.port, "ion")["present"]
        ask(server.port, "set_pressure", instrument="vacuum", pressure_mbar=None)
        assert rack.front_panel("vacuum", "MEAS:PRES?") == "9.9100000000E+37"
        server.shutdown()


FILE = """
[instruments.rf]
kind = "rf-source"
[ion]
mass_kg = 1.46e-25
greatest_contrast = -0.3
escape_m = [1e-3, 1e-3, 5e-3]
drive_curvature_per_m2 = [[1e6, 0, 0], [0, -1e6, 0], [0, 0, 0]]
[ion.electrodes.dc.2]
field_per_m = [0, 150, 0]
"""


def test_a_file_says_what_the_ion_is(tmp_path: Path) -> None:
    path = tmp_path / "rack.toml"
    path.write_text(FILE)
    ion = load(path).ion
    assert ion is not None
    assert (ion.mass_kg, ion.greatest_contrast, ion.escape_m) == (1.46e-25, -0.3, (1e-3, 1e-3, 5e-3))
    assert ion.electrodes["dc"][2].field_per_m == (0.0, 150.0, 0.0)
    assert isinstance(load(path).instruments["rf"], RfSourceSettings)
    (tmp_path / "none.json").write_text('{"ion": null}')
    assert load(tmp_path / "none.json").ion is None


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("mass_kg = 0", "mass_kg = 0: expected a number above 0"),
        ("damping_per_s = 1e6", "damping_per_s = 1e+06: expected 0 .. 50000"),
        ("escape_m = [1, 2]", "escape_m = (1.0, 2.0): expected three"),
        ("drive_curvature_per_m2 = [[1, 2, 0], [0, 1, 0], [0, 0, 1]]", "expected a symmetric 3x3 matrix"),
        ("colour = 1", "ion.colour: unknown"),
    ],
)
def test_a_mistake_about_the_ion_is_one_clear_error(tmp_path: Path, text: str, message: str) -> None:
    path = tmp_path / "rack.toml"
    path.write_text("[ion]\n" + text)
    with pytest.raises(SettingsError) as error:
        load(path)
    assert message in str(error.value)
