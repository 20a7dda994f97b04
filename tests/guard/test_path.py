"""The way there: one setpoint at a time, every stretch inside one allowed interval, in steps that file and instrument allow."""

from __future__ import annotations

from dataclasses import replace
from itertools import groupby, pairwise
from math import exp, hypot

import pytest

from tests.guard.benches import (
    CALCIUM,
    FIRST_EDGE_Q,
    NONE,
    NORTH,
    NORTH_WORK,
    SOUTH,
    SOUTH_WORK,
    exact,
    held,
    only,
    ring_amplitude_at,
    rules_of,
    wide,
    with_limit,
)
from trapd.guard import path, rules
from trapd.guard.allowed import banded_states
from trapd.guard.limits import realised
from trapd.guard.model import GuardModel
from trapd.guard.ramp import leg_steps
from trapd.guard.verdict import judge, judge_move
from trapd.physics.resonator import Resonator
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents, Ramp, Reason, Values

STRONTIUM = SOUTH.catalogue["88Sr+"]
RING = replace(exact(wide(SOUTH, amplitude=(0.0, 3000.0), frequency=(5e6, 40e6))), level_max_v=None)
BOTH = held("88Sr+", "171Yb+")


def accepted(model: GuardModel, contents: Contents, present: Values, **changes: float) -> Ramp:
    verdict, ramp = judge_move(model, contents, present, {**present, **changes})
    assert verdict.accepted, verdict.reasons
    assert not verdict.recovering
    assert ramp is not None
    return ramp


def refused(model: GuardModel, contents: Contents, present: Values, **changes: float) -> list[Reason]:
    verdict, ramp = judge_move(model, contents, present, {**present, **changes})
    assert not verdict.accepted
    assert ramp is None
    return list(verdict.reasons)


def order_of(ramp: Ramp) -> list[str]:
    return [name for name, _ in groupby(step.setpoint for step in ramp.steps)]


def test_a_ramp_ends_where_it_should_in_steps_no_larger_and_no_faster_than_the_file_allows() -> None:
    ramp = accepted(NORTH, CALCIUM, NORTH_WORK, endcaps=210.0, rods=-3.0, **{AMPLITUDE: 300.0, FREQUENCY: 21.02e6})
    values = dict(ramp.start)
    for step in ramp.steps:
        limit = NORTH.limits[step.setpoint]
        change = abs(step.value - values[step.setpoint])
        assert 0 < change <= limit.step * (1 + 1e-9)
        assert step.wait_s >= change / limit.slew_per_s * (1 - 1e-9)
        values[step.setpoint] = step.value
    assert values == ramp.target
    assert sorted(order_of(ramp)) == sorted({FREQUENCY, AMPLITUDE, "endcaps", "rods"})
    assert ramp.duration_s == pytest.approx(40 / 40 + 20 / 20 + 90 / 50 + 4 / 5, rel=0.05)


def test_every_step_is_a_value_that_the_instrument_takes() -> None:
    model = replace(with_limit(NORTH, "endcaps", resolution=0.3), level_resolution_v=0.02)
    start = realised(model, NORTH_WORK)
    target = realised(model, {**start, "endcaps": 151.2, AMPLITUDE: 281.3})
    ramp = accepted(model, CALCIUM, start, **target)
    values = dict(start)
    for step in ramp.steps:
        values[step.setpoint] = step.value
        assert values == pytest.approx(realised(model, values), rel=1e-12)
        assert abs(values[step.setpoint] - step.value) <= model.limits[step.setpoint].step


def test_steps_too_small_for_the_instrument_are_not_taken_twice() -> None:
    """Steps of at most 0.6 V less 0.5 V on a 0.5 V grid: what rounds to the value before is left out."""
    model = with_limit(with_limit(NORTH, "rods", resolution=0.5), "rods", step=0.6)
    ramp = accepted(model, CALCIUM, NORTH_WORK, rods=3.0)
    values = [NORTH_WORK["rods"], *(step.value for step in ramp.steps)]
    assert all(abs(after - before) == pytest.approx(0.5) for before, after in pairwise(values))


