"""Exact intervals of one setpoint."""

from __future__ import annotations

import numpy as np
import pytest

from tests.physics import plain_units
from tests.physics.integrator import scan
from tests.physics.random_traps import coefficients_at, draw
from trapd.physics import krein, pencil
from trapd.physics.floquet import inside, motion, motions
from trapd.physics.point import Point
from trapd.physics.species import ion
from trapd.physics.trap import Electrode, curvature, linear, tensor
from trapd.physics.window import LIMIT, Edge, Interval, intersect, stable_intervals

HAIR = 1e-6


def places(case, intervals, count):
    """A grid over the range, and a hair to both sides of every end; nothing nearer to an end than that."""
    ends = np.array([end for one in intervals for end in (one.low, one.high) if case.low < end < case.high])
    unit = 1e-3 * (case.high - case.low)
    hairs = HAIR * np.maximum(np.abs(ends), unit)
    values = np.concatenate([np.linspace(case.low, case.high, count + 2)[1:-1], ends - hairs, ends + hairs])
    values = np.unique(values[(values > case.low) & (values < case.high)])
    if len(ends):
        values = values[np.abs(values[:, None] - ends).min(axis=1) > HAIR / 2 * np.maximum(np.abs(values), unit)]
    return values


def integrated(case, values):
    a, q, kappa = (np.array(part) for part in zip(*(coefficients_at(case, case.at(x)) for x in values), strict=True))
    return scan(a, q, kappa)


def within(intervals, values):
    return np.array([any(one.low <= value <= one.high for one in intervals) for value in values])


def test_intervals_of_random_traps_agree_with_an_integrator_a_hair_inside_and_outside():
    random = np.random.default_rng(31)
    held = several = 0
    for _ in range(50):
        case = draw(random)
        (found,) = stable_intervals(case.trap, case.species, [case.point], case.setpoint, case.low, case.high)
        values = places(case, found, 60)
        growth, conjugate = integrated(case, values)
        expected = (growth < 1 + 1e-6) & ~conjugate.any(axis=1)
        assert (within(found, values) == expected).all(), case
        held += expected.sum()
        several += len(found) > 1
    assert held > 300
    assert several > 1


def test_intervals_with_a_least_secular_frequency_agree_with_the_motion_at_each_point():
    random = np.random.default_rng(32)
    ended = 0
    for _ in range(40):
        case = draw(random)
        least = case.point.frequency_hz * 10 ** random.uniform(-3, -1)
        (found,) = stable_intervals(
            case.trap, case.species, [case.point], case.setpoint, case.low, case.high, min_secular_hz=least
        )
        values = places(case, found, 60)
        points = [case.at(value) for value in values]
        moving = motions(case.trap, case.species, points)
        expected = [one.first_region and min(one.secular_frequencies_hz) >= least for one in moving]
        assert within(found, values).tolist() == expected, case
        ended += sum(end.kind == "rule" for one in found for end in (one.low_by, one.high_by))
        for one in found:
            for value, end in ((one.low, one.low_by), (one.high, one.high_by)):
                if end.kind == "rule":
                    slow = min(motion(case.trap, case.species, case.at(value)).secular_frequencies_hz)
                    assert slow == pytest.approx(least, rel=1e-9)
    assert ended > 20


def test_more_harmonics_move_no_end(monkeypatch):
    random = np.random.default_rng(34)
    cases = [draw(random) for _ in range(40)]

    def ends(case, least):
        (found,) = stable_intervals(
            case.trap, case.species, [case.point], case.setpoint, case.low, case.high, min_secular_hz=least
        )
        return [end for one in found for end in (one.low, one.high)]

    wanted = [(case, least) for case in cases for least in (None, case.point.frequency_hz / 100)]
    before = [ends(*one) for one in wanted]
    kept = krein.harmonics
    for module in (krein, pencil):
        monkeypatch.setattr(module, "harmonics", lambda norm: kept(norm) + 6)
    for one, found in zip(wanted, before, strict=True):
        scale = 1e-3 * (one[0].high - one[0].low)
        assert found == pytest.approx(ends(*one), rel=1e-12, abs=1e-12 * scale)


