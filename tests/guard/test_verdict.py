"""The verdict on a state: every rule on the ions' motion refuses beyond its bound, and offers the nearest value that passes."""

from __future__ import annotations

from dataclasses import replace
from math import pi, sqrt

import numpy as np
import pytest
from scipy.special import mathieu_a

from tests.guard.benches import (
    CALCIUM,
    FIRST_EDGE_Q,
    NONE,
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
    rules_of,
    wide,
    with_limit,
)
from trapd.guard import rules
from trapd.guard.limits import level_of
from trapd.guard.model import GuardModel
from trapd.guard.motion_rules import _margin
from trapd.guard.verdict import judge, judge_move
from trapd.guard.window import window
from trapd.physics.species import Species, ion
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents, Reason, Values

STRONTIUM, YTTERBIUM = SOUTH.catalogue["88Sr+"], SOUTH.catalogue["171Yb+"]
RING = replace(exact(wide(SOUTH, amplitude=(0.0, 3000.0))), level_max_v=None, frequency_fixed=False)
ROOMY = replace(exact(wide(NORTH, amplitude=(0.0, 1e4), rods=(-300.0, 300.0))), level_max_v=None)
CALCIUM_ION = NORTH.catalogue["40Ca+"]


def north_at(a: float, q: float, endcaps: float = 0.05) -> dict[str, float]:
    """The state of the north bench with this a and q along x but for the endcaps' share (Berkeland et al. 1998 [mem])."""
    spring = CALCIUM_ION.mass_kg * (0.5e-3 * 2 * pi * 21e6) ** 2 / CALCIUM_ION.charge_c
    return {**NORTH_WORK, AMPLITUDE: q * spring / 2, "rods": a * spring / 4, "endcaps": endcaps}


def test_the_work_point_of_the_north_bench_is_allowed_with_the_published_figures() -> None:
    """2.155, 2.033, 0.825 MHz and 8.18 eV: computed for this trap by another method, with 25 digits."""
    verdict = judge(NORTH, CALCIUM, NORTH_WORK)
    (found,) = verdict.species
    assert verdict.accepted
    assert verdict.values == NORTH_WORK
    assert found.secular_frequencies_hz == pytest.approx((2.155e6, 2.033e6, 0.825e6), rel=5e-4)
    assert found.depth_ev == pytest.approx(8.18, abs=0.005)
    assert found.q[0] == pytest.approx(0.2885, abs=5e-5)
    assert found.a[2] == pytest.approx(0.0062, abs=5e-5)


@pytest.mark.parametrize("charges", [1, 2])
def test_beyond_the_published_edge_a_state_is_unstable(charges: int) -> None:
    one = ion(f"88Sr{charges}+")
    model = replace(RING, catalogue={one.name: one}, margin=1e-9)
    edge = ring_amplitude_at(FIRST_EDGE_Q, one, 15e6)
    inside, outside = ({**SOUTH_WORK, AMPLITUDE: edge * (1 + by)} for by in (-1e-8, 1e-8))
    assert judge(model, held(one.name), inside).accepted
    reason = only(judge(model, held(one.name), outside, [AMPLITUDE]).reasons)
    assert (reason.rule, reason.species, reason.mode) == (rules.STABILITY, one.name, "z")
    assert reason.bound == pytest.approx(edge, rel=1e-9)
    assert "q = 0.908, edge 0.908" in reason.message


def test_the_margin_keeps_its_distance_above_and_below() -> None:
    """3 % in frequency are the sharper here, q goes with 1/f^2; 3 % in amplitude are the sharper where it cannot matter."""
    top = ring_amplitude_at(FIRST_EDGE_Q, STRONTIUM, 15e6)
    strontium = held("88Sr+")
    inside, outside = ({**SOUTH_WORK, AMPLITUDE: top * 0.97**2 * (1 + by)} for by in (-1e-9, 1e-9))
    assert judge(RING, strontium, inside).accepted
    assert rules_of(judge(RING, strontium, outside)) == [rules.MARGIN]
    both = judge(RING, strontium, {**SOUTH_WORK, AMPLITUDE: top / 1.029})
    assert [(r.rule, r.quantity) for r in both.reasons] == [(rules.MARGIN, AMPLITUDE), (rules.MARGIN, FREQUENCY)]
    assert [r.nearest for r in both.reasons] == [
        pytest.approx(top * 0.97**2, rel=1e-9),
        pytest.approx(15e6 / sqrt(1.029) / 0.97, abs=1),
    ]