def test_no_way_has_no_steps() -> None:
    assert leg_steps(NORTH, NORTH_WORK, "rods", NORTH_WORK["rods"]) == []


def test_the_last_step_waits_until_the_lag_has_left_a_tenth_of_the_margin() -> None:
    """120 V to 200 V with 0.5 s of lag: the rest decays as exp(-t/lag) to 0.1 x 5 % of 200 V."""
    ramp = accepted(with_limit(NORTH, "endcaps", lag_s=0.5), CALCIUM, NORTH_WORK, endcaps=200.0)
    assert 80 * exp(-ramp.steps[-1].wait_s / 0.5) <= 0.1 * 0.05 * 200 * (1 + 1e-9)


def test_at_0_v_the_lag_is_waited_out_too() -> None:
    ramp = accepted(with_limit(NORTH, "rods", lag_s=0.5), CALCIUM, NORTH_WORK, rods=0.0)
    assert exp(-ramp.steps[-1].wait_s / 0.5) <= 1e-6 * 20


def test_a_move_shorter_than_the_residue_waits_for_nothing_but_the_slew() -> None:
    ramp = accepted(with_limit(NORTH, "endcaps", lag_s=5.0), CALCIUM, NORTH_WORK, endcaps=120.5)
    assert only(list(ramp.steps)).wait_s == pytest.approx(0.5 / 50)


def test_a_frequency_move_tells_the_frequency_only_for_the_level_follows() -> None:
    ramp = accepted(NORTH, CALCIUM, NORTH_WORK, **{FREQUENCY: 21.04e6})
    assert {step.setpoint for step in ramp.steps} == {FREQUENCY}
    assert ramp.target[AMPLITUDE] == NORTH_WORK[AMPLITUDE]


def test_with_a_flat_gain_the_frequency_stays_while_ions_are_held() -> None:
    reason = only(refused(SOUTH, BOTH, SOUTH_WORK, **{FREQUENCY: 15.1e6}))
    assert (reason.rule, reason.nearest, reason.bound) == (rules.FIXED_FREQUENCY, 15e6, 15e6)
    loading = Contents(presence="loading", incoming=("88Sr+",))
    assert only(refused(SOUTH, loading, SOUTH_WORK, **{FREQUENCY: 15.1e6})).rule == rules.FIXED_FREQUENCY
    accepted(SOUTH, NONE, SOUTH_WORK, **{FREQUENCY: 15.1e6})


def test_with_a_flat_gain_everything_else_may_move() -> None:
    accepted(SOUTH, BOTH, SOUTH_WORK, **{AMPLITUDE: 320.0, "bias": 0.5})


@pytest.mark.parametrize("forward", [True, False])
def test_where_the_straight_line_is_unstable_the_safe_corner_is_taken(forward: bool) -> None:
    """Between (a, q) = (0.0045, 0.1) and (0.156, 0.6) the line is unstable from q = 0.103 to 0.522 (computed with 30 digits);
    |a| < q^2/2 or so, hence first up in q, then up in a, and back the other way round."""
    model = replace(exact(wide(NORTH, amplitude=(0.0, 1e3), rods=(-99.0, 99.0))), level_max_v=None, margin=1e-3)
    per_q, per_a = 260 / 0.28845537080662687, 1 / 0.0022188874677  # volts: see `NORTH_WORK`'s published q and a
    ends = [
        {**NORTH_WORK, "endcaps": 0.01, AMPLITUDE: q * per_q, "rods": a * per_a}
        for a, q in [(0.0045, 0.1), (0.156, 0.6)]
    ]
    start, target = ends if forward else reversed(ends)
    ramp = accepted(model, CALCIUM, start, **target)
    assert order_of(ramp) == ([AMPLITUDE, "rods"] if forward else ["rods", AMPLITUDE])


