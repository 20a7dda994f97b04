"""Which states count as the first region: against characteristic values and against an independent integrator."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import mathieu_a, mathieu_b

from tests.physics import plain_units
from tests.physics.integrator import in_first_region, whole_period
from trapd.physics.floquet import inside, mathieu, motion
from trapd.physics.point import Point
from trapd.physics.trap import Electrode, tensor


def one_state(a, q):
    return (
        tensor(drive_curvature=2 * q, electrodes={"dc": Electrode(curvature=a)}),
        plain_units.PARTICLE,
        Point(frequency_hz=plain_units.FREQUENCY_HZ, amplitude_v=1.0, electrodes={"dc": 1.0}),
    )


def symmetric(random, size):
    matrix = random.normal(size=(3, 3))
    return size * (matrix + matrix.T) / 2


def test_random_points_agree_with_characteristic_values():
    random = np.random.default_rng(20)
    a, q = random.uniform(-1.5, 1.2, 2000), random.uniform(-3, 3, 2000)
    expected = (mathieu_a(0, np.abs(q)) < a) & (a < mathieu_b(1, np.abs(q)))
    points = [plain_units.point(*pair) for pair in zip(a, q, strict=True)]
    assert (inside(plain_units.one_axis(), plain_units.PARTICLE, points) == expected).all()
    assert 100 < expected.sum() < 1900


def test_random_coupled_states_agree_with_the_integrator_and_its_zeros():
    random = np.random.default_rng(21)
    verdicts = []
    for _ in range(120):
        a = symmetric(random, 0.05) + 0.03 * np.eye(3)
        q = symmetric(random, random.uniform(0.1, 1.0))
        expected = in_first_region(a, q)
        found = motion(*one_state(a, q))
        assert found.first_region == expected
        assert inside(*one_state(a, q)[:2], [one_state(a, q)[2]] * 8).all() == expected
        verdicts.append(expected)
    assert 20 < sum(verdicts) < 100


def test_frequencies_of_random_coupled_states_are_those_of_the_monodromy():
    random = np.random.default_rng(22)
    checked = 0
    while checked < 25:
        a, q = symmetric(random, 0.03) + 0.02 * np.eye(3), symmetric(random, 0.4)
        found = motion(*one_state(a, q))
        if not found.first_region:
            continue
        checked += 1
        angles = np.sort(np.abs(np.angle(np.linalg.eigvals(whole_period(a, q))))) / np.pi
        assert sorted(found.beta) == pytest.approx(angles[::2], abs=1e-9)


def test_growth_is_that_of_the_monodromy():
    random = np.random.default_rng(23)
    checked = 0
    while checked < 10:
        a, q = symmetric(random, 0.3), symmetric(random, 1.5)
        growth = np.log(np.abs(np.linalg.eigvals(whole_period(a, q))).max()) / np.pi
        if growth < 0.05:
            continue
        checked += 1
        found = motion(*one_state(a, q))
        assert not found.stable
        assert found.growth_per_s == pytest.approx(growth, rel=1e-8)  # Omega / 2 = 1


def test_a_drive_turned_by_45_degrees_is_not_taken_for_the_first_region():
    # It joins the first and second regions (Ozakin & Shaikh 2011, arXiv:1109.2160 [lit]); the folded beta cannot tell.
    random = np.random.default_rng(24)
    beyond = 0
    for a, q in zip(random.uniform(0.15, 0.7, 60), random.uniform(0.8, 1.06, 60), strict=True):
        static, driven = np.diag([a, -a, 0.3]), np.array([[0, q, 0], [q, 0, 0], [0, 0, 0]])
        found = motion(*one_state(static, driven))
        assert found.first_region == in_first_region(static, driven)
        beyond += found.stable and not found.first_region
    assert beyond > 3


def test_coupled_modes_that_meet_stay_stable_and_are_flagged():
    turn, _ = np.linalg.qr(np.random.default_rng(25).normal(size=(3, 3)))
    a = turn @ np.diag([0.02, 0.02, 0.05]) @ turn.T
    q = turn @ np.diag([0.3, -0.3, 0.0]) @ turn.T
    found = motion(*one_state((a + a.T) / 2, (q + q.T) / 2))
    assert found.first_region
    assert found.degenerate
    expected = sorted([mathieu(0.02, 0.3)[2]] * 2 + [0.05**0.5])
    assert sorted(found.beta) == pytest.approx(expected, abs=1e-13)


def test_modes_are_named_after_the_closest_axis():
    turn = np.array([[0, 1, 0], [0, 0, 1], [1, 0, 0]])
    small, _ = np.linalg.qr(np.eye(3) + 0.1 * np.random.default_rng(26).normal(size=(3, 3)))
    frame = small @ turn  # mode k lies near axis (1, 2, 0)[k] after the turn
    a = frame @ np.diag([0.01, 0.04, 0.09]) @ frame.T
    found = motion(*one_state((a + a.T) / 2, np.zeros((3, 3))))
    near = np.abs(frame).argmax(axis=0)
    assert [found.beta[axis] for axis in near] == pytest.approx([0.1, 0.2, 0.3], abs=1e-12)
    assert not found.degenerate


@pytest.mark.parametrize(("a", "q"), [(0.0, 0.0), (-0.1, 0.0), (0.1, 1e4), (-1e5, 0.5), (3e3, 1.0)])
def test_wild_states_are_refused_and_nothing_breaks(a, q):
    found = motion(plain_units.one_axis(), plain_units.PARTICLE, plain_units.point(a, q))
    assert not found.first_region
    assert found.growth_per_s is None or np.isfinite(found.growth_per_s)
    assert not inside(plain_units.one_axis(), plain_units.PARTICLE, [plain_units.point(a, q)] * 9).any()


def test_no_drive_is_unstable_and_no_crash():
    found = motion(plain_units.mass_filter(), plain_units.PARTICLE, plain_units.point(0.01, 0.0))
    assert not found.stable
    assert found.growth_per_s == pytest.approx(0.1, rel=1e-9)  # sqrt(-a), Omega / 2 = 1


def test_many_points_at_once_give_the_same_as_one_by_one():
    points = [plain_units.point(a, q) for a in (-0.1, 0.02, 0.5) for q in (0.1, 0.5, 0.89, 0.95, 3.0)]
    together = inside(plain_units.ring(), plain_units.PARTICLE, points)
    assert together.tolist() == [motion(plain_units.ring(), plain_units.PARTICLE, one).first_region for one in points]


def test_a_least_secular_frequency_is_part_of_the_test_of_a_point():
    point = plain_units.point(0.0, 0.3)
    slowest = min(motion(plain_units.one_axis(), plain_units.PARTICLE, point).secular_frequencies_hz)
    for count in (1, 9):  # few points and many take different ways
        for least, expected in ((slowest * (1 - 1e-8), True), (slowest * (1 + 1e-8), False), (1.0, False)):
            held = inside(plain_units.one_axis(), plain_units.PARTICLE, [point] * count, min_secular_hz=least)
            assert held.tolist() == [expected] * count