def test_the_margin_is_wanted_at_both_ends_of_the_gains_uncertainty() -> None:
    """With 1 % of gain uncertainty and the frequency 3 % too low, V 1.01 must still lie under the edge."""
    model = replace(RING, resonator=SOUTH.resonator)
    top = ring_amplitude_at(FIRST_EDGE_Q, STRONTIUM, 15e6) * 0.97**2 / 1.01
    assert judge(model, held("88Sr+"), {**SOUTH_WORK, AMPLITUDE: top * (1 - 1e-9)}).accepted
    assert not judge(model, held("88Sr+"), {**SOUTH_WORK, AMPLITUDE: top * (1 + 1e-9)}).accepted


def test_a_stable_state_beyond_the_first_region_is_refused() -> None:
    """The second region of the mass filter begins near a = 0, q = 7.547 (Dawson, Quadrupole Mass Spectrometry, 1976 [mem])."""
    verdict = judge(ROOMY, CALCIUM, north_at(0.0, 7.547, endcaps=20.0), [AMPLITUDE])
    (found,) = verdict.species
    assert (found.stable, found.first_region) == (True, False)
    assert rules_of(verdict) == [rules.STABILITY]


@pytest.mark.parametrize(
    ("q", "stable"),
    [(0.1, True), (0.102, True), (0.104, False), (0.3, False), (0.52, False), (0.524, True), (0.6, True)],
)
def test_the_straight_line_between_two_stable_points_is_judged_for_what_it_is(q: float, stable: bool) -> None:
    """From (a, q) = (0.0045, 0.1) to (0.156, 0.6) it is unstable from q = 0.103 to 0.522 (computed with 30 digits)."""
    model = replace(ROOMY, margin=0.0)
    a = 0.0045 + (0.156 - 0.0045) * (q - 0.1) / 0.5
    assert judge(model, CALCIUM, north_at(a, q, endcaps=0.001)).accepted is stable


def test_at_0_v_the_margin_is_one_programmable_step() -> None:
    """On rods at 0 V a part of the value is nothing. The y motion is lost where a_y = a_0(q) (scipy's Mathieu functions)."""
    resting = {**NORTH_WORK, "rods": 0.0, AMPLITUDE: 100.0}
    per_volt, endcaps = (
        0.0022188874677,
        -0.0030886913551,
    )  # a of 1 V on the rods; of 120 V on the endcaps: see `north_at`
    edge = (endcaps - float(mathieu_a(0, 100 / 260 * 0.28845537080662687))) / per_volt
    assert judge(with_limit(ROOMY, "rods", resolution=0.99 * edge), CALCIUM, resting).accepted
    reason = only(judge(with_limit(ROOMY, "rods", resolution=1.01 * edge), CALCIUM, resting).reasons)
    assert (reason.rule, reason.quantity, reason.found) == (rules.MARGIN, "rods", 0.0)
    assert abs(reason.bound or 0.0) == pytest.approx(edge, rel=1e-6)
    assert "less than one programmable step" in reason.message


def test_a_secular_frequency_under_the_files_bound_is_refused() -> None:
    """f_z grows as the root of the endcap voltage, and is 825.261 kHz at 120 V."""
    verdict = judge(NORTH, CALCIUM, {**NORTH_WORK, "endcaps": 1.0}, ["endcaps"])
    reason = only(verdict.reasons)
    assert (reason.rule, reason.mode, reason.unit) == (rules.MIN_SECULAR_FREQUENCY, "z", "Hz")
    assert reason.found == pytest.approx(825.261e3 / sqrt(120), rel=1e-3)
    assert reason.nearest == pytest.approx(120 * (100 / 825.261) ** 2, rel=1e-3)