def test_a_way_whose_ends_are_fine_and_whose_middle_is_not_is_refused() -> None:
    """The same amplitude in opposite phase holds the ion just as well; the way there leads through no drive at all."""
    model = wide(exact(NORTH), amplitude=(-420.0, 420.0))
    turned = {**NORTH_WORK, AMPLITUDE: -260.0}
    assert judge(model, CALCIUM, NORTH_WORK).accepted
    assert judge(model, CALCIUM, turned).accepted
    reason = only(refused(model, CALCIUM, NORTH_WORK, **turned))
    assert (reason.rule, reason.quantity, reason.found, reason.mode) == (rules.PATH, AMPLITUDE, -260.0, "y")
    assert reason.nearest is not None
    assert 0 < reason.nearest < 260
    accepted(model, CALCIUM, NORTH_WORK, **{AMPLITUDE: reason.nearest})
    refused(model, CALCIUM, NORTH_WORK, **{AMPLITUDE: reason.nearest * (1 - 1e-6)})


def test_across_the_resonance_the_flank_counts_where_the_centers_uncertainty_weighs_most() -> None:
    """A centre off by d (in x) changes the gain by 1 + x d/(1 + x^2): most at x = 1, less at the ends x = 3 of the way."""
    sharp = Resonator(gain=40.0, center_hz=15e6, center_uncertainty_hz=150.0, loaded_q=2000)
    model = replace(RING, resonator=sharp, frequency_fixed=False, margin=1e-6)
    x_hz, d = 15e6 / 4000, 0.04

    def most(x: float) -> float:
        return hypot(1, x) / hypot(1, x - d)

    edge = ring_amplitude_at(FIRST_EDGE_Q, STRONTIUM, 15e6)
    at = {x: {**SOUTH_WORK, AMPLITUDE: edge / (most(1) + most(3)) * 2, FREQUENCY: 15e6 + x * x_hz} for x in (-3, 1, 3)}
    assert judge(model, held("88Sr+"), at[-3]).accepted
    assert judge(model, held("88Sr+"), at[3]).accepted
    assert not judge(model, held("88Sr+"), at[1]).accepted
    reason = only(refused(model, held("88Sr+"), at[-3], **at[3]))
    assert (reason.rule, reason.quantity) == (rules.PATH, FREQUENCY)
    assert "not allowed from the first step on" in reason.message  # the band is that of the whole stretch


def test_on_the_way_the_electrode_stays_under_its_limit_whatever_the_resonator_does() -> None:
    """North bench without its level limit: 405.5 V pass at x = +-3 (1.02 x 1.0115) but not at x = 1 (1.02 x 1.0193)."""
    model = replace(wide(NORTH, frequency=(20.8e6, 21.2e6)), level_max_v=None)
    ends = [{**NORTH_WORK, AMPLITUDE: 405.5, FREQUENCY: 21e6 + s * 157.5e3} for s in (-1, 1)]
    for state in ends:
        assert judge(model, CALCIUM, state).accepted
    reason = only(refused(model, CALCIUM, ends[0], **ends[1]))
    assert (reason.rule, reason.quantity, reason.bound) == (rules.LIMIT, AMPLITUDE, 420.0)
    assert reason.found == pytest.approx(405.5 * 1.02 * 1.0193, rel=1e-3)


def test_where_no_order_of_whole_moves_is_safe_every_broken_way_is_told() -> None:
    """Half as high again in frequency at the same q: at the old amplitude the ring's bias is too much for the new frequency, at
    the old frequency the new amplitude is beyond the edge, (22.5/15)^2 x 0.42 = 0.945 > 0.908."""
    model = replace(RING, frequency_fixed=False, margin=0.01)
    start, target = (
        {FREQUENCY: f, AMPLITUDE: ring_amplitude_at(0.42, STRONTIUM, f), "bias": -12.0} for f in (15e6, 22.5e6)
    )
    assert judge(model, held("88Sr+"), start).accepted
    assert judge(model, held("88Sr+"), target).accepted
    reasons = refused(model, held("88Sr+"), start, **target)
    assert {(r.rule, r.quantity, r.mode) for r in reasons} == {
        (rules.PATH, FREQUENCY, "x"),
        (rules.PATH, AMPLITUDE, "z"),
    }
    for reason in reasons:
        assert reason.nearest is not None
        accepted(model, held("88Sr+"), start, **{reason.quantity: reason.nearest})


