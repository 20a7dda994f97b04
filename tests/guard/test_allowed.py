"""The allowed intervals of a setpoint are exactly the values that the verdict on a state accepts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.guard.benches import (
    CALCIUM,
    FIRST_EDGE_Q,
    NORTH,
    NORTH_WORK,
    SOUTH,
    SOUTH_WORK,
    TILTED,
    TILTED_WORK,
    exact,
    held,
    only,
    ring_amplitude_at,
    wide,
    with_limit,
)
from trapd.guard import rules
from trapd.guard.allowed import allowed_intervals, limit_intervals, shrink
from trapd.guard.contents import watched
from trapd.guard.model import GuardModel
from trapd.guard.verdict import judge
from trapd.guard.window import window
from trapd.physics.interval import LIMIT, Edge, Interval
from trapd.physics.resonator import Resonator
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents, Values

RING = replace(
    exact(wide(SOUTH, amplitude=(0.0, 3000.0), frequency=(5e6, 40e6))), level_max_v=None, frequency_fixed=False
)
QUANTISED = replace(
    with_limit(with_limit(NORTH, "rods", resolution=0.7), "endcaps", resolution=3.0), level_resolution_v=0.1
)
SIGNED = replace(wide(exact(NORTH), amplitude=(-300.0, 420.0), rods=(-60.0, 60.0)), min_depth_ev=0.2)
STRICT = replace(NORTH, min_depth_ev=2.0, min_secular_frequency_hz=600e3)

CASES: dict[str, tuple[GuardModel, Contents, Values]] = {
    "linear": (wide(NORTH, rods=(-60.0, 60.0)), CALCIUM, {**NORTH_WORK, AMPLITUDE: 150.0}),
    "linear, quantised": (wide(QUANTISED, rods=(-60.0, 60.0)), CALCIUM, {**NORTH_WORK, AMPLITUDE: 130.0}),
    "linear, its own rules": (wide(STRICT, rods=(-60.0, 60.0)), CALCIUM, {**NORTH_WORK, AMPLITUDE: 180.0}),
    "linear, either phase": (SIGNED, CALCIUM, NORTH_WORK),
    "linear, reversed": (SIGNED, CALCIUM, {**NORTH_WORK, AMPLITUDE: -200.0}),
    "ring, two species": (RING, held("88Sr+", "171Yb+"), {**SOUTH_WORK, AMPLITUDE: 500.0}),
    "ring, uncertain": (
        replace(RING, resonator=SOUTH.resonator),
        held("88Sr+"),
        {**SOUTH_WORK, AMPLITUDE: 700.0, "bias": -4.0},
    ),
    "tilted, damped": (
        replace(wide(TILTED, amplitude=(0.0, 9e3), top=(-90.0, 90.0)), frequency_fixed=False),
        held("bead"),
        TILTED_WORK,
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_a_value_is_allowed_exactly_when_the_verdict_accepts_it(name: str) -> None:
    model, contents, values = CASES[name]
    rng = np.random.default_rng(11)
    seen = set()
    for setpoint, limit in model.limits.items():
        if setpoint == FREQUENCY and model.resonator.loaded_q is not None:
            continue  # there the band of a whole stretch counts: test_path
        found = allowed_intervals(model, watched(model, contents).enforced, values, setpoint)
        reach = (limit.high - limit.low) / 50
        least = 1e-3 if setpoint == FREQUENCY else -1e9
        trials = [*rng.uniform(max(limit.low - reach, least), limit.high + reach, 12)]
        for end in (end for interval in found for end in (interval.low, interval.high)):
            trials += [end * (1 - 1e-9) - 1e-9, end * (1 + 1e-9) + 1e-9]
        for value in trials:
            inside = any(interval.low <= value <= interval.high for interval in found)
            assert judge(model, contents, {**values, setpoint: value}).accepted is inside, (setpoint, value, found)
            seen.add(inside)
    assert seen == {True, False}


def test_the_edge_of_the_region_less_the_margin_ends_the_interval_and_says_why() -> None:
    """q = 0.908 of the lighter, in amplitude 3 % under it in frequency (q goes with 1/f^2)."""
    edge = ring_amplitude_at(FIRST_EDGE_Q, SOUTH.catalogue["88Sr+"], 15e6)
    found = only(allowed_intervals(RING, watched(RING, held("88Sr+", "171Yb+")).enforced, SOUTH_WORK, AMPLITUDE))
    assert found.high == pytest.approx(edge * 0.97**2, rel=1e-9)
    assert (found.high_by.species, found.high_by.mode) == ("88Sr+", "z")


def test_a_residue_of_the_setpoint_that_moved_last_shortens_nothing_that_its_margin_did_not() -> None:
    """But where its margin counts for less, it does: the residue is a tenth of the margin's displacement."""
    strontium = watched(RING, held("88Sr+")).enforced
    lagging = with_limit(RING, "bias", lag_s=0.01)
    for residue in ((), ("bias",), (AMPLITUDE, "bias")):
        for setpoint in (AMPLITUDE, "bias"):
            plain = allowed_intervals(lagging, strontium, SOUTH_WORK, setpoint)
            rested = allowed_intervals(lagging, strontium, SOUTH_WORK, setpoint, residue=residue)
            assert [i.low for i in rested] == pytest.approx([i.low for i in plain], rel=1e-12)
            assert [i.high for i in rested] == pytest.approx([i.high for i in plain], rel=1e-12)