def test_a_mode_that_is_lost_counts_as_a_secular_frequency_of_nothing_at_the_edge_of_the_band() -> None:
    """One end of the band is inside, the other is not: then the rule names stability, and the frequency is not asked."""
    edge = judge(ROOMY, CALCIUM, {**NORTH_WORK, AMPLITUDE: 50.0}, [AMPLITUDE]).reasons[0].bound
    assert edge is not None
    blurred = replace(ROOMY, resonator=replace(ROOMY.resonator, gain_uncertainty=0.02), min_secular_frequency_hz=1.0)
    assert rules_of(judge(blurred, CALCIUM, {**NORTH_WORK, AMPLITUDE: edge * 1.01})) == [rules.STABILITY]


def test_a_well_shallower_than_the_files_bound_is_refused() -> None:
    """In z the depth is Q kappa U_ec: 0.29 * 3 V = 0.87 eV, and 5 eV want 17.24 V."""
    deep = replace(NORTH, min_depth_ev=5.0)
    reason = only(judge(deep, CALCIUM, {**NORTH_WORK, "endcaps": 3.0}, ["endcaps"]).reasons)
    assert (reason.rule, reason.unit, reason.bound) == (rules.MIN_DEPTH, "eV", 5.0)
    assert reason.found == pytest.approx(0.87)
    assert reason.nearest == pytest.approx(5 / 0.29)


def test_depth_is_judged_at_the_bottom_of_the_gains_uncertainty() -> None:
    """Radially it goes with V^2: what has 4.2 eV at 260 V may have less at 2 % under."""
    shown = judge(NORTH, CALCIUM, NORTH_WORK).species[0].depth_ev
    assert shown is not None
    assert rules_of(judge(replace(NORTH, min_depth_ev=shown * 0.999), CALCIUM, NORTH_WORK)) == [rules.MIN_DEPTH]


def test_a_trap_that_cannot_tell_its_depth_is_not_held_to_one() -> None:
    assert judge(replace(TILTED, min_depth_ev=1e6), held("bead"), TILTED_WORK).accepted


def test_a_trap_without_rules_of_its_own_is_held_to_stability_and_margin() -> None:
    assert judge(exact(NORTH), CALCIUM, {**NORTH_WORK, "endcaps": 0.01}).accepted


def test_every_species_held_is_judged_and_the_one_that_fails_is_named() -> None:
    """171Yb+ is nearly twice as heavy: what it needs 88Sr+ does not survive, q goes as 1/m."""
    both = held("171Yb+", "88Sr+")
    much = {**SOUTH_WORK, AMPLITUDE: ring_amplitude_at(0.6, YTTERBIUM, 15e6)}
    assert judge(RING, held("171Yb+"), much).accepted
    reason = only(judge(RING, both, much, [AMPLITUDE]).reasons)
    assert (reason.rule, reason.species) == (rules.STABILITY, "88Sr+")
    assert [one.ion for one in judge(RING, both, much).species] == ["171Yb+", "88Sr+"]


def test_the_nearest_value_suits_every_species_held() -> None:
    """At a bias of 12 V in the ring the heavy one asks for more amplitude than is left under the light one's edge."""
    both, values = held("88Sr+", "171Yb+"), {**SOUTH_WORK, AMPLITUDE: 1200.0, "bias": 2.0}
    for reason in judge(RING, both, values, [AMPLITUDE]).reasons:
        assert reason.nearest is not None
        assert judge(RING, both, {**values, AMPLITUDE: reason.nearest}).accepted


def test_all_reasons_are_given_at_once() -> None:
    verdict = judge(replace(NORTH, min_depth_ev=5.0), CALCIUM, {**NORTH_WORK, "endcaps": 1.0, "rods": 11.0})
    assert rules_of(verdict) == [rules.LIMIT, rules.MIN_SECULAR_FREQUENCY, rules.MIN_DEPTH]


@pytest.mark.parametrize("frequency_hz", [0.0, -1e6])
def test_without_a_drive_frequency_there_is_a_limit_to_name_and_no_motion(frequency_hz: float) -> None:
    verdict = judge(replace(NORTH, level_max_v=None), CALCIUM, {**NORTH_WORK, FREQUENCY: frequency_hz})
    assert {r.quantity for r in verdict.reasons if r.rule == rules.LIMIT} >= {FREQUENCY}
    assert (verdict.accepted, verdict.species) == (False, ())


