"""Geometry: what a volt does at the centre."""

from __future__ import annotations

import numpy as np
import pytest

from trapd.physics.floquet import motion
from trapd.physics.point import Point
from trapd.physics.species import ion
from trapd.physics.trap import Electrode, curvature, linear, ring, tensor

SIZE = {"r0_m": 5e-4, "z0_m": 2e-3}


def test_ideal_potentials_obey_laplace():
    line = linear(**SIZE, kappa=0.3, electrodes={"e": Electrode(kind="endcap"), "r": Electrode(kind="rods")})
    hoop = ring(**SIZE, electrodes={"r": Electrode(kind="ring")})
    for trap in (line, hoop):
        for matrix in (trap.drive_curvature, *trap.electrode_curvature.values()):
            assert np.trace(matrix) == pytest.approx(0, abs=1e-9 * np.abs(matrix).max())


def test_a_doubly_charged_ion_has_twice_the_a_and_q():
    trap = linear(**SIZE, kappa=0.3, electrodes={"e": Electrode(kind="endcap")})
    point = Point(frequency_hz=20e6, amplitude_v=100.0, electrodes={"e": 50.0})
    one, two = (motion(trap, ion(name), point) for name in ("40Ca+", "40Ca2+"))
    ratio = 2 * ion("40Ca+").mass_kg / ion("40Ca2+").mass_kg
    assert two.a == pytest.approx(ratio * np.array(one.a))
    assert two.q == pytest.approx(ratio * np.array(one.q))


def test_two_half_endcaps_are_one_whole():
    whole = linear(**SIZE, kappa=0.3, electrodes={"e": Electrode(kind="endcap")})
    halves = {name: Electrode(kind="endcap", weight=0.5) for name in ("left", "right")}
    split = linear(**SIZE, kappa=0.3, electrodes=halves)
    one = motion(whole, ion("40Ca+"), Point(frequency_hz=20e6, amplitude_v=200.0, electrodes={"e": 50.0}))
    two = motion(
        split, ion("40Ca+"), Point(frequency_hz=20e6, amplitude_v=200.0, electrodes={"left": 50.0, "right": 50.0})
    )
    assert one.secular_frequencies_hz == pytest.approx(two.secular_frequencies_hz, rel=1e-14)


def test_a_given_curvature_replaces_the_ideal_and_tilts_the_axes():
    tilt = curvature(1e5, 2e5, -3e5, 4e4, 5e4, 6e4)
    assert tilt.tolist() == [[1e5, 6e4, 5e4], [6e4, 2e5, 4e4], [5e4, 4e4, -3e5]]
    trap = linear(**SIZE, kappa=0.3, electrodes={"e": Electrode(kind="endcap", curvature=tilt)})
    found = motion(trap, ion("40Ca+"), Point(frequency_hz=20e6, amplitude_v=200.0, electrodes={"e": 5.0}))
    assert np.shape(found.a) == np.shape(found.q) == (3, 3)
    real = linear(**SIZE, kappa=0.3, electrodes={}, drive_curvature=np.diag([4e6, -3.9e6, -1e5]))
    found = motion(real, ion("40Ca+"), Point(frequency_hz=20e6, amplitude_v=200.0, electrodes={}))
    assert found.q[2] != 0  # real rods leave the axis at part of the drive


def test_fields_are_kept_and_do_not_move_the_window():
    trap = linear(**SIZE, kappa=0.3, electrodes={"shim": Electrode(field=[310.0, 0, 0])})
    assert trap.electrode_field["shim"].tolist() == [310.0, 0.0, 0.0]
    assert not trap.electrode_curvature["shim"].any()


@pytest.mark.parametrize(
    ("build", "says"),
    [
        (lambda: linear(**SIZE, kappa=0.3, electrodes={"e": Electrode(kind="ring")}), "knows rods, endcap, other"),
        (lambda: ring(**SIZE, electrodes={"e": Electrode(kind="endcap")}), "knows ring, other"),
        (lambda: tensor(drive_curvature=np.eye(2), electrodes={}), "the drive must be a symmetric 3x3"),
        (lambda: tensor(drive_curvature=np.eye(3, k=1), electrodes={}), "symmetric"),
        (lambda: tensor(drive_curvature=np.eye(3), electrodes={"s": Electrode(field=[1.0, 2.0])}), "three finite"),
        (lambda: linear(r0_m=0.0, z0_m=1.0, kappa=1.0, electrodes={}), "r0_m must be positive"),
        (lambda: linear(**SIZE, kappa=0.3, electrodes={}, phases=3), "phases is 1 or 2"),
    ],
)
def test_a_trap_that_cannot_be_is_refused_in_one_sentence(build, says):
    with pytest.raises(ValueError, match=says):
        build()


@pytest.mark.parametrize(
    ("point", "says"),
    [
        (Point(frequency_hz=20e6, amplitude_v=1.0, electrodes={}), "must name the electrodes"),
        (Point(frequency_hz=20e6, amplitude_v=1.0, electrodes={"e": 1.0, "f": 1.0}), "must name the electrodes"),
        (Point(frequency_hz=20e6, amplitude_v=1.0, electrodes={"e": float("nan")}), "finite"),
        (Point(frequency_hz=0.0, amplitude_v=1.0, electrodes={"e": 1.0}), "positive finite drive frequency"),
        (Point(frequency_hz=20e6, amplitude_v=float("inf"), electrodes={"e": 1.0}), "finite amplitude"),
    ],
)
def test_a_point_that_is_none_is_refused(point, says):
    trap = linear(**SIZE, kappa=0.3, electrodes={"e": Electrode(kind="endcap")})
    with pytest.raises(ValueError, match=says):
        motion(trap, ion("40Ca+"), point)