@pytest.mark.parametrize(("name", "value", "boundary"), [("endcaps", 210.0, 200.0), (AMPLITUDE, 300.0, 7.5)])
def test_a_range_boundary_is_not_crossed_with_ions_held(name: str, value: float, boundary: float) -> None:
    """A boundary of the drive is in synthesizer volts: 7.5 V are 285 V at the electrode."""
    model = with_limit(NORTH, name, boundaries=(boundary,))
    reason = only(refused(model, CALCIUM, NORTH_WORK, **{name: value}))
    assert (reason.rule, reason.quantity, reason.bound) == (rules.BOUNDARY, name, boundary)
    accepted(model, NONE, NORTH_WORK, **{name: value})
    accepted(model, CALCIUM, NORTH_WORK, **{name: (value + NORTH_WORK[name]) / 2 - 30})


def test_a_frequency_move_whose_level_crosses_a_boundary_is_refused_too() -> None:
    """260 V need 6.84 V on resonance and 7.5 V at x = 0.45, 23.6 kHz away."""
    model = with_limit(NORTH, AMPLITUDE, boundaries=(7.5,))
    accepted(model, CALCIUM, NORTH_WORK, **{FREQUENCY: 21.023e6})
    reason = only(refused(model, CALCIUM, NORTH_WORK, **{FREQUENCY: 21.024e6}))
    assert (reason.rule, reason.quantity, reason.bound) == (rules.BOUNDARY, FREQUENCY, 7.5)


def test_a_setpoint_without_boundaries_of_its_own_is_not_held_to_anothers() -> None:
    accepted(with_limit(NORTH, "endcaps", boundaries=(200.0,)), CALCIUM, NORTH_WORK, rods=5.0)


def test_the_target_is_judged_even_where_the_way_there_would_do() -> None:
    assert rules_of(judge_move(NORTH, CALCIUM, NORTH_WORK, {**NORTH_WORK, AMPLITUDE: 30.0})[0]) == [rules.STABILITY]


def test_the_search_for_an_order_gives_up_after_a_bounded_number_of_stretches(monkeypatch: pytest.MonkeyPatch) -> None:
    changes = {"rods": 2.0, "endcaps": 130.0}
    accepted(NORTH, CALCIUM, NORTH_WORK, **changes)
    monkeypatch.setattr(path, "MOST_LEGS", 1)
    assert judge_move(NORTH, CALCIUM, NORTH_WORK, {**NORTH_WORK, **changes})[1] is None


def test_lag_residues_of_the_stretches_before_are_judged_with_the_next() -> None:
    """A tenth of the margin, 5 % of 120 V and of 1 V, either way; what has no lag leaves none, and neither does what moves."""
    lagging = with_limit(with_limit(NORTH, "endcaps", lag_s=0.1), "rods", lag_s=0.1)
    states = banded_states(lagging, NORTH_WORK, "shim_x", None, ("endcaps", "rods", AMPLITUDE, "shim_x"))
    left = {
        (name, round(state.values[name] - NORTH_WORK[name], 9))
        for state in states
        for name in ("endcaps", "rods", "shim_x")
        if state.residue and state.values[name] != NORTH_WORK[name]
    }
    assert left == {("endcaps", -0.6), ("endcaps", 0.6), ("rods", -0.005), ("rods", 0.005)}


def test_a_range_boundary_of_the_frequency_itself_is_not_crossed_with_ions_held() -> None:
    model = with_limit(NORTH, FREQUENCY, boundaries=(21.005e6,))
    verdict, ramp = judge_move(model, CALCIUM, NORTH_WORK, {**NORTH_WORK, FREQUENCY: 21.01e6})
    assert ramp is None
    assert [(one.rule, one.bound) for one in verdict.reasons] == [(rules.BOUNDARY, 21.005e6)]
    accepted(model, NONE, NORTH_WORK, **{FREQUENCY: 21.01e6})
