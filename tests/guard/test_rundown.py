"""The ramp down: first the drive, then each electrode, within slew, step and limits; the window has no say."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import groupby
from math import exp

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.guard.benches import (
    CALCIUM,
    NORTH,
    NORTH_WORK,
    SOUTH,
    SOUTH_WORK,
    TILTED,
    TILTED_WORK,
    only,
    rules_of,
    wide,
    with_limit,
)
from trapd.guard import rules
from trapd.guard.limits import limit_reasons, step_reasons
from trapd.guard.model import GuardModel
from trapd.guard.rundown import plan_rundown
from trapd.guard.verdict import judge, judge_move
from trapd.setpoint import AMPLITUDE, FREQUENCY, Ramp, Values

DARK = {**NORTH_WORK, AMPLITUDE: 0.0, "endcaps": 0.0, "rods": 0.0, "shim_x": 0.0}
TINY = 1e-9  # relative


@dataclass(frozen=True, kw_only=True)
class Stride:
    setpoint: str
    before: float
    after: float
    wait_s: float


def strides(ramp: Ramp) -> Iterator[Stride]:
    values = dict(ramp.start)
    for one in ramp.steps:
        yield Stride(setpoint=one.setpoint, before=values[one.setpoint], after=one.value, wait_s=one.wait_s)
        values[one.setpoint] = one.value
    assert values == ramp.target


def order(ramp: Ramp) -> list[str]:
    return [name for name, _ in groupby(step.setpoint for step in ramp.steps)]


def values_of(ramp: Ramp, setpoint: str) -> list[float]:
    return [step.value for step in ramp.steps if step.setpoint == setpoint]


def test_first_the_drive_then_one_electrode_after_another_down_to_nothing() -> None:
    ramp = plan_rundown(NORTH, {**NORTH_WORK, "shim_x": -3.0})
    assert order(ramp) == [AMPLITUDE, "endcaps", "rods", "shim_x"]
    assert ramp.start == {**NORTH_WORK, "shim_x": -3.0}
    assert ramp.target == DARK


def test_its_time_is_known_and_is_that_of_the_slew_limits() -> None:
    """260 V / 40 V/s + 120 V / 50 V/s + 1 V / 5 V/s + 3 V / 5 V/s = 9.7 s; the lag is over within the last step's time."""
    assert plan_rundown(NORTH, {**NORTH_WORK, "shim_x": -3.0}).duration_s == pytest.approx(9.7)


def test_the_steps_are_the_largest_the_file_allows() -> None:
    ramp = plan_rundown(NORTH, NORTH_WORK)
    assert values_of(ramp, AMPLITUDE) == pytest.approx([260.0 - 2 * n for n in range(1, 131)])
    assert values_of(ramp, "endcaps") == pytest.approx([120.0 - 5 * n for n in range(1, 25)])
    assert values_of(ramp, "rods") == [0.5, 0.0]


def test_the_window_does_not_veto_what_it_refuses_as_a_move() -> None:
    assert rules.STABILITY in rules_of(judge_move(NORTH, CALCIUM, NORTH_WORK, DARK)[0])
    assert plan_rundown(NORTH, NORTH_WORK).steps


@pytest.mark.parametrize("boundary", [0.5, 5.0])
def test_a_range_boundary_does_not_veto_it_either(boundary: float) -> None:
    model = with_limit(NORTH, AMPLITUDE, boundaries=(boundary,))
    assert plan_rundown(model, NORTH_WORK) == plan_rundown(NORTH, NORTH_WORK)


def test_where_nothing_stands_nothing_is_told() -> None:
    assert plan_rundown(NORTH, DARK) == Ramp(start=DARK, target=DARK, steps=())


@pytest.mark.parametrize(("model", "work", "name"), [(SOUTH, SOUTH_WORK, "bias"), (TILTED, TILTED_WORK, "top")])
def test_every_geometry_is_run_down(model: GuardModel, work: dict[str, float], name: str) -> None:
    ramp = plan_rundown(model, {**work, name: 5.0})
    assert order(ramp) == [AMPLITUDE, name]
    assert ramp.target == {**work, AMPLITUDE: 0.0, name: 0.0}