def test_where_nothing_would_help_no_nearest_value_is_offered() -> None:
    """Endcaps below zero push the ion out along z, where no drive of this trap acts."""
    verdict = judge(ROOMY, CALCIUM, {**NORTH_WORK, "endcaps": -5.0}, [AMPLITUDE])
    reason = next(r for r in verdict.reasons if r.rule == rules.STABILITY)
    assert (reason.nearest, reason.bound) == (None, None)
    assert "no drive.amplitude within its limits would change that" in reason.message


def test_where_no_programmable_value_is_allowed_none_is_offered() -> None:
    """In the ring a bias of 2.1 to 2.9 V would do, but the supply knows whole volts only."""
    model = with_limit(wide(RING, bias=(2.1, 2.9)), "bias", resolution=1.0)
    verdict = judge(model, held("88Sr+"), {**SOUTH_WORK, "bias": -19.0}, ["bias"])
    assert verdict.reasons[-1].rule == rules.STABILITY
    assert verdict.reasons[-1].nearest is None


def test_a_margin_that_fails_between_edges_of_others_says_so() -> None:
    """A shim without curvature has no edge of its own, whatever its margin."""
    reason = _margin(NORTH, [CALCIUM_ION], CALCIUM_ION, NORTH_WORK, "shim_x")
    assert (reason.bound, reason.mode) == (None, None)
    assert "not stable everywhere within the margin" in reason.message


BREAKING: list[tuple[str, GuardModel, Contents, Values, str]] = [
    (rules.LIMIT, NORTH, CALCIUM, {**NORTH_WORK, AMPLITUDE: 420.0}, AMPLITUDE),
    (rules.LIMIT, NORTH, CALCIUM, {**NORTH_WORK, "endcaps": 950.0}, "endcaps"),
    (rules.LEVEL, NORTH, CALCIUM, {**NORTH_WORK, FREQUENCY: 21.08e6}, AMPLITUDE),
    (rules.STABILITY, NORTH, CALCIUM, {**NORTH_WORK, AMPLITUDE: 60.0}, AMPLITUDE),
    (rules.STABILITY, RING, held("88Sr+"), {**SOUTH_WORK, AMPLITUDE: 1000.0}, AMPLITUDE),
    (rules.STABILITY, RING, held("88Sr+", "171Yb+"), {**SOUTH_WORK, "bias": -19.0}, "bias"),
    (rules.STABILITY, wide(TILTED, amplitude=(0.0, 9e3)), held("bead"), {**TILTED_WORK, AMPLITUDE: 5e3}, AMPLITUDE),
    (rules.MARGIN, exact(NORTH), CALCIUM, {**NORTH_WORK, AMPLITUDE: 96.0}, AMPLITUDE),
    (rules.MARGIN, RING, held("88Sr+"), {**SOUTH_WORK, FREQUENCY: 8.7e6}, FREQUENCY),
    (rules.MIN_SECULAR_FREQUENCY, NORTH, CALCIUM, {**NORTH_WORK, "endcaps": 1.0}, "endcaps"),
    (rules.MIN_SECULAR_FREQUENCY, TILTED, held("bead"), {**TILTED_WORK, AMPLITUDE: 40.0}, AMPLITUDE),
    (rules.MIN_DEPTH, replace(NORTH, min_depth_ev=5.0), CALCIUM, {**NORTH_WORK, AMPLITUDE: 200.0}, AMPLITUDE),
]


