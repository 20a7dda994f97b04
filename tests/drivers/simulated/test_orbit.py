"""The orbit of one period against published numbers and an independent integrator."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.special import mathieu_a, mathieu_b

from trapd_simulated.orbit import Array, Constants, Trap
from trapd_simulated.spectrum import line_hz

DRIVE_HZ = 21e6
OMEGA = 2.0 * math.pi * DRIVE_HZ
CHARGE_OVER_MASS = 2.4e6  # C/kg, about 40Ca+
ALONE = (1.0, 0.0, 0.0)  # y and z free
LINEAR = (1.0, -1.0, 0.0)
RING = (-0.5, -0.5, 1.0)


def trap(a: float, q: float, shape: tuple[float, float, float] = LINEAR, damping_per_s: float = 0.0) -> Trap:
    """A = 4 Q H/(m W^2), 2 Q_m = 2 Q H/(m W^2): the parameters of u'' + (A - 2 Q_m cos 2 tau) u = 0 along ``shape``."""
    unit = OMEGA**2 / CHARGE_OVER_MASS * np.diag(shape)
    return Trap(constants(a / 4.0 * unit, q / 2.0 * unit, damping_per_s))


def constants(static: Array, drive: Array, damping_per_s: float = 0.0) -> Constants:
    return Constants(
        charge_over_mass=CHARGE_OVER_MASS,
        drive_hz=DRIVE_HZ,
        drive_curvature=drive,
        static_curvature=static,
        tickle_field_per_v=np.array([100.0, -70.0, 40.0]),
        damping_per_s=damping_per_s,
    )


def held(one: Trap, *axes: int) -> bool:
    return not any(math.isnan(line_hz(one, axis)) for axis in axes)


def test_the_secular_frequency_is_right_to_1e_8() -> None:
    """beta(a = 0, q = 0.4), [calc] with 30 digits. From the trace of the map: its eigenvalues are exp(+-i pi beta)."""
    one = trap(0.0, 0.4).tickled(0.0).one(0.0)
    beta = math.acos((one[0, 0] + one[3, 3]) / 2.0) / math.pi
    assert beta == pytest.approx(0.292566211480906, rel=1e-12)


def test_the_spectrum_shows_the_published_secular_frequency() -> None:
    for axis in (0, 1):
        assert line_hz(trap(0.0, 0.4), axis) == pytest.approx(0.292566211480906 * DRIVE_HZ / 2.0, abs=0.01)


@pytest.mark.parametrize("q", [0.1, 0.3, 0.7, 1.1])
def test_near_either_edge_the_line_goes_to_nought_or_to_half_the_drive(q: float) -> None:
    """scipy's characteristic values: beta = 0 at a_0(q), beta = 1 at b_1(q)."""
    low, high = mathieu_a(0, q), mathieu_b(1, q)
    span = 1e-3 * (high - low)
    inside = [line_hz(trap(one, q, ALONE), 0) for one in (low + span, high - span)]
    assert inside[0] < 0.05 * DRIVE_HZ / 2.0
    assert inside[1] > 0.95 * DRIVE_HZ / 2.0
    assert not held(trap(low - span, q, ALONE), 0)
    assert not held(trap(high + span, q, ALONE), 0)


@pytest.mark.parametrize(
    ("shape", "axes", "a", "q", "inwards"),
    [
        (LINEAR, (0, 1), 0.0, 0.908046333734577594, (0.0, -1.0)),  # edge of the first region [mem + calc]
        (LINEAR, (0, 1), 0.23699399, 0.70599607, (-1.0, 0.0)),  # the mass filter's apex [mem + calc]
        (RING, (0, 2), 0.149996865, 0.780905923, (-1.0, 0.5)),  # corners of the ring trap [mem + calc]
        (RING, (0, 2), -0.671359797, 1.239780117, (1.0, -0.6)),
    ],
)
def test_an_orbit_is_held_just_inside_and_lost_just_outside(
    shape: tuple[float, float, float], axes: tuple[int, ...], a: float, q: float, inwards: tuple[float, float]
) -> None:
    for sign in (1.0, -1.0):
        found = held(trap(a + sign * 1e-5 * inwards[0], q + sign * 1e-5 * inwards[1], shape), *axes)
        assert found is (sign > 0.0)


@pytest.mark.parametrize("damping", [0.0, 0.37, 1.0])
def test_the_map_of_all_parts_is_what_another_integrator_finds(damping: float) -> None:
    """scipy's DOP853 on the whole equation: tilted curvatures, field, tickle and damping together."""
    random = np.random.default_rng(1)
    static, drive = (
        scale * (one + one.T) for scale, one in zip((1e7, 4e8), random.normal(size=(2, 3, 3)), strict=True)
    )
    whole = constants(static, drive, damping_per_s=3e4)
    tickle_hz = 2.1e6

    def rate(phase: float, y: Array) -> Array:
        r, w, c, s, field = y[0:3], y[3:6], y[6], y[7], y[8:11]
        force = field + whole.tickle_field_per_v * c - (static + drive * math.sin(phase)) @ r
        pull = CHARGE_OVER_MASS * force / OMEGA**2 - damping * 3e4 / OMEGA * w
        nu = tickle_hz / DRIVE_HZ
        return np.concatenate((w, pull, (-nu * s, nu * c), np.zeros(3)))

    start = random.normal(size=11) * np.array([1e-6] * 6 + [1e-3] * 2 + [5.0] * 3)
    end = solve_ivp(rate, (0.0, 2.0 * math.pi), start, method="DOP853", rtol=1e-13, atol=1e-22).y[:, -1]
    found = Trap(whole).tickled(tickle_hz).one(damping) @ start
    assert found[:6] == pytest.approx(end[:6], rel=1e-9, abs=1e-16)
    assert found[6:] == pytest.approx(end[6:], rel=1e-12)


def test_powers_of_the_map_are_the_map_applied_again_and_again() -> None:
    one = trap(0.01, 0.3, damping_per_s=1e4).tickled(2e6)
    state = np.ones(11) * 1e-6
    track = one.track(state, 6, 1.0)
    for periods in (0, 1, 2, 31, 63):
        assert track[:, periods] == pytest.approx(one.after(state, periods, 1.0)[:3], rel=1e-9)
        by_hand = np.linalg.matrix_power(one.one(1.0), periods) @ state
        assert by_hand[:3] == pytest.approx(track[:, periods], rel=1e-9)