def test_points_side_by_side_give_what_each_gives_alone():
    case = draw(np.random.default_rng(33), kinds="tilted")
    points = [case.at(value) for value in np.linspace(case.low, case.high, 7)]
    for setpoint in case.trap.setpoints:
        low, high = (1e5, 1e8) if setpoint == "drive.frequency" else (-500.0, 900.0)
        together = stable_intervals(case.trap, case.species, points, setpoint, low, high)
        for point, found in zip(points, together, strict=True):
            (alone,) = stable_intervals(case.trap, case.species, [point], setpoint, low, high)
            assert [(one.low_by, one.high_by) for one in found] == [(one.low_by, one.high_by) for one in alone]
            ends = [end for one in alone for end in (one.low, one.high)]
            assert [end for one in found for end in (one.low, one.high)] == pytest.approx(ends, rel=1e-12)


def test_a_light_ion_far_past_its_edge_in_the_range_breaks_nothing():
    # 9Be+ at q = 21 at the top of the range; its own window is the Mathieu edge q = 0.908046333734577594 [mem + calc]
    beryllium = ion("9Be+")
    trap = linear(r0_m=5e-4, z0_m=2e-3, kappa=0.3, electrodes={"endcaps": Electrode(kind="endcap")})
    point = Point(frequency_hz=20e6, amplitude_v=100.0, electrodes={"endcaps": 0.01})
    q = abs(motion(trap, beryllium, point).q[0]) / 100
    top = 21 / q
    (found,) = stable_intervals(trap, beryllium, [point], "drive.amplitude", 1.0, top)
    (narrow,) = stable_intervals(trap, beryllium, [point], "drive.amplitude", 1.0, 1.1 / q)
    assert len(found) == len(narrow) == 1
    assert found[0].high * q == pytest.approx(0.908046333734577594, rel=1e-4)
    assert (found[0].low, found[0].high) == pytest.approx((narrow[0].low, narrow[0].high), rel=1e-13)


@pytest.mark.parametrize("kappa", [0.0, 0.05])
@pytest.mark.parametrize("least", [None, 1e-6])
def test_edges_are_found_however_wide_the_range(kappa, least):
    species = plain_units.damped(kappa)
    for setpoint, near, far in (
        ("drive.frequency", (0.1, 1.0), (1e-5, 1e5)),
        ("drive.amplitude", (0.01, 4.0), (-1e6, 1e6)),
    ):
        one, other = (
            stable_intervals(
                plain_units.one_axis(), species, [plain_units.point(-0.02, 0.6)], setpoint, *ends, min_secular_hz=least
            )[0]
            for ends in (near, far)
        )
        assert len(one) == 1
        found = [(i.low, i.high, i.low_by, i.high_by) for i in other]
        assert (
            pytest.approx(one[0].low, rel=1e-12),
            pytest.approx(one[0].high, rel=1e-12),
            one[0].low_by,
            one[0].high_by,
        ) in found


def test_a_setpoint_without_effect_is_free_or_forbidden_as_a_whole():
    trap = tensor(
        drive_curvature=np.diag([2.0, -2.0, 0]),
        electrodes={"a": Electrode(curvature=np.diag([1.0, -1, 0])), "hold": Electrode(curvature=np.diag([0, 0, 0.3]))}
        | {"shim": Electrode(field=[310.0, 0, 0])},
    )
    free, lost = (
        Point(frequency_hz=plain_units.FREQUENCY_HZ, amplitude_v=v, electrodes={"a": 0.0, "hold": 1.0, "shim": 0.0})
        for v in (0.5, 1.5)
    )
    found = stable_intervals(trap, plain_units.PARTICLE, [free, lost], "shim", -20.0, 20.0)
    assert found == [[Interval(low=-20.0, high=20.0, low_by=LIMIT, high_by=LIMIT)], []]


def test_a_setpoint_that_cannot_move_has_a_point_for_a_range():
    held, lost = plain_units.point(0.0, 0.5), plain_units.point(0.0, 1.5)
    found = stable_intervals(plain_units.one_axis(), plain_units.PARTICLE, [held, lost], "a", 0.0, 0.0)
    assert found == [[Interval(low=0.0, high=0.0, low_by=LIMIT, high_by=LIMIT)], []]
    assert intersect(found[0], [Interval(low=-1.0, high=1.0, low_by=LIMIT, high_by=LIMIT)]) == found[0]


def test_through_zero_drive_the_intervals_touch_and_stay_apart():
    # Without a static field nothing holds the ion at V = 0, though it is held arbitrarily near: two intervals.
    (found,) = stable_intervals(
        plain_units.one_axis(), plain_units.PARTICLE, [plain_units.point(0.0, 0.3)], "drive.amplitude", -2.0, 2.0
    )
    ends = [(one.low, one.high) for one in found]
    edge = 0.908046333734577594
    assert ends == [pytest.approx((-edge, 0.0), abs=1e-7), pytest.approx((0.0, edge), abs=1e-7)]


