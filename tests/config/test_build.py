"""The physics and the guard's model of a trap file."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.traps import NORTH_BENCH, RING, TENSOR
from trapd.config.build import guard_of, setpoints_of, trap_of
from trapd.config.read import parse
from trapd.errors import ConfigError
from trapd_drivers.interfaces import Scale

FILE = Path("/bench/trap.toml")
BENCH = parse(NORTH_BENCH, FILE)


def scale(low: float, high: float, resolution: float, boundaries: tuple[float, ...] = ()) -> Scale:
    return Scale(
        low=low,
        high=high,
        resolution=resolution,
        accuracy_absolute=resolution,
        accuracy_relative=0.0,
        boundaries=boundaries,
    )


def test_the_linear_trap_has_the_textbook_curvatures() -> None:
    """Berkeland et al., J. Appl. Phys. 83, 5025 (1998), eqs. 1 and 2 [mem]: V (x^2 - y^2)/(2 r0^2) for the rods,
    kappa U (z^2 - (x^2 + y^2)/2)/z0^2 for the endcaps."""
    trap = trap_of(BENCH)
    np.testing.assert_allclose(trap.drive_curvature, np.diag([4e6, -4e6, 0.0]), rtol=1e-12)
    endcaps = 0.29 / 0.0025**2 * np.diag([-1.0, -1.0, 2.0])
    np.testing.assert_allclose(trap.electrode_curvature["endcaps"], endcaps, rtol=1e-12)
    np.testing.assert_array_equal(trap.electrode_field["shim_x"], [310.0, 0.0, 0.0])


def test_two_phases_double_the_drive() -> None:
    doubled = trap_of(parse(NORTH_BENCH.replace("phases = 1", "phases = 2"), FILE))
    np.testing.assert_allclose(doubled.drive_curvature, 2 * trap_of(BENCH).drive_curvature, rtol=1e-12)


def test_half_a_weight_halves_an_electrodes_ideal() -> None:
    half = trap_of(parse(NORTH_BENCH.replace("weight = 1.0", "weight = 0.5"), FILE))
    whole = trap_of(BENCH).electrode_curvature["endcaps"]
    np.testing.assert_allclose(half.electrode_curvature["endcaps"], whole / 2, rtol=1e-12)


def test_a_curvature_in_the_file_overrides_the_ideal_one() -> None:
    text = NORTH_BENCH.replace("weight = 1.0", "curvature = [1, 2, -3, 4, 5, 6]")
    text = text.replace('instrument = "rf"', 'instrument = "rf"\ncurvature = [2, 1, -3, 6, 5, 4]')
    trap = trap_of(parse(text, FILE))
    np.testing.assert_array_equal(trap.electrode_curvature["endcaps"], [[1, 6, 5], [6, 2, 4], [5, 4, -3]])
    np.testing.assert_array_equal(trap.drive_curvature, [[2, 4, 5], [4, 1, 6], [5, 6, -3]])


def test_the_ring_trap_has_the_textbook_curvatures() -> None:
    """March, J. Mass Spectrom. 32, 351 (1997), eq. 7 [mem]: phi = U (r^2 - 2 z^2) / (r0^2 + 2 z0^2)."""
    trap = trap_of(parse(RING, FILE))
    ideal = 2 / (0.0007**2 + 2 * 0.0005**2) * np.diag([1.0, 1.0, -2.0])
    np.testing.assert_allclose(trap.drive_curvature, ideal, rtol=1e-12)
    np.testing.assert_allclose(trap.electrode_curvature["bias"], ideal, rtol=1e-12)


def test_the_tensor_trap_escapes_where_the_file_says() -> None:
    assert trap_of(parse(TENSOR, FILE)).escape is None
    trap = trap_of(parse(TENSOR.replace('"tensor"', '"tensor"\nescape = ["1 mm", "2 mm", "3 mm"]'), FILE))
    assert trap.escape is not None
    assert (trap.escape.x_m, trap.escape.y_m, trap.escape.z_m) == (0.001, 0.002, 0.003)


def test_offline_the_guard_has_the_limits_of_the_file_and_nothing_quantised() -> None:
    model = guard_of(BENCH)
    assert list(model.limits) == ["drive.frequency", "drive.amplitude", "endcaps", "rods", "shim_x"]
    assert list(setpoints_of(BENCH)) == list(model.limits) == list(model.trap.setpoints)
    endcaps = model.limits["endcaps"]
    assert (endcaps.low, endcaps.high, endcaps.slew_per_s, endcaps.step, endcaps.lag_s) == (
        0.0,
        900.0,
        50.0,
        5.0,
        0.003,
    )
    assert {limit.resolution for limit in model.limits.values()} == {0.0}
    assert (model.level_max_v, model.level_resolution_v, model.frequency_fixed) == (12.0, 0.0, False)
    assert (model.margin, model.min_secular_frequency_hz, model.min_depth_ev) == (0.05, 1e5, 0.2)


def test_a_flat_gain_fixes_the_frequency() -> None:
    assert guard_of(parse(RING, FILE)).frequency_fixed


def test_an_instrument_tightens_the_limits_and_never_widens_them() -> None:
    model = guard_of(BENCH, {"endcaps": scale(10.0, 500.0, 0.01, (100.0,)), "rods": scale(-50.0, 50.0, 0.001)})
    endcaps, rods = model.limits["endcaps"], model.limits["rods"]
    assert (endcaps.low, endcaps.high, endcaps.resolution, endcaps.boundaries) == (10.0, 500.0, 0.01, (100.0,))
    assert (rods.low, rods.high, rods.resolution) == (-10.0, 10.0, 0.001)


@pytest.mark.parametrize(("high", "level_max_v"), [(10.0, 10.0), (20.0, 12.0)])
def test_the_level_is_bounded_by_file_and_instrument_alike(high: float, level_max_v: float) -> None:
    model = guard_of(BENCH, {"drive.amplitude": scale(0.001, high, 0.002, (1.0,))})
    assert (model.level_max_v, model.level_resolution_v) == (level_max_v, 0.002)
    amplitude = model.limits["drive.amplitude"]
    assert (amplitude.low, amplitude.high, amplitude.resolution, amplitude.boundaries) == (0.0, 420.0, 0.0, (1.0,))


def test_limits_that_the_instrument_cannot_reach_at_all_are_a_mistake() -> None:
    with pytest.raises(
        ConfigError, match=r"trap\.toml: drive\.frequency = 20900000 to 21100000 Hz; expected some of 1 to"
    ):
        guard_of(BENCH, {"drive.frequency": scale(1.0, 1000.0, 0.001)})


def test_a_step_below_the_instruments_resolution_is_a_mistake() -> None:
    with pytest.raises(ConfigError, match=r"rods step = 0\.5 V; expected at least 1 V"):
        guard_of(BENCH, {"rods": scale(-50.0, 50.0, 1.0)})
