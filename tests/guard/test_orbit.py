"""The judge of the judge is judged by published values, closed forms and its own convergence."""

from __future__ import annotations

from dataclasses import replace
from math import pi

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import mathieu_a, mathieu_b

from tests.guard.benches import FILE, FIRST_EDGE_Q
from tests.guard.orbit import Actual, Array, curvatures, follow, integrate, negative_directions
from tests.traps import NORTH_BENCH, RING, TENSOR
from trapd.config.read import parse
from trapd.config.records import Config, Matrix

BENCH, SOUTH, TILTED = (parse(text, FILE) for text in (NORTH_BENCH, RING, TENSOR))
CALCIUM = BENCH.species["40Ca+"]


def mathieu(a: Array, q: Array) -> tuple[Array, Array]:
    """Coefficients in drive periods of u'' + (a + 2 q cos 2 tau) u = 0 along x, the other axes at a = 0.2, q = 0."""
    constant, swinging = np.zeros((len(a), 3, 3)), np.zeros((len(a), 3, 3))
    constant[:, range(3), range(3)] = np.stack([a, 0 * a + 0.2, 0 * a + 0.2], axis=1) * pi**2
    swinging[:, 0, 0] = 2 * q * pi**2
    return constant, swinging


def whole(pieces: Array) -> Array:
    product = pieces[:, 0]
    for cut in range(1, pieces.shape[1]):
        product = pieces[:, cut] @ product
    return product


def in_first_region(a: Array, q: Array) -> NDArray[np.bool_]:
    pieces = integrate(*mathieu(a, q), cuts=6, steps=8)
    inside: NDArray[np.bool_] = (negative_directions(pieces, -1) == 0) & (negative_directions(pieces, 1) == 3)
    return inside


def test_the_method_converges_with_the_sixth_power_of_its_step() -> None:
    rng = np.random.default_rng(3)
    constant, swinging = (
        size * (m + m.swapaxes(1, 2)) for size, m in zip((1, 3), rng.normal(size=(2, 20, 3, 3)), strict=True)
    )
    exact = whole(integrate(constant, swinging, 2, 96))
    errors = [np.abs(whole(integrate(constant, swinging, 2, steps)) - exact).max() for steps in (6, 12, 24)]
    assert np.log2(errors[0] / errors[1]) == pytest.approx(6, abs=1)
    assert np.log2(errors[1] / errors[2]) == pytest.approx(6, abs=1)
    assert errors[1] < 1e-8 * np.abs(exact).max()


def test_it_is_symplectic() -> None:
    rng = np.random.default_rng(4)
    constant, swinging = (3 * (m + m.swapaxes(1, 2)) for m in rng.normal(size=(2, 20, 3, 3)))
    period = whole(integrate(constant, swinging, 2, 12))
    form = np.block([[np.zeros((3, 3)), np.eye(3)], [-np.eye(3), np.zeros((3, 3))]])
    np.testing.assert_allclose(period.swapaxes(1, 2) @ form @ period, np.broadcast_to(form, period.shape), atol=1e-9)


def test_the_first_region_of_one_axis_is_that_of_the_characteristic_values() -> None:
    """a_0(q) < a < b_1(q) (DLMF 28.17; scipy's characteristic values are good for q < 3)."""
    rng = np.random.default_rng(5)
    q, a = rng.uniform(-1.3, 1.3, 2000), rng.uniform(-0.7, 1.5, 2000)
    expected = (mathieu_a(0, np.abs(q)) < a) & (a < mathieu_b(1, np.abs(q)))
    assert 300 < expected.sum() < 1700
    np.testing.assert_array_equal(in_first_region(a, q), expected)


@pytest.mark.parametrize(
    ("a", "q"),
    [
        (0.0, FIRST_EDGE_Q),
        (0.23699399, 0.70599607),  # apex of the mass filter, beta_x = 1 (Dawson 1976 [mem])
        (-0.5 * -0.671359797, 0.5 * 1.239780117),  # corner of the ring's region, r mode, beta_r = 1 (March 1997 [mem])
    ],
)
def test_published_edges_lie_where_they_are_published(a: float, q: float) -> None:
    inside, outside = in_first_region(np.array([a, a]), np.array([q * (1 - 3e-7), q * (1 + 3e-7)]))
    assert (inside, outside) == (True, False)


def test_stable_motion_beyond_the_first_region_is_told_apart() -> None:
    """a = 2.5, q = 0.5 lies between a_1 and b_2, stable with 1 < beta < 2; a = 0, q = 7.547 lies in the second region."""
    a, q = np.array([2.5, 0.0]), np.array([0.5, 7.547])
    period = whole(integrate(*mathieu(a, q), cuts=12, steps=12))
    np.testing.assert_allclose(np.abs(np.linalg.eigvals(period)), 1, atol=1e-6)
    assert not in_first_region(a, q).any()


