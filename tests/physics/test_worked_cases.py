"""Every worked case of this scope, to its own tolerance. Tensor case p19 is damped differently along each axis: not built."""

from __future__ import annotations

import pytest

from tests.physics.worked_cases import SETPOINTS, of_kind, species_of, trap_of
from trapd.physics.floquet import mathieu, motion
from trapd.physics.window import intersect, stable_intervals


def named(*kinds: str):
    cases = [case for case in of_kind(*kinds) if case["id"] != "p19"]
    return pytest.mark.parametrize("case", cases, ids=[case["id"] for case in cases])


def exactly(value, case):
    tolerance = case["tolerance"]
    return pytest.approx(value, rel=tolerance.get("rel", tolerance.get("rel_f")))


@named("mathieu")
def test_mathieu(case):
    stable, first, beta, growth = mathieu(case["inputs"]["a"], case["inputs"]["q"])
    expected = case["expected"]
    assert (stable, first) == (expected["stable"], expected["first_region"])
    if stable:
        folded = beta % 2 if beta % 2 <= 1 else 2 - beta % 2
        assert folded == exactly(expected["beta"], case)
    else:
        assert growth == exactly(expected["growth_per_tau"], case)


@named("linear_secular", "ring_secular")
def test_secular_frequencies(case):
    trap, point = trap_of(case["kind"], case["inputs"])
    found = motion(trap, species_of(case["inputs"])[0], point)
    expected = case["expected"]["f_Hz"]
    wanted = [expected[axis if axis in expected else "r"] for axis in "xyz"]
    assert list(found.secular_frequencies_hz) == exactly(wanted, case)
    assert found.stable
    assert found.first_region
    assert found.degenerate == ("r" in expected)
    last = len(case["expected"]["a"])
    assert list(found.a)[-last:] == exactly(case["expected"]["a"], case)
    assert [abs(q) for q in found.q][-last:] == exactly([abs(q) for q in case["expected"]["q"]], case)


@named("tensor")
def test_tensor(case):
    trap, point = trap_of(case["kind"], case["inputs"])
    found = motion(trap, species_of(case["inputs"])[0], point)
    assert found.stable == case["expected"]["stable"]
    if found.stable:
        modes = sorted(frequency for frequency, _ in case["expected"]["modes_fHz_decayPerS"])
        assert sorted(found.secular_frequencies_hz) == exactly(modes, case)
        assert found.growth_per_s is None
    else:
        assert found.growth_per_s == exactly(case["expected"]["max_growth_per_s"], case)
        assert found.beta is None


@named("linear_interval", "ring_interval", "tensor_interval", "linear_damped_interval")
def test_first_region_intervals(case):
    inputs = case["inputs"]
    trap, point = trap_of(case["kind"], inputs)
    setpoint = SETPOINTS.get(inputs["knob"], inputs["knob"])
    low, high = inputs["window"]
    found = None
    for species in species_of(inputs):
        (one,) = stable_intervals(trap, species, [point], setpoint, low, high)
        found = one if found is None else intersect(found, one)
    expected = case["expected"].get("first_region_intervals", case["expected"]["intervals"])
    assert [[one.low, one.high] for one in found] == [exactly(pair, case) for pair in expected]


@named("depth_linear")
def test_depth_is_the_least_of_the_axes(case):
    inputs = case["inputs"]
    trap, point = trap_of(case["kind"], inputs)
    species = species_of(inputs)[0]
    endcap_ev = inputs["trap"]["kappa"] * inputs["trap"]["U_ec_V"]  # z, which the case leaves out: Q kappa U
    assert motion(trap, species, point).depth_ev == exactly(endcap_ev, case)
    # With the endcaps' curvature along z stiffened alone, y is the least.
    stiff = dict(trap.electrode_curvature)
    stiff["U_ec_V"] = stiff["U_ec_V"] * [[1, 0, 0], [0, 1, 0], [0, 0, 2]]
    tall = type(trap)(drive_curvature=trap.drive_curvature, electrode_curvature=stiff, escape=trap.escape)
    assert motion(tall, species, point).depth_ev == exactly(case["expected"]["y_at_r0_eV"], case)
