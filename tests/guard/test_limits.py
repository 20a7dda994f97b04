"""Limits hold for every trap, empty or not: ranges, level, what the instruments can take."""

from __future__ import annotations

from dataclasses import replace
from math import hypot, sqrt

import pytest

from tests.guard.benches import NONE, NORTH, NORTH_WORK, SOUTH, SOUTH_WORK, only, rules_of, wide, with_limit
from trapd.guard import rules
from trapd.guard.limits import (
    amplitude_band,
    displacement,
    frequency_limits,
    highest_amplitude,
    level_of,
    limit_reasons,
    realised,
    resolution,
    show,
    step_reasons,
)
from trapd.guard.verdict import judge, judge_move
from trapd.setpoint import AMPLITUDE, FREQUENCY

LOADED_Q, CENTER_HZ = 200, 21e6


def detuning(frequency_hz: float) -> float:
    """x of a narrow resonance, 2 Q df/f0 (any circuit textbook: 1/sqrt(1 + x^2) of the peak)."""
    return 2 * LOADED_Q * (frequency_hz - CENTER_HZ) / CENTER_HZ


@pytest.mark.parametrize(
    ("setpoint", "value", "bound"),
    [
        (FREQUENCY, 20.89e6, 20.90e6),
        (FREQUENCY, 21.11e6, 21.10e6),
        (AMPLITUDE, -1.0, 0.0),
        ("endcaps", -1.0, 0.0),
        ("endcaps", 901.0, 900.0),
        ("rods", 10.001, 10.0),
        ("shim_x", -20.001, -20.0),
    ],
)
def test_a_value_outside_its_range_is_refused_with_the_end_of_the_range(
    setpoint: str, value: float, bound: float
) -> None:
    free = replace(NORTH, level_max_v=None)
    verdict = judge(free, NONE, {**NORTH_WORK, setpoint: value})
    reason = only(verdict.reasons)
    assert (reason.rule, reason.quantity, reason.bound) == (rules.LIMIT, setpoint, bound)
    assert reason.nearest == pytest.approx(bound)
    assert judge(free, NONE, {**NORTH_WORK, setpoint: bound}).accepted


def test_every_limit_that_fails_is_named() -> None:
    verdict = judge(NORTH, NONE, {**NORTH_WORK, "endcaps": 1000.0, "rods": -11.0, AMPLITUDE: 500.0})
    assert [(r.rule, r.quantity) for r in verdict.reasons] == [
        (rules.LIMIT, AMPLITUDE),
        (rules.LIMIT, "endcaps"),
        (rules.LIMIT, "rods"),
        (rules.LEVEL, AMPLITUDE),
    ]


def test_the_amplitude_is_judged_at_the_top_of_the_gains_uncertainty() -> None:
    """420 V / 1.02 = 411.76 V is the most that passes with 2 % of uncertainty."""
    over = {**NORTH_WORK, AMPLITUDE: 411.77}
    reason = only(limit_reasons(NORTH, over))
    assert reason.rule == rules.LIMIT
    assert reason.found == pytest.approx(411.77 * 1.02)
    assert reason.nearest == pytest.approx(420 / 1.02, abs=1e-9)
    assert f"{reason.nearest:.1f}" == "411.8"
    assert reason.nearest is not None
    assert not limit_reasons(NORTH, {**NORTH_WORK, AMPLITUDE: reason.nearest})


def test_off_resonance_the_centers_uncertainty_counts_too() -> None:
    """True over nominal gain is largest when the true centre is 2 kHz nearer: sqrt((1 + x^2)/(1 + (x - d)^2))."""
    x, d = detuning(21.02e6), detuning(CENTER_HZ + 2e3)
    _, high = amplitude_band(NORTH, {**NORTH_WORK, FREQUENCY: 21.02e6})
    assert high == pytest.approx(260 * 1.02 * hypot(1, x) / hypot(1, x - d))


def test_76_khz_from_the_center_260_v_needs_the_synthesizers_whole_12_v() -> None:
    """260 V / (38 V/V) sqrt(1 + x^2) = 12 V at x = 1.4408, which is 75.64 kHz away."""
    away_hz = CENTER_HZ / 400 * sqrt((12 * 38 / 260) ** 2 - 1)
    assert away_hz == pytest.approx(76e3, rel=0.01)
    for sign in (-1, 1):
        assert not limit_reasons(NORTH, {**NORTH_WORK, FREQUENCY: CENTER_HZ + sign * 0.9999 * away_hz})
        reason = only(limit_reasons(NORTH, {**NORTH_WORK, FREQUENCY: CENTER_HZ + sign * 1.0001 * away_hz}))
        assert (reason.rule, reason.bound) == (rules.LEVEL, 12.0)
        assert reason.found == pytest.approx(12.0, rel=1e-3)
    assert frequency_limits(NORTH, NORTH_WORK) == pytest.approx((CENTER_HZ - away_hz, CENTER_HZ + away_hz))


def test_the_nearest_amplitude_for_the_level_is_accepted_and_a_hair_more_is_not() -> None:
    values = {**NORTH_WORK, FREQUENCY: 21.09e6}
    nearest = only(limit_reasons(NORTH, values)).nearest
    assert nearest == pytest.approx(12 * 38 / hypot(1, detuning(21.09e6)))
    assert nearest is not None
    assert not limit_reasons(NORTH, {**values, AMPLITUDE: nearest})
    assert limit_reasons(NORTH, {**values, AMPLITUDE: nearest * (1 + 1e-9)})


def test_without_level_or_resonance_only_the_range_limits_the_frequency() -> None:
    assert frequency_limits(SOUTH, SOUTH_WORK) == (14e6, 16e6)
    assert frequency_limits(replace(NORTH, level_max_v=None), NORTH_WORK) == (20.9e6, 21.1e6)