def test_with_a_flat_gain_the_frequency_it_has_is_the_only_one_allowed() -> None:
    fixed = replace(RING, frequency_fixed=True)
    strontium = watched(fixed, held("88Sr+")).enforced
    found = only(allowed_intervals(fixed, strontium, SOUTH_WORK, FREQUENCY))
    assert (found.low, found.high, found.low_by.rule) == (15e6, 15e6, rules.FIXED_FREQUENCY)
    assert allowed_intervals(fixed, strontium, {**SOUTH_WORK, AMPLITUDE: 2000.0}, FREQUENCY) == []
    assert allowed_intervals(fixed, [], SOUTH_WORK, FREQUENCY) == limit_intervals(fixed, SOUTH_WORK, FREQUENCY)


def test_for_nobody_the_limits_alone_count() -> None:
    for setpoint in NORTH.limits:
        assert allowed_intervals(NORTH, [], NORTH_WORK, setpoint) == limit_intervals(NORTH, NORTH_WORK, setpoint)


def test_the_limits_name_what_binds() -> None:
    """411.8 V by the file's 420 V, 10 V x 38 by the level; 75.6 kHz either way by the level."""
    by_file = only(limit_intervals(NORTH, NORTH_WORK, AMPLITUDE))
    by_level = only(limit_intervals(replace(NORTH, level_max_v=10.0), NORTH_WORK, AMPLITUDE))
    unlimited = only(limit_intervals(replace(NORTH, level_max_v=None), NORTH_WORK, AMPLITUDE))
    assert by_file.high == pytest.approx(420 / 1.02)
    assert by_file.high_by.rule == rules.LIMIT
    assert by_level.high == pytest.approx(380.0)
    assert by_level.high_by.rule == rules.LEVEL
    assert unlimited.high == pytest.approx(420 / 1.02)
    assert unlimited.high_by.rule == rules.LIMIT
    frequency = only(limit_intervals(NORTH, NORTH_WORK, FREQUENCY))
    assert (frequency.low_by.rule, frequency.high_by.rule) == (rules.LEVEL, rules.LEVEL)
    assert (frequency.low, frequency.high) == pytest.approx((21e6 - 75.64e3, 21e6 + 75.64e3), rel=1e-6)
    flat = only(limit_intervals(SOUTH, SOUTH_WORK, FREQUENCY))
    assert (flat.low_by.rule, flat.high_by.rule) == (rules.LIMIT, rules.LIMIT)


def test_where_the_limits_leave_nothing_nothing_is_allowed() -> None:
    much = {**NORTH_WORK, AMPLITUDE: 38 * 12 + 1.0}
    assert limit_intervals(NORTH, much, FREQUENCY) == []
    assert allowed_intervals(NORTH, watched(NORTH, CALCIUM).enforced, much, FREQUENCY) == []