@pytest.mark.parametrize(
    ("limits", "resolution", "start", "end"),
    [
        ((5.0, 900.0), 0.0, 120.0, 5.0),
        ((5.0, 900.0), 0.0, 5.0, 5.0),
        ((5.3, 900.0), 1.0, 120.0, 6.0),  # 5 V would be rounded out of the limits
        ((4.5, 900.0), 1.0, 120.0, 5.0),
        ((-900.0, -5.3), 1.0, -120.0, -6.0),
        ((5.0, 900.0), 0.1, 950.0, 5.0),
        ((5.0, 900.0), 0.1, 0.0, 0.0),  # an output that is off; nothing is energised
        ((5.0, 900.0), 0.1, 2.0, 2.0),
        ((5.0, 900.0), 0.1, -3.0, 0.0),
        ((-900.0, -5.0), 0.1, -2.0, -2.0),
        ((-900.0, -5.0), 0.1, 3.0, 0.0),
        ((0.0, 900.0), 0.1, -3.0, 0.0),
    ],
)
def test_where_0_v_is_not_allowed_it_ends_at_the_nearest_value_that_is_but_raises_nothing(
    limits: tuple[float, float], resolution: float, start: float, end: float
) -> None:
    model = with_limit(wide(NORTH, endcaps=limits), "endcaps", resolution=resolution)
    ramp = plan_rundown(model, {**NORTH_WORK, "endcaps": start})
    assert ramp.target["endcaps"] == end
    assert values_of(ramp, "endcaps")[-1:] == ([] if start == end else [end])


def test_the_drive_goes_to_zero_even_from_under_its_least_amplitude() -> None:
    """That least amplitude is for ions that are held."""
    for start in (260.0, 30.0):
        ramp = plan_rundown(wide(NORTH, amplitude=(50.0, 420.0)), {**NORTH_WORK, AMPLITUDE: start})
        assert values_of(ramp, AMPLITUDE)[-1] == 0.0


def test_a_state_the_guard_refuses_is_run_down_all_the_same() -> None:
    lost = {**NORTH_WORK, FREQUENCY: 21.09e6, AMPLITUDE: 500.0, "endcaps": 950.0, "rods": -12.0}
    assert len(judge(NORTH, CALCIUM, lost).reasons) > 3
    assert plan_rundown(NORTH, lost).target == {**DARK, FREQUENCY: 21.09e6}


def test_an_electrode_that_lags_is_waited_for_before_the_next_one_moves() -> None:
    """First-order low-pass, exp(-t/lag): at 0 V a tenth of a millionth of the range is left at most."""
    lag_s = 2.0
    ramp = plan_rundown(with_limit(NORTH, "endcaps", lag_s=lag_s), NORTH_WORK)
    at_electrode = 120.0
    for stride in strides(ramp):
        if stride.setpoint == "endcaps":
            at_electrode = stride.after + (at_electrode - stride.after) * exp(-stride.wait_s / lag_s)
    assert 0 < at_electrode <= 0.1 * 1e-6 * 900.0


def test_an_instrument_coarser_than_the_largest_step_goes_by_one_of_its_own_at_a_time() -> None:
    coarse = replace(NORTH, level_resolution_v=0.1)  # 3.8 V at the electrode; steps are 2 V at most
    assert only(step_reasons(coarse, NORTH_WORK, [AMPLITUDE])).rule == rules.STEP  # a move would be refused
    ramp = plan_rundown(coarse, {**NORTH_WORK, AMPLITUDE: 38.0})
    assert values_of(ramp, AMPLITUDE) == pytest.approx([3.8 * n for n in range(9, -1, -1)])
    assert [s.wait_s for s in strides(ramp) if s.setpoint == AMPLITUDE] == pytest.approx([3.8 / 40] * 10)


def test_steps_hardly_finer_than_the_largest_allowed_are_no_reason_to_hesitate() -> None:
    """7.0000001 V less one step of 7 V leaves next to nothing; cut into that much it would take a billion steps."""
    model = with_limit(NORTH, "endcaps", step=7.0000001, resolution=7.0)
    ramp = plan_rundown(model, {**NORTH_WORK, "endcaps": 119.0})
    assert values_of(ramp, "endcaps") == [7.0 * n for n in range(16, -1, -1)]


@st.composite
def traps(draw: st.DrawFn) -> GuardModel:
    """The north bench with other limits, instruments and resolutions; 0 V need not be within the limits."""
    model = NORTH
    for name in ("endcaps", "rods"):
        low = draw(st.floats(-100, 80) | st.just(0.0))
        step = draw(st.floats(1.0, 60.0))
        model = with_limit(
            model,
            name,
            low=low,
            high=low + draw(st.floats(10.0, 200.0)),
            step=step,
            slew_per_s=draw(st.floats(0.1, 100.0)),
            resolution=draw(
                st.sampled_from([0.0, 0.001, 0.1, 0.25, 0.7, 1.0, 0.4 * step, 0.9999999 * step, step, 1.5 * step])
            ),
            lag_s=draw(st.sampled_from([0.0, 0.5])),
        )
    model = with_limit(model, AMPLITUDE, step=draw(st.floats(1.0, 20.0)), slew_per_s=draw(st.floats(1.0, 100.0)))
    return replace(model, level_resolution_v=draw(st.sampled_from([0.0, 0.001, 0.01, 0.03, 0.5])))