def test_a_window_closed_by_two_edges_that_meet_is_empty_or_a_sliver():
    # Below a0(q) on x and above -a0(q) on y with no drive: nothing; see the corner tests for the sliver.
    point = plain_units.point(0.3, 0.6)
    assert stable_intervals(plain_units.mass_filter(), plain_units.PARTICLE, [point], "drive.amplitude", 0, 5) == [[]]


def test_equal_modes_do_not_split_the_window():
    # In the linear trap with the rods at 0 V the x and y edges coincide.
    trap = linear(
        r0_m=5e-4,
        z0_m=2.5e-3,
        kappa=0.29,
        electrodes={"endcaps": Electrode(kind="endcap"), "rods": Electrode(kind="rods")},
    )
    point = Point(frequency_hz=21e6, amplitude_v=260.0, electrodes={"endcaps": 120.0, "rods": 0.0})
    for setpoint, low, high in (("drive.amplitude", 0, 2000), ("rods", -100, 100), ("drive.frequency", 5e6, 60e6)):
        assert len(stable_intervals(trap, ion("40Ca+"), [point], setpoint, low, high)[0]) == 1


def test_ends_are_explained():
    trap = linear(r0_m=5e-4, z0_m=2e-3, kappa=0.3, electrodes={"endcaps": Electrode(kind="endcap")})
    point = Point(frequency_hz=20e6, amplitude_v=300.0, electrodes={"endcaps": 50.0})
    (found,) = stable_intervals(trap, ion("40Ca+"), [point], "endcaps", -10.0, 30.0, min_secular_hz=1e5)[0]
    rule = Edge(kind="rule", species="40Ca+", mode="z", rule="min_secular_frequency")
    assert (found.low_by, found.high_by) == (rule, LIMIT)
    (found,) = stable_intervals(trap, ion("40Ca+"), [point], "endcaps", 10.0, 5000.0)[0]
    assert found.low_by == LIMIT
    assert (found.high_by.kind, found.high_by.edge) == ("edge", "beta = 0")
    assert found.high_by.mode in ("x", "y")


@pytest.mark.parametrize(
    ("setpoint", "low", "high", "says"),
    [("rods", 0, 1, "no setpoint 'rods'"), ("a", 1, 0, "range"), ("drive.frequency", 0, 1, "above 0 Hz")],
)
def test_a_range_that_is_none_is_refused(setpoint, low, high, says):
    with pytest.raises(ValueError, match=says):
        stable_intervals(plain_units.one_axis(), plain_units.PARTICLE, [plain_units.point(0, 0.3)], setpoint, low, high)


def test_a_tilt_too_small_to_matter_moves_no_edge():
    # Coupled and uncoupled axes take different ways through the code; a tilt of 1e-9 must not show.
    electrodes = {"endcaps": Electrode(kind="endcap"), "rods": Electrode(kind="rods")}
    size = {"r0_m": 5e-4, "z0_m": 2.5e-3, "kappa": 0.29}
    straight = linear(**size, electrodes=electrodes | {"tilt": Electrode()})
    tilted = linear(**size, electrodes=electrodes | {"tilt": Electrode(curvature=curvature(0, 0, 0, 1e-3, 1e-3, 1e-3))})
    point = Point(frequency_hz=21e6, amplitude_v=260.0, electrodes={"endcaps": 120.0, "rods": 1.0, "tilt": 1.0})
    ranges = {"drive.amplitude": (-900, 900), "rods": (-100, 100), "endcaps": (-9, 9e3), "drive.frequency": (5e6, 3e8)}
    for setpoint, (low, high) in ranges.items():
        for least in (None, 1e5):
            one, other = (
                stable_intervals(trap, ion("40Ca+"), [point], setpoint, low, high, min_secular_hz=least)[0]
                for trap in (straight, tilted)
            )
            assert [(i.low_by, i.high_by) for i in one] == [(i.low_by, i.high_by) for i in other]
            ends = [[end for i in found for end in (i.low, i.high)] for found in (one, other)]
            assert ends[0] == pytest.approx(ends[1], rel=1e-11)
            assert inside(tilted, ion("40Ca+"), [point], min_secular_hz=least).all()