def test_once_one_species_leaves_nothing_the_others_are_not_asked() -> None:
    pair = watched(RING, held("88Sr+", "171Yb+")).enforced
    assert allowed_intervals(RING, pair, {**SOUTH_WORK, "bias": -19.9, AMPLITUDE: 100.0}, FREQUENCY) == []


def test_an_interval_shorter_than_its_margins_vanishes_and_a_searched_end_is_no_edge() -> None:
    edge = Edge(kind="edge", species="88Sr+", mode="z", edge="beta = 1")
    short = Interval(low=1.0, high=1.01, low_by=edge, high_by=edge)
    long = Interval(low=-5.0, high=5.0, low_by=LIMIT, high_by=edge)
    kept = shrink([short, long], lambda high: high - 1, lambda low: low + 1, rules.MARGIN, (-5.0, 9.0))
    (one,) = kept
    assert (one.low, one.high, one.low_by) == (-4.0, 4.0, LIMIT)
    assert (one.high_by.kind, one.high_by.rule, one.high_by.edge) == ("rule", rules.MARGIN, "beta = 1")
    (whole,) = shrink([replace(long, high=9.0, high_by=LIMIT)], lambda v: v, lambda v: v, rules.MARGIN, (-5.0, 9.0))
    assert whole.high_by == LIMIT


def test_the_window_shows_stable_and_allowed_of_every_setpoint() -> None:
    """Stable, with no margin, over the range of the limits; allowed lies inside it."""
    strontium = watched(RING, held("88Sr+")).enforced
    around = window(RING, strontium, SOUTH_WORK)
    edge = ring_amplitude_at(FIRST_EDGE_Q, SOUTH.catalogue["88Sr+"], 15e6)
    assert list(around.stable) == list(around.allowed) == list(RING.limits)
    assert [around.stable[name].unit for name in RING.limits] == ["Hz", "V", "V"]
    (stable,), (allowed,) = around.stable[AMPLITUDE].intervals, around.allowed[AMPLITUDE].intervals
    assert stable.high == pytest.approx(edge, rel=1e-9)
    assert stable.high_by.edge == "beta = 1"
    assert allowed.high == pytest.approx(edge * 0.97**2, rel=1e-9)
    (frequency,) = around.stable[FREQUENCY].intervals
    assert frequency.low == pytest.approx(15e6 * (300 / edge) ** 0.5, rel=1e-9)
    assert frequency.high_by == LIMIT


def test_a_frequency_stretch_is_judged_with_the_band_of_that_stretch() -> None:
    """Far from it, on the flank, the centre's uncertainty weighs more: 1 + x d/(1 + x^2)."""
    blurred = Resonator(gain=40.0, center_hz=15e6, center_uncertainty_hz=3e3, loaded_q=500)
    model = replace(RING, resonator=blurred, frequency_fixed=False)
    strontium = watched(model, held("88Sr+")).enforced
    near_edge = {**SOUTH_WORK, AMPLITUDE: ring_amplitude_at(0.80, strontium[0], 15e6)}
    short = allowed_intervals(model, strontium, near_edge, FREQUENCY, stretch=(15e6, 15.0005e6))
    whole = allowed_intervals(model, strontium, near_edge, FREQUENCY)
    assert any(i.low <= 15e6 <= i.high for i in short)
    assert not any(i.low <= 15e6 <= i.high for i in whole)


def test_a_setpoint_that_touches_no_curvature_is_allowed_everywhere_or_nowhere() -> None:
    everywhere = only(allowed_intervals(NORTH, watched(NORTH, CALCIUM).enforced, NORTH_WORK, "shim_x"))
    assert (everywhere.low, everywhere.high) == (-20.0, 20.0)
    weak = {**NORTH_WORK, AMPLITUDE: 30.0}
    assert allowed_intervals(NORTH, watched(NORTH, CALCIUM).enforced, weak, "shim_x") == []
    reason = judge(NORTH, CALCIUM, weak, ["shim_x"]).reasons[0]
    assert reason.nearest is None
    assert only(judge(NORTH, CALCIUM, weak).reasons).species == "40Ca+"