@pytest.mark.parametrize(("rule", "model", "contents", "values", "setpoint"), BREAKING)
@pytest.mark.parametrize("resolution", [0.0, 0.01])
def test_the_nearest_value_is_accepted_and_a_hair_beyond_it_is_not(
    rule: str, model: GuardModel, contents: Contents, values: Values, setpoint: str, resolution: float
) -> None:
    """Exact where nothing is quantised; else the last programmable value that passes."""
    if setpoint == FREQUENCY:
        model = wide(model, frequency=(5e6, 16e6))
    if resolution and setpoint == AMPLITUDE:
        model = replace(model, level_resolution_v=resolution)
        resolution *= float(values[AMPLITUDE]) / level_of(model, values)
    elif resolution:
        resolution = 10.0 if setpoint == FREQUENCY else resolution
        model = with_limit(model, setpoint, resolution=resolution)
    reason = first(judge(model, contents, values, [setpoint]).reasons, rule, setpoint)
    assert reason.nearest is not None
    assert judge(model, contents, {**values, setpoint: reason.nearest}).accepted
    hair = max(resolution, 1.0 if setpoint == FREQUENCY else 1e-9 * abs(reason.nearest))
    beyond = reason.nearest + float(np.copysign(hair, values[setpoint] - reason.nearest))
    assert not judge(model, contents, {**values, setpoint: beyond}).accepted


def first(reasons: tuple[Reason, ...], rule: str, setpoint: str) -> Reason:
    return next(r for r in reasons if r.rule == rule and r.quantity == setpoint)


def test_every_rule_has_a_name_and_a_sentence() -> None:
    names = {value for name, value in vars(rules).items() if name.isupper() and isinstance(value, str)}
    assert set(rules.RULES) == names
    assert all(len(sentence.split()) > 5 for sentence in rules.RULES.values())


def test_a_move_to_where_one_is_already_is_an_empty_ramp() -> None:
    verdict, ramp = judge_move(NORTH, CALCIUM, NORTH_WORK, NORTH_WORK)
    assert verdict.accepted
    assert ramp is not None
    assert (ramp.steps, ramp.duration_s) == ((), 0)


def test_staying_where_one_must_not_be_is_no_move() -> None:
    lost = {**NORTH_WORK, AMPLITUDE: 30.0}
    verdict, ramp = judge_move(NORTH, CALCIUM, lost, lost)
    assert (verdict.accepted, ramp, rules_of(verdict)) == (False, None, [rules.STABILITY])


def test_an_empty_trap_is_shown_its_motion_and_warned_only() -> None:
    verdict = judge(NORTH, NONE, {**NORTH_WORK, AMPLITUDE: 30.0})
    assert verdict.accepted
    assert [r.rule for r in verdict.warnings] == [rules.STABILITY]
    assert not verdict.species[0].stable


def test_a_heavier_ion_alone_may_pass_where_a_lighter_one_would_not() -> None:
    heavy = Species(name="heavy", mass_kg=2 * CALCIUM_ION.mass_kg, charge_c=CALCIUM_ION.charge_c)
    model = replace(ROOMY, catalogue={**ROOMY.catalogue, "heavy": heavy})
    strong = north_at(0.0, 1.2, endcaps=20.0)  # q = 0.6 for twice the mass
    assert judge(model, held("heavy"), strong).accepted
    assert not judge(model, CALCIUM, strong).accepted


@pytest.mark.parametrize(
    ("name", "value"),
    [(AMPLITUDE, 500.0), (AMPLITUDE, -115.0), (FREQUENCY, 21.2e6), ("endcaps", -50.0), ("rods", 12.0)],
)
def test_the_nearest_value_of_a_limit_suits_the_ions_as_well(name: str, value: float) -> None:
    asked = {**NORTH_WORK, name: value}
    limits = [one for one in judge(NORTH, CALCIUM, asked, [name]).reasons if one.rule == rules.LIMIT]
    assert [one.quantity for one in limits] == [name]
    for reason in limits:
        assert reason.nearest is not None
        assert judge(NORTH, CALCIUM, {**asked, reason.quantity: reason.nearest}).accepted


@pytest.mark.parametrize("frequency_hz", [0.0, -5.0])
def test_a_frequency_that_is_none_is_answered_and_not_computed(frequency_hz: float) -> None:
    silly = {**NORTH_WORK, FREQUENCY: frequency_hz}
    assert rules.LIMIT in {one.rule for one in judge(NORTH, CALCIUM, silly).reasons}
    assert not any(reach.intervals for reach in window(NORTH, list(NORTH.catalogue.values()), silly).allowed.values())
