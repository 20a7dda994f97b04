"""The engine against published numbers. [lit] looked up in the named source, [mem] from memory, [calc] computed elsewhere
with 25 or more digits by another method."""

from __future__ import annotations

import numpy as np
import pytest

from tests.physics import plain_units
from trapd.physics.floquet import inside, mathieu, motion
from trapd.physics.window import stable_intervals


def interval(trap, species, setpoint, a, q, low, high):
    (found,) = stable_intervals(trap, species, [plain_units.point(a, q)], setpoint, low, high)
    return found


def test_the_first_region_at_q_5_lies_between_the_tabulated_characteristic_values():
    # a0(5) and b1(5): DLMF table 28.6.1, Abramowitz & Stegun table 20.1 [lit], 8 digits
    (found,) = interval(plain_units.one_axis(), plain_units.PARTICLE, "a", 0.0, 5.0, -20.0, 20.0)
    assert found.low == pytest.approx(-5.80004602, abs=6e-9)
    assert found.high == pytest.approx(-5.79008060, abs=6e-9)


@pytest.mark.parametrize(("below", "above"), [(1.85818754, 2.09946045), (7.44910974, 9.23632771)])
def test_higher_regions_at_q_5_lie_between_tabulated_values_and_are_not_the_first(below, above):
    # a1, b2 and a2, b3 of q = 5: same tables [lit; b3 mem]
    assert not mathieu(below - 1e-6, 5.0)[0]
    assert mathieu(below + 1e-6, 5.0)[:2] == (True, False)
    assert mathieu(above - 1e-6, 5.0)[:2] == (True, False)
    assert not mathieu(above + 1e-6, 5.0)[0]


def test_unfolded_beta_counts_the_regions_passed():
    # beta runs from n - 1 to n between consecutive characteristic values (DLMF section 28.12 [mem])
    assert mathieu(1.85818754 + 1e-4, 5.0)[2] == pytest.approx(1.0, abs=0.05)
    assert mathieu(2.09946045 - 1e-4, 5.0)[2] == pytest.approx(2.0, abs=0.05)
    assert mathieu(30.0, 0.0)[2] == pytest.approx(30**0.5, rel=1e-12)


def test_without_static_field_the_region_ends_at_q_0_908():
    (found,) = interval(plain_units.one_axis(), plain_units.PARTICLE, "drive.amplitude", 0.0, 0.3, 0.01, 30.0)
    assert found.high == pytest.approx(0.908046333734577594, rel=1e-14)  # [mem + calc]
    assert (found.high_by.kind, found.high_by.edge, found.high_by.mode) == ("edge", "beta = 1", "x")


@pytest.mark.parametrize(
    ("make", "a", "q"),
    [
        (plain_units.mass_filter, 0.23699399, 0.70599607),  # apex of the mass filter [mem + calc]
        (plain_units.ring, 0.149996865, 0.780905923),  # corners of the ring trap's region [mem + calc]
        (plain_units.ring, -0.671359797, 1.239780117),
    ],
)
def test_a_corner_of_the_region_is_where_the_interval_closes(make, a, q):
    outward = 3e-8 * np.sign(a)
    (found,) = interval(make(), plain_units.PARTICLE, "drive.amplitude", a - outward, q, 0.0, 5.0)
    assert found.low < q + 1e-8
    assert found.high > q - 1e-8
    assert found.high - found.low < 1e-6
    assert interval(make(), plain_units.PARTICLE, "drive.amplitude", a + outward, q, 0.0, 5.0) == []


def test_exact_beta_is_not_the_adiabatic_one():
    assert mathieu(0.0, 0.4)[2] == pytest.approx(0.292566211480906, rel=1e-14)  # [calc]
    assert (0.4 / 2**0.5) / mathieu(0.0, 0.4)[2] - 1 == pytest.approx(-0.033, abs=5e-4)  # [calc]
    assert (0.8 / 2**0.5) / mathieu(0.0, 0.8)[2] - 1 == pytest.approx(-0.179, abs=1e-3)  # [calc]


@pytest.mark.parametrize(("kappa", "edge"), [(0.1, 0.92769), (0.25, 1.02657), (0.5, 1.34052)])
def test_damping_moves_the_edge_outward(kappa, edge):
    # Hasegawa & Uehara 1995 [calc]
    (found,) = interval(plain_units.one_axis(), plain_units.damped(kappa), "drive.amplitude", 1e-4, 0.3, 0.1, 5.0)
    (touch,) = interval(plain_units.one_axis(), plain_units.damped(kappa), "drive.amplitude", 0.0, 0.3, 0.1, 5.0)
    assert touch.high == pytest.approx(edge, abs=6e-6)
    assert found.high < touch.high


def test_a_mode_locked_by_damping_is_not_lost():
    # gamma/Omega = 0.1, q = 0.92: multipliers -0.61 and -0.87 [calc]
    held = motion(plain_units.one_axis(), plain_units.damped(0.1), plain_units.point(0.0, 0.92))
    assert held.stable
    assert held.first_region
    assert held.beta[0] == 1.0
    assert held.growth_per_s is None


def test_between_two_safe_points_the_straight_line_is_not_safe():
    # (a, q) = (0.0045, 0.1) and (0.156, 0.6), unstable from q = 0.103 to 0.522 in between [calc]
    q = np.array([0.1, 0.103, 0.3, 0.521, 0.523, 0.6])
    a = 0.0045 + (0.156 - 0.0045) * (q - 0.1) / 0.5
    held = inside(
        plain_units.mass_filter(), plain_units.PARTICLE, [plain_units.point(*p) for p in zip(a, q, strict=True)]
    )
    assert held.tolist() == [True, False, False, False, True, True]