def test_no_frequency_gives_an_amplitude_beyond_the_synthesizer() -> None:
    low, high = frequency_limits(NORTH, {**NORTH_WORK, AMPLITUDE: 38 * 12 + 1})
    assert low > high


def test_the_highest_amplitude_is_that_of_the_limit_or_of_the_level() -> None:
    assert highest_amplitude(NORTH, NORTH_WORK) == pytest.approx(420 / 1.02)
    assert highest_amplitude(replace(NORTH, level_max_v=10.0), NORTH_WORK) == pytest.approx(380)
    assert highest_amplitude(replace(NORTH, level_max_v=None), NORTH_WORK) == pytest.approx(420 / 1.02)


def test_a_state_is_rounded_to_what_the_instruments_take() -> None:
    model = replace(with_limit(NORTH, "endcaps", resolution=0.001), level_resolution_v=0.01)
    taken = realised(model, {**NORTH_WORK, "endcaps": 2.3004, AMPLITUDE: 260.1})
    assert taken["endcaps"] == 2.3  # a decimal stays a decimal
    assert taken[AMPLITUDE] == pytest.approx(6.84 * 38)  # 260.1 / 38 = 6.8447
    assert taken["rods"] == 1.0


def test_a_step_that_is_no_decimal_fraction_is_rounded_to_as_well() -> None:
    assert realised(with_limit(NORTH, "endcaps", resolution=0.7), {**NORTH_WORK, "endcaps": 2.3})["endcaps"] == (
        pytest.approx(2.1)
    )


def test_the_level_that_holds_an_amplitude_grows_off_resonance() -> None:
    assert level_of(NORTH, NORTH_WORK) == pytest.approx(260 / 38)
    assert level_of(NORTH, {**NORTH_WORK, FREQUENCY: 21.0525e6}) == pytest.approx(260 / 38 * sqrt(2))  # x = 1


def test_the_margin_displaces_by_a_part_of_the_value_and_by_one_step_at_least() -> None:
    model = replace(with_limit(NORTH, "rods", resolution=0.2), level_resolution_v=0.5)
    assert displacement(model, {**NORTH_WORK, "rods": -8.0}, "rods") == pytest.approx(0.4)
    assert displacement(model, {**NORTH_WORK, "rods": 0.0}, "rods") == 0.2
    assert displacement(model, NORTH_WORK, "shim_x") == 0.0
    assert displacement(model, {**NORTH_WORK, AMPLITUDE: 100.0}, AMPLITUDE) == resolution(model, NORTH_WORK, AMPLITUDE)
    assert resolution(model, NORTH_WORK, AMPLITUDE) == pytest.approx(19.0)


def test_the_nearest_value_is_one_the_instrument_can_take() -> None:
    model = with_limit(wide(NORTH, endcaps=(0.5, 899.5)), "endcaps", resolution=1.0)
    over, under = (only(limit_reasons(model, {**NORTH_WORK, "endcaps": value})) for value in (950.0, 0.0))
    assert (over.nearest, under.nearest) == (899.0, 1.0)


def test_between_the_two_commands_of_a_frequency_step_the_amplitude_sinks_by_the_ratio_of_the_gains() -> None:
    """Without uncertainty, from 21.05 to 21.10 MHz in 1 kHz steps the largest ratio of neighbouring gains counts."""
    model = replace(
        NORTH, resonator=replace(NORTH.resonator, gain_uncertainty=0.0, center_uncertainty_hz=0.0), level_max_v=None
    )
    low, high = amplitude_band(model, {**NORTH_WORK, FREQUENCY: 21.05e6}, (21.05e6, 21.10e6))
    ratios = [hypot(1, detuning(f)) / hypot(1, detuning(f + 1e3)) for f in range(21_050_000, 21_099_001, 1000)]
    assert 260 * min(ratios) * (1 - 2e-4) <= low <= 260 * min(ratios)
    assert high == 260


def test_the_rounding_of_the_level_widens_the_band() -> None:
    model = replace(
        NORTH,
        resonator=replace(NORTH.resonator, gain_uncertainty=0.0, center_uncertainty_hz=0.0),
        level_resolution_v=0.1,
    )
    assert amplitude_band(model, NORTH_WORK) == pytest.approx((260 - 0.05 * 38, 260 + 0.05 * 38))
    assert amplitude_band(model, NORTH_WORK, (21e6, 21.01e6))[1] == pytest.approx(260 + 0.05 * 38)


def test_an_instrument_coarser_than_the_largest_step_cannot_be_ramped() -> None:
    coarse = replace(NORTH, level_resolution_v=0.1)  # 3.8 V at the electrode; steps are 2 V at most
    reason = only(step_reasons(coarse, NORTH_WORK, [AMPLITUDE, "endcaps"]))
    assert (reason.rule, reason.quantity, reason.bound) == (rules.STEP, AMPLITUDE, 2.0)
    assert reason.found == pytest.approx(3.8)
    verdict, ramp = judge_move(coarse, NONE, NORTH_WORK, {**NORTH_WORK, AMPLITUDE: 266.0})
    assert (rules_of(verdict), ramp) == ([rules.STEP], None)


@pytest.mark.parametrize(
    ("value", "setpoint", "text"),
    [
        (21.05e6, FREQUENCY, "21.05 MHz"),
        (1100.0, FREQUENCY, "1.1 kHz"),
        (50.0, FREQUENCY, "50 Hz"),
        (260.0, AMPLITUDE, "260 V"),
    ],
)
def test_values_are_shown_in_the_units_people_use(value: float, setpoint: str, text: str) -> None:
    assert show(value, setpoint) == text