def test_the_directions_counted_are_those_of_fourier_and_independent_of_the_cuts() -> None:
    """At rest, k constant: antiperiodic functions cos, sin((2 n + 1) pi t) are negative where (2 n + 1)^2 < a, in tau."""
    a = np.array([-0.5, 0.5, 1.5, 8.5, 9.5, 26.0])
    for cuts in (6, 7, 11):
        pieces = integrate(*mathieu(a, 0 * a), cuts=cuts, steps=10)
        assert negative_directions(pieces, -1).tolist() == [0, 0, 2, 2, 4, 6]
        assert negative_directions(pieces, 1).tolist() == [2, 3, 3, 5, 5, 7]  # two axes at 0.2 add one each


def test_curvatures_are_those_of_the_file() -> None:
    """Linear: Berkeland et al. 1998; ring: March 1997 [mem]."""
    drive, electrodes = curvatures(BENCH)
    np.testing.assert_allclose(drive, np.diag([4e6, -4e6, 0.0]), rtol=1e-12, atol=1e-6)
    np.testing.assert_allclose(
        electrodes["endcaps"], 0.29 / 2.5e-3**2 * np.diag([-1.0, -1.0, 2.0]), rtol=1e-12, atol=1e-6
    )
    ring, _ = curvatures(SOUTH)
    np.testing.assert_allclose(ring, 2 / (0.7e-3**2 + 2 * 0.5e-3**2) * np.diag([1.0, 1.0, -2.0]), rtol=1e-12, atol=1e-6)
    tilted, top = curvatures(TILTED)
    np.testing.assert_array_equal(tilted[0], [2.0e6, 3.0e5, 0.0])
    np.testing.assert_array_equal(top["top"], np.diag([1e5, 1e5, -2e5]))


def test_a_damped_edge_is_where_it_is_published() -> None:
    """gamma/Omega = 0.1, 0.25, 0.5 move the edge at a = 0 to q = 0.92769, 1.02657, 1.34052 (Hasegawa & Uehara 1995, Appl. Phys.
    B 61, 159; digits recomputed)."""
    for damping, edge in ((0.1, 0.92769), (0.25, 1.02657), (0.5, 1.34052)):
        config, volts = _ring_without_dc()
        omega = 2 * pi * 15e6
        one = replace(config.species["88Sr+"], damping_per_s=damping * omega)
        per_q = volts * one.mass_kg
        states = [
            Actual(frequency_hz=15e6, amplitude_v=per_q * q, electrodes={"bias": 0.0})
            for q in (edge - 1e-5, edge + 1e-5)
        ]
        found = follow(config, one, states)
        assert found.first_region.tolist() == [True, False]


def test_damping_does_not_excuse_a_mode_past_its_first_locking() -> None:
    """gamma/Omega = 0.1 and a = 2.5: it decays, but with 1 < beta < 2."""
    config, _ = _ring_without_dc()
    one = replace(config.species["88Sr+"], damping_per_s=0.1 * 2 * pi * 15e6)
    _, electrodes = curvatures(config)
    spring = one.mass_kg * (2 * pi * 15e6) ** 2 / (4 * one.charge_c)
    bias = 2.5 * spring / electrodes["bias"][0, 0]
    pushed = replace(
        config, electrodes={"bias": replace(config.electrodes["bias"], curvature=_isotropic(electrodes["bias"]))}
    )
    orbits = follow(pushed, one, [Actual(frequency_hz=15e6, amplitude_v=0.0, electrodes={"bias": bias})])
    assert orbits.growth[0] < 1
    assert not orbits.first_region[0]


def _isotropic(curvature: Array) -> Matrix:
    """Not one that Laplace would allow, but one whose motion is known in closed form."""
    k = float(curvature[0, 0])
    return (k, 0.0, 0.0), (0.0, k, 0.0), (0.0, 0.0, k)


def _ring_without_dc() -> tuple[Config, float]:
    """And volts per q_z and kilogram: |q_z| = 8 Q V/(m (r0^2 + 2 z0^2) Omega^2)."""
    size = 0.7e-3**2 + 2 * 0.5e-3**2
    return SOUTH, size * (2 * pi * 15e6) ** 2 / (8 * SOUTH.species["88Sr+"].charge_c)


def test_finer_steps_change_no_verdict() -> None:
    rng = np.random.default_rng(6)
    states = [
        Actual(
            frequency_hz=rng.uniform(15e6, 30e6),
            amplitude_v=rng.uniform(0, 900),
            electrodes={"endcaps": rng.uniform(-100, 900), "rods": rng.uniform(-30, 30), "shim_x": 1.0},
        )
        for _ in range(1500)
    ]
    coarse, fine = follow(BENCH, CALCIUM, states), follow(BENCH, CALCIUM, states, fineness=2)
    np.testing.assert_array_equal(coarse.first_region, fine.first_region)
    np.testing.assert_allclose(coarse.growth, fine.growth, rtol=1e-6)
    assert 100 < coarse.first_region.sum() < 1400
