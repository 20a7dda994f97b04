"""Well depth for the ion's charge."""

from __future__ import annotations

from math import pi

import pytest

from trapd.physics.floquet import motion
from trapd.physics.point import Point
from trapd.physics.species import ELEMENTARY_CHARGE_C, ion
from trapd.physics.trap import Electrode, Escape, linear, ring, tensor
from trapd.physics.window import depth_intervals

LINEAR = linear(
    r0_m=5e-4,
    z0_m=2.5e-3,
    kappa=0.29,
    electrodes={"endcaps": Electrode(kind="endcap"), "rods": Electrode(kind="rods")},
)
POINT = Point(frequency_hz=21e6, amplitude_v=260.0, electrodes={"endcaps": 120.0, "rods": 1.0})


def test_the_trap_file_s_example():
    # 8.18 eV along y, secular frequencies 2.155, 2.033, 0.825 MHz, q = 0.2885, a_z = 0.0062 [calc]
    found = motion(LINEAR, ion("40Ca+"), POINT)
    assert found.depth_ev == pytest.approx(8.18, abs=0.005)
    assert found.secular_frequencies_hz == pytest.approx((2.155e6, 2.033e6, 0.825e6), abs=600)
    assert abs(found.q[0]) == pytest.approx(0.2885, abs=5e-5)
    assert found.a[2] == pytest.approx(0.0062, abs=5e-5)


@pytest.mark.parametrize("name", ["40Ca+", "40Ca2+"])
def test_ring_depth_counts_the_charge_once_and_twice(name):
    # radial Q^2 V^2 r0^2/(m Omega^2 D^2) + Q U r0^2/D, axial 4 Q^2 V^2 z0^2/(m Omega^2 D^2) - 2 Q U z0^2/D [mem]
    species, r0, z0, volts, dc, omega = ion(name), 1e-3, 0.6e-3, 300.0, 5.0, 2 * pi * 12e6
    trap = ring(r0_m=r0, z0_m=z0, electrodes={"ring": Electrode(kind="ring")})
    found = motion(trap, species, Point(frequency_hz=12e6, amplitude_v=volts, electrodes={"ring": dc}))
    charge, size = species.charge_c, r0**2 + 2 * z0**2
    driven = charge**2 * volts**2 / (species.mass_kg * omega**2 * size**2)
    radial, axial = driven * r0**2 + charge * dc * r0**2 / size, 4 * driven * z0**2 - 2 * charge * dc * z0**2 / size
    assert found.depth_ev == pytest.approx(min(radial, axial) / ELEMENTARY_CHARGE_C, rel=1e-12)


def test_two_phases_count_four_times_in_the_pseudopotential():
    # fac^2 Q^2 V^2/(4 m Omega^2 r0^2) [mem]; endcaps high enough that x and y decide, and low enough to leave them alone
    kwargs = {"r0_m": 5e-4, "z0_m": 0.1, "kappa": 0.29, "electrodes": {"endcaps": Electrode(kind="endcap")}}
    point = Point(frequency_hz=21e6, amplitude_v=100.0, electrodes={"endcaps": 900.0})
    species = ion("40Ca+")
    one, two = (motion(linear(**kwargs, phases=phases), species, point).depth_ev for phases in (1, 2))
    static = -0.29 * 900.0 * (5e-4) ** 2 / (2 * 0.1**2)
    assert two - static == pytest.approx(4 * (one - static), rel=1e-9)


def test_tensor_traps_have_a_depth_only_with_escape_distances():
    shape = {"drive_curvature": LINEAR.drive_curvature}
    electrodes = {name: Electrode(curvature=matrix) for name, matrix in LINEAR.electrode_curvature.items()}
    bare = tensor(**shape, electrodes=electrodes)
    told = tensor(**shape, electrodes=electrodes, escape=Escape(x_m=5e-4, y_m=5e-4, z_m=2.5e-3))
    assert motion(bare, ion("40Ca+"), POINT).depth_ev is None
    assert motion(told, ion("40Ca+"), POINT).depth_ev == pytest.approx(motion(LINEAR, ion("40Ca+"), POINT).depth_ev)
    with pytest.raises(ValueError, match="escape"):
        depth_intervals(bare, ion("40Ca+"), [POINT], "rods", -1, 1, min_depth_ev=0.2)


@pytest.mark.parametrize(
    ("setpoint", "low", "high", "ends"),
    [
        ("drive.amplitude", -500.0, 500.0, 4),
        ("drive.amplitude", 10.0, 500.0, 2),
        ("drive.frequency", 1e6, 90e6, 2),
        ("rods", -50.0, 50.0, 2),
        ("endcaps", -10.0, 9000.0, 2),
    ],
)
def test_the_least_depth_is_met_exactly_at_the_ends_of_its_intervals(setpoint, low, high, ends):
    species = ion("40Ca2+")
    (found,) = depth_intervals(LINEAR, species, [POINT], setpoint, low, high, min_depth_ev=3.0)
    values = [(value, by) for one in found for value, by in ((one.low, one.low_by), (one.high, one.high_by))]
    assert len(values) == ends
    for value, by in values:
        state = {
            "drive.frequency": Point(frequency_hz=value, amplitude_v=260.0, electrodes=POINT.electrodes),
            "drive.amplitude": Point(frequency_hz=21e6, amplitude_v=value, electrodes=POINT.electrodes),
        }.get(setpoint, Point(frequency_hz=21e6, amplitude_v=260.0, electrodes={**POINT.electrodes, setpoint: value}))
        depth = motion(LINEAR, species, state).depth_ev
        if by.kind == "limit":
            assert value in (low, high)
            assert depth > 3.0
        else:
            assert (by.rule, by.species) == ("min_depth", "40Ca2+")
            assert depth == pytest.approx(3.0, rel=1e-10)


def test_a_depth_that_nothing_reaches_has_no_interval():
    assert depth_intervals(LINEAR, ion("40Ca+"), [POINT], "rods", -9, 9, min_depth_ev=1e3) == [[]]