states = st.fixed_dictionaries(
    {
        FREQUENCY: st.floats(20.9e6, 21.1e6),
        AMPLITUDE: st.floats(0.0, 450.0, allow_subnormal=False),
        "endcaps": st.floats(-150.0, 300.0, allow_subnormal=False),
        "rods": st.floats(-150.0, 300.0, allow_subnormal=False),
        "shim_x": st.sampled_from([0.0, 4.0]),
    }
)


def quantum_of(model: GuardModel, present: Values, name: str) -> float:
    """Volts per step of the instrument: 1/sqrt(1 + x^2) of the resonance (any circuit textbook)."""
    if name != AMPLITUDE:
        return model.limits[name].resolution
    x = 2 * 200 * (present[FREQUENCY] - 21e6) / 21e6
    return float(model.level_resolution_v * 38 / (1 + x**2) ** 0.5)


def outside_by(model: GuardModel, name: str, value: float) -> float:
    limit = model.limits[name]
    return max(limit.low - value, value - limit.high, 0.0)


@settings(deadline=None)
@given(model=traps(), present=states)
def test_no_step_is_larger_or_faster_than_the_file_allows(model: GuardModel, present: Values) -> None:
    for stride in strides(plan_rundown(model, present)):
        limit, quantum = model.limits[stride.setpoint], quantum_of(model, present, stride.setpoint)
        size = abs(stride.after - stride.before)
        assert size <= max(limit.step, quantum) * (1 + TINY), stride
        assert size <= limit.slew_per_s * stride.wait_s * (1 + TINY), stride


@settings(deadline=None)
@given(model=traps(), present=states)
def test_every_value_is_nearer_to_zero_and_no_further_outside_the_limits(model: GuardModel, present: Values) -> None:
    for stride in strides(plan_rundown(model, present)):
        name, before, after = stride.setpoint, stride.before, stride.after
        assert abs(after) < abs(before), stride
        assert before * after >= 0, stride
        if name != AMPLITUDE:
            assert outside_by(model, name, after) <= outside_by(model, name, before) + TINY, stride


@settings(deadline=None)
@given(model=traps(), present=states)
def test_it_ends_at_zero_or_as_near_as_the_limits_let_it(model: GuardModel, present: Values) -> None:
    target = plan_rundown(model, present).target
    assert (target[AMPLITUDE], target[FREQUENCY], target["shim_x"]) == (0.0, present[FREQUENCY], 0.0)
    for name in ("endcaps", "rods"):
        limit, quantum = model.limits[name], model.limits[name].resolution
        if limit.low <= 0 <= limit.high:
            assert target[name] == 0
        elif limit.low <= present[name] <= limit.high:
            assert outside_by(model, name, target[name]) <= TINY
            assert abs(target[name]) <= min(abs(limit.low), abs(limit.high)) + quantum
        else:
            assert abs(target[name]) <= abs(present[name])


@settings(deadline=None)
@given(model=traps(), present=states)
def test_the_drive_is_first_each_setpoint_once_and_the_frequency_never(model: GuardModel, present: Values) -> None:
    names = order(plan_rundown(model, present))
    assert names == [name for name in (AMPLITUDE, "endcaps", "rods", "shim_x") if name in names]
    assert (AMPLITUDE in names) == (present[AMPLITUDE] > 0)


@settings(deadline=None)
@given(model=traps(), present=states)
def test_every_value_is_one_the_instrument_can_take(model: GuardModel, present: Values) -> None:
    for stride in strides(plan_rundown(model, present)):
        if quantum := quantum_of(model, present, stride.setpoint):
            steps = stride.after / quantum
            assert abs(steps - round(steps)) < 1e-6, stride


def test_from_within_the_limits_no_state_on_the_way_breaks_one() -> None:
    values = dict(NORTH_WORK)
    for step in plan_rundown(NORTH, NORTH_WORK).steps:
        values[step.setpoint] = step.value
        assert not limit_reasons(NORTH, values)
