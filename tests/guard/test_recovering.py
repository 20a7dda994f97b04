"""The way back to safety from a state that already breaks a rule: allowed where nothing worsens and nothing else breaks."""

from __future__ import annotations

from dataclasses import replace
from itertools import groupby

import pytest

from tests.guard.benches import (
    CALCIUM,
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
from trapd.guard import rules
from trapd.guard.contents import watched
from trapd.guard.recovering import Severity, severity, worsens
from trapd.guard.verdict import judge, judge_move
from trapd.setpoint import AMPLITUDE, FREQUENCY, Verdict

WEAK = {**NORTH_WORK, AMPLITUDE: 30.0}  # q = 0.033: the endcaps push the ion out radially
WHO = watched(NORTH, CALCIUM).enforced


def test_the_way_back_into_the_region_is_taken_and_says_so() -> None:
    verdict, ramp = judge_move(NORTH, CALCIUM, WEAK, NORTH_WORK)
    assert (verdict.accepted, verdict.recovering, verdict.reasons) == (True, True, ())
    assert ramp is not None
    assert ramp.target == NORTH_WORK


def test_a_move_from_an_allowed_state_is_no_recovering() -> None:
    assert not judge_move(NORTH, CALCIUM, NORTH_WORK, {**NORTH_WORK, AMPLITUDE: 300.0})[0].recovering


def test_a_step_towards_safety_is_taken_though_it_does_not_arrive_and_the_rest_is_a_warning() -> None:
    verdict, ramp = judge_move(NORTH, CALCIUM, WEAK, {**WEAK, AMPLITUDE: 60.0})
    assert (verdict.accepted, verdict.recovering) == (True, True)
    assert [reason.rule for reason in verdict.warnings] == [rules.STABILITY]
    assert ramp is not None


def test_on_the_way_back_no_step_grows_faster_than_the_one_before() -> None:
    _, ramp = judge_move(NORTH, CALCIUM, WEAK, NORTH_WORK)
    assert ramp is not None
    growth = [
        judge(NORTH, CALCIUM, {**WEAK, AMPLITUDE: value}).species[0].growth_per_s or 0.0
        for value in (30.0, *(step.value for step in ramp.steps))
    ]
    assert growth == sorted(growth, reverse=True)
    assert growth[-1] == 0


@pytest.mark.parametrize("changes", [{AMPLITUDE: 20.0}, {"endcaps": 200.0}, {"rods": 4.0}])
def test_what_makes_it_worse_is_refused(changes: dict[str, float]) -> None:
    verdict, ramp = judge_move(NORTH, CALCIUM, WEAK, {**WEAK, **changes})
    assert not verdict.accepted
    assert not verdict.recovering
    assert ramp is None
    assert rules.STABILITY in rules_of(verdict)


def test_the_order_in_which_nothing_worsens_is_found() -> None:
    """More on the endcaps pushes harder outwards: first the amplitude, then they."""
    verdict, ramp = judge_move(NORTH, CALCIUM, WEAK, {**WEAK, AMPLITUDE: 400.0, "endcaps": 500.0})
    assert verdict.recovering
    assert ramp is not None
    assert [name for name, _ in groupby(step.setpoint for step in ramp.steps)] == [AMPLITUDE, "endcaps"]


def test_where_the_only_way_back_worsens_first_it_is_refused_with_what_it_would_break() -> None:
    """In opposite phase, and too weak: towards the work point the drive would sink to nothing."""
    model = wide(exact(NORTH), amplitude=(-420.0, 420.0))
    verdict, ramp = judge_move(model, CALCIUM, {**NORTH_WORK, AMPLITUDE: -80.0}, NORTH_WORK)
    assert (verdict.accepted, ramp) == (False, None)
    reason = only(verdict.reasons)
    assert (reason.rule, reason.quantity) == (rules.PATH, AMPLITUDE)
    assert "makes it worse: stability, 40Ca+" in reason.message
    assert "already breaks" in reason.message


@pytest.mark.parametrize(
    ("present", "better", "worse"),
    [
        ({"endcaps": 950.0}, {"endcaps": 940.0}, {"endcaps": 951.0}),
        ({AMPLITUDE: 418.0}, {AMPLITUDE: 415.0}, {AMPLITUDE: 419.0}),
        ({FREQUENCY: 21.09e6}, {FREQUENCY: 21.08e6}, {FREQUENCY: 21.091e6}),
    ],
)
def test_beyond_a_limit_the_way_leads_inwards_only(
    present: dict[str, float], better: dict[str, float], worse: dict[str, float]
) -> None:
    start = {**NORTH_WORK, **present}
    verdict, ramp = judge_move(NORTH, CALCIUM, start, {**start, **better})
    assert (verdict.accepted, verdict.recovering) == (True, True)
    assert ramp is not None
    assert not judge_move(NORTH, CALCIUM, start, {**start, **worse})[0].accepted


def test_while_a_limit_is_exceeded_no_other_rule_may_break() -> None:
    start = {**NORTH_WORK, "endcaps": 950.0}
    weak = judge_move(NORTH, CALCIUM, start, {**start, "endcaps": 900.0, AMPLITUDE: 150.0})
    assert not weak[0].accepted
    assert judge_move(NORTH, CALCIUM, start, {**start, "endcaps": 120.0, AMPLITUDE: 200.0})[0].accepted


def test_once_back_the_rest_of_the_way_is_judged_like_any_other() -> None:
    """After the limit is obeyed again the amplitude's own stretch crosses no drive at all."""
    model = wide(exact(NORTH), amplitude=(-420.0, 420.0))
    start = {**NORTH_WORK, "endcaps": 901.0}
    verdict, ramp = judge_move(model, CALCIUM, start, {**NORTH_WORK, AMPLITUDE: -260.0})
    assert ramp is None
    assert rules.PATH in rules_of(verdict)


def test_too_shallow_and_too_slow_are_broken_rules_too() -> None:
    model = replace(NORTH, min_depth_ev=5.0)
    flat = {**NORTH_WORK, "endcaps": 1.0}
    broken = severity(model, WHO, flat)
    assert {key[0] for key in broken} == {rules.MIN_DEPTH, rules.MIN_SECULAR_FREQUENCY}
    assert broken[rules.MIN_DEPTH, "40Ca+"] == pytest.approx(5.0 - 0.29)  # Q kappa U_ec
    assert broken[rules.MIN_SECULAR_FREQUENCY, "40Ca+"] == pytest.approx(100e3 - 825.261e3 / 120**0.5, rel=1e-3)
    assert recovers(judge_move(model, CALCIUM, flat, {**flat, "endcaps": 1.5})[0])
    assert not recovers(judge_move(model, CALCIUM, flat, {**flat, "endcaps": 0.9})[0])


def test_a_margin_that_fails_names_its_side() -> None:
    strontium = watched(SOUTH, held("88Sr+")).enforced
    ring = replace(exact(wide(SOUTH, amplitude=(0.0, 3000.0))), level_max_v=None)
    near = {**SOUTH_WORK, AMPLITUDE: ring_amplitude_at(0.9, strontium[0], 15e6)}
    assert set(severity(ring, strontium, near)) == {
        (rules.MARGIN, "88Sr+", AMPLITUDE, "up"),
        (rules.MARGIN, "88Sr+", FREQUENCY, "down"),
    }


def test_an_allowed_state_has_no_broken_rule() -> None:
    assert severity(NORTH, WHO, NORTH_WORK) == {}


def test_worse_is_what_is_new_or_more() -> None:
    before: Severity = {("limit", "rods"): 1.0}
    assert worsens(before, before) is None
    assert worsens(before, {}) is None
    assert worsens(before, {("limit", "rods"): 1.1}) == ("limit", "rods")
    assert worsens(before, {("limit", "endcaps"): 0.1}) == ("limit", "endcaps")


def test_a_range_boundary_is_not_crossed_on_the_way_back_either() -> None:
    """An output that drops out for milliseconds worsens everything."""
    model = with_limit(NORTH, AMPLITUDE, boundaries=(2.0,))
    verdict, ramp = judge_move(model, CALCIUM, WEAK, NORTH_WORK)
    assert (verdict.accepted, ramp) == (False, None)


def recovers(verdict: Verdict) -> bool:
    return verdict.accepted and verdict.recovering


def test_a_senseless_target_is_refused_before_a_way_to_it_is_cut_into_steps() -> None:
    """2e11 steps would not fit into any memory."""
    outside = {**NORTH_WORK, AMPLITUDE: 415.0}
    verdict, ramp = judge_move(NORTH, CALCIUM, outside, {**outside, "endcaps": 1e12})
    assert (verdict.accepted, ramp) == (False, None)
