"""Motion and windows with damping: decaying, and no mode past its first locking."""

from __future__ import annotations

import numpy as np
import pytest

from tests.physics import plain_units
from tests.physics.integrator import scan
from tests.physics.random_traps import coefficients_at, draw
from tests.physics.test_window import integrated, places, within
from trapd.physics.floquet import inside, motion
from trapd.physics.trap import Electrode, tensor
from trapd.physics.window import stable_intervals


def test_damped_windows_of_random_traps_agree_with_an_integrator():
    random = np.random.default_rng(41)
    held = 0
    for _ in range(25):
        case = draw(random, damped=True, kinds="linear ring")
        (found,) = stable_intervals(case.trap, case.species, [case.point], case.setpoint, case.low, case.high)
        values = places(case, found, 60)
        expected = np.ones(len(values), dtype=bool)
        for axis in range(3):
            growth, conjugate = integrated_axis(case, values, axis)
            expected &= (growth < 1) & ~conjugate.all(axis=1)  # both kinds: past the first locking
        assert (within(found, values) == expected).all(), case
        held += expected.sum()
    assert held > 200


def integrated_axis(case, values, axis):
    states = [coefficients_at(case, case.at(value)) for value in values]
    a = np.array([one[axis : axis + 1, axis : axis + 1] for one, _, _ in states])
    q = np.array([one[axis : axis + 1, axis : axis + 1] for _, one, _ in states])
    return scan(a, q, np.array([kappa for _, _, kappa in states]))


def test_in_damped_coupled_traps_whatever_is_accepted_decays():
    random = np.random.default_rng(42)
    held = 0
    for _ in range(40):
        case = draw(random, damped=True, kinds="tilted turned tensor")
        (found,) = stable_intervals(case.trap, case.species, [case.point], case.setpoint, case.low, case.high)
        values = places(case, found, 40)
        growth, conjugate = integrated(case, values)
        accepted = within(found, values)
        assert (growth[accepted] < 1).all(), case
        # Refused though it decays: only past a locking, or with both kinds locked at beta = 1 in coupled axes.
        assert conjugate[~accepted & (growth < 1)].all(), case
        held += accepted.sum()
    assert held > 150


def test_overdamped_coupled_modes_are_held():
    # All three modes locked at beta = 0, as for a microparticle in air; a tilt must not have it refused.
    turn, _ = np.linalg.qr(np.random.default_rng(43).normal(size=(3, 3)))
    static = turn @ np.diag([0.02, 0.03, 0.05]) @ turn.T
    driven = np.diag([0.3, -0.3, 0.0])
    electrodes = {"a": Electrode(curvature=(static + static.T) / 2), "hold": Electrode()}
    trap = tensor(drive_curvature=2 * driven, electrodes=electrodes)
    found = motion(trap, plain_units.damped(0.6), plain_units.point(1.0, 1.0))
    assert found.first_region
    assert found.beta == (0.0, 0.0, 0.0)
    assert found.growth_per_s is None


def test_a_damped_state_grows_at_the_rate_of_the_displacement():
    # no drive: r'' + g r' = r, growth -g/2 + sqrt(g^2/4 + 1), g = 2 kappa (Omega = 2)
    found = motion(plain_units.one_axis(), plain_units.damped(0.3), plain_units.point(-1.0, 0.0))
    assert not found.stable
    assert found.growth_per_s == pytest.approx(-0.3 + 1.09**0.5, rel=1e-10)


def test_vanishing_damping_changes_no_verdict():
    random = np.random.default_rng(44)
    points = [
        plain_units.point(*pair) for pair in zip(random.uniform(-0.5, 1, 300), random.uniform(0, 2, 300), strict=True)
    ]
    still, barely = (
        inside(plain_units.one_axis(), species, points) for species in (plain_units.PARTICLE, plain_units.damped(1e-9))
    )
    assert (still == barely).all()


def test_a_wanted_frequency_refuses_a_locked_mode():
    point = plain_units.point(0.0, 0.3)
    species = plain_units.damped(0.4)
    assert motion(plain_units.one_axis(), species, point).beta[0] == 0.0
    assert inside(plain_units.one_axis(), species, [point]).all()
    assert not inside(plain_units.one_axis(), species, [point], min_secular_hz=1e-3).any()
    (found,) = stable_intervals(
        plain_units.one_axis(), species, [point], "drive.amplitude", 0.1, 1.2, min_secular_hz=1e-3
    )
    assert found[0].low_by.rule == "min_secular_frequency"
    slow = motion(plain_units.one_axis(), species, plain_units.point(0.0, found[0].low)).secular_frequencies_hz
    assert min(slow) == pytest.approx(1e-3, rel=1e-6)
