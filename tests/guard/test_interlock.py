"""An interlock: readings become a warning that ends by itself, or a trip that a person clears."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from math import inf, nan

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from trapd.errors import Conflict
from trapd.guard.interlock import InterlockLimits, InterlockState, clear, step

VACUUM = InterlockLimits(
    name="vacuum", unit="Pa", warn_above=2e-8, trip_above=1e-4, for_s=2.0, deadband=0.1, action="hold"
)
AT_ONCE = replace(VACUUM, for_s=0.0)
FLOW = InterlockLimits(name="flow", unit="m^3/s", warn_below=8.0, trip_below=4.0, deadband=0.25, action="ramp down")

Reading = tuple[float, float | None]  # seconds, value


def after(limits: InterlockLimits, *readings: Reading, start: InterlockState | None = None) -> InterlockState:
    state = start or InterlockState()
    for now_s, reading in readings:
        state = step(limits, state, reading, now_s)
    return state


def test_on_a_level_is_not_beyond_it_and_a_hair_more_is() -> None:
    assert not after(AT_ONCE, (0.0, 2e-8)).warned
    assert after(AT_ONCE, (0.0, 2.0000001e-8)).warned
    assert not after(AT_ONCE, (0.0, 1e-4)).tripped
    assert after(AT_ONCE, (0.0, 1.0000001e-4)).tripped
    assert not after(FLOW, (0.0, 8.0)).warned
    assert after(FLOW, (0.0, 7.999999)).warned
    assert not after(FLOW, (0.0, 4.0)).tripped
    assert after(FLOW, (0.0, 3.999999)).tripped


def test_a_warning_is_no_trip_and_what_has_no_level_never_counts() -> None:
    assert after(AT_ONCE, (0.0, 1e-6)) == InterlockState(
        warned=True, value=1e-6, read_s=0.0, warn_beyond_since_s=0.0, trip_beyond_since_s=None
    )
    silent = replace(AT_ONCE, warn_above=None, trip_above=None)
    assert not any((state := after(silent, (0.0, value))).warned or state.tripped for value in (-1e99, 0.0, 1e99))


def test_it_trips_when_the_delay_is_over_and_not_a_moment_earlier() -> None:
    beyond = after(VACUUM, (10.0, 1e-3), (11.0, 1e-3), (11.9375, 1e-3))
    assert (beyond.warned, beyond.tripped) == (False, False)
    assert after(VACUUM, (12.0, 1e-3), start=beyond).tripped
    assert after(VACUUM, (12.0, 1e-3), start=beyond).warned


def test_a_single_good_reading_starts_the_delay_anew() -> None:
    readings = ((0.0, 1e-3), (1.875, 1e-3), (1.9375, 1e-4), (2.0, 1e-3), (3.9375, 1e-3))
    assert not after(VACUUM, *readings).tripped
    assert after(VACUUM, *readings, (4.0, 1e-3)).tripped
    assert after(VACUUM, *readings).warned  # 1e-4 Pa was good for the trip only


def test_a_reading_that_fails_neither_ends_the_delay_nor_completes_it() -> None:
    waiting = after(VACUUM, (0.0, 1e-3), (1.0, None), (2.5, None))
    assert not waiting.tripped
    assert after(VACUUM, (3.0, 1e-3), start=waiting).tripped
    assert not after(VACUUM, (3.0, 1e-9), start=waiting).tripped


def test_a_trip_outlasts_whatever_the_gauge_says_later() -> None:
    tripped = after(AT_ONCE, (0.0, 1e-3), (1.0, 1e-9), (2.0, None), (9.0, None), (10.0, 1e-9))
    assert tripped.tripped
    assert not tripped.warned


def test_a_warning_ends_where_the_deadband_does() -> None:
    warned = after(FLOW, (0.0, 7.0))
    assert after(FLOW, (1.0, 9.9375), start=warned).warned  # 8 and a quarter of it is 10
    assert not after(FLOW, (1.0, 10.0), start=warned).warned
    assert not after(FLOW, (0.0, 9.9375)).warned  # from the good side the deadband is nothing
    high = replace(FLOW, warn_below=None, warn_above=-8.0)  # a level may be negative: back is further down
    assert after(high, (0.0, -7.0), (1.0, -9.9375)).warned
    assert not after(high, (0.0, -7.0), (1.0, -10.0)).warned


def test_a_person_clears_a_trip_when_the_reading_has_come_back_by_the_deadband() -> None:
    still = after(FLOW, (0.0, 3.0), (1.0, 4.9375))  # 4 and a quarter of it is 5
    with pytest.raises(Conflict, match=r"interlock flow: 4\.9375 m\^3/s; expected at least 5 m\^3/s; nothing was clea"):
        clear(FLOW, still, 1.0)
    back = after(FLOW, (2.0, 5.0), start=still)
    assert clear(FLOW, back, 2.0) == replace(back, tripped=False)
    assert not after(FLOW, (3.0, 4.5), start=clear(FLOW, back, 2.0)).tripped
    assert after(FLOW, (3.0, 3.5), start=clear(FLOW, back, 2.0)).tripped


def test_between_two_levels_the_refusal_names_both() -> None:
    both = replace(FLOW, trip_above=20.0, deadband=0.0)
    with pytest.raises(Conflict, match=r"21 m\^3/s; expected at least 4 m\^3/s and at most 20 m\^3/s"):
        clear(both, after(both, (0.0, 21.0)), 0.0)


def test_from_beyond_one_level_to_beyond_the_other_is_no_interruption() -> None:
    both = replace(FLOW, trip_above=20.0, for_s=2.0)
    assert after(both, (0.0, 21.0), (2.0, 1.0)).tripped


def test_a_trip_is_not_cleared_while_nobody_knows_the_reading() -> None:
    tripped = after(AT_ONCE, (0.0, 1e-3), (1.0, 1e-9))
    assert not clear(AT_ONCE, tripped, 6.0).tripped
    for state in (tripped, after(AT_ONCE, (6.5, None), start=tripped)):
        with pytest.raises(Conflict, match="could not be read for more than 5 s"):
            clear(AT_ONCE, state, 6.5)
    with pytest.raises(Conflict, match="could not be read"):
        clear(AT_ONCE, InterlockState(tripped=True), 0.0)  # after a restart, before the first reading


@pytest.mark.parametrize("none", [None, nan, inf, -inf])
def test_a_reading_that_gets_too_old_makes_the_gauge_unreadable_until_the_next(none: float | None) -> None:
    old = after(VACUUM, (0.0, 1e-9), (5.0, none))
    assert not old.unreadable
    lost = after(VACUUM, (5.0625, none), start=old)
    assert lost == InterlockState(value=1e-9, read_s=0.0, unreadable=True)
    assert not after(VACUUM, (6.0, 1e-9), start=lost).unreadable


def test_a_gauge_that_never_answered_is_unreadable() -> None:
    assert after(VACUUM, (0.0, None)) == InterlockState(unreadable=True)


# Against a second statement of the same rules: over the whole history, not step by step. Whole numbers keep it exact.

ABOVE, BELOW = 10, -10
levels = st.builds(
    InterlockLimits,
    name=st.just("any"),
    unit=st.just("K"),
    action=st.just("off"),
    warn_above=st.sampled_from([None, 4.0]),
    warn_below=st.sampled_from([None, -4.0]),
    trip_above=st.sampled_from([None, float(ABOVE)]),
    trip_below=st.sampled_from([None, float(BELOW)]),
    for_s=st.sampled_from([0.0, 1.0, 3.0, 7.0]),
    deadband=st.sampled_from([0.0, 0.5]),
)
values = st.none() | st.integers(-14, 14).map(float)
histories = st.lists(st.tuples(st.integers(1, 4), values), max_size=25).map(
    lambda pairs: [(float(sum(pause for pause, _ in pairs[: n + 1])), value) for n, (_, value) in enumerate(pairs)]
)


def counts(history: Sequence[Reading], above: float | None, below: float | None, for_s: float) -> list[float]:
    """The times at which all readings of the last ``for_s`` or more, failed ones left out, were beyond."""
    good = [(t, v) for t, v in history if v is not None]
    beyond = [(above is not None and v > above) or (below is not None and v < below) for _, v in good]
    return [
        t
        for n, (t, _) in enumerate(good)
        if any(all(beyond[k : n + 1]) and t - good[k][0] >= for_s for k in range(n + 1))
    ]


@settings(deadline=None)
@given(limits=levels, history=histories)
@example(limits=VACUUM, history=[(0.0, 1e-3), (2.0, 1e-3)])
def test_it_has_tripped_if_any_run_of_readings_beyond_lasted_as_long_as_the_delay(
    limits: InterlockLimits, history: list[Reading]
) -> None:
    expected = bool(counts(history, limits.trip_above, limits.trip_below, limits.for_s))
    assert after(limits, *history).tripped == expected


@settings(deadline=None)
@given(limits=levels, history=histories)
def test_it_warns_from_a_run_that_lasted_until_a_reading_is_back_by_the_deadband(
    limits: InterlockLimits, history: list[Reading]
) -> None:
    began = max(counts(history, limits.warn_above, limits.warn_below, limits.for_s), default=None)
    low = -inf if limits.warn_below is None else -4.0 * (1 - limits.deadband)
    high = inf if limits.warn_above is None else 4.0 * (1 - limits.deadband)
    expected = began is not None and not any(t > began and v is not None and low <= v <= high for t, v in history)
    assert after(limits, *history).warned == expected


@settings(deadline=None)
@given(
    runs=st.lists(st.lists(st.sampled_from([1e-3, 1.0, None]), max_size=4), max_size=8),
    good=st.sampled_from([1e-9, 1e-4]),
)
def test_chattering_within_the_delay_never_trips(runs: list[list[float | None]], good: float) -> None:
    """At most four readings 0.5 s apart between good ones: 1.5 s of 2 s."""
    readings = [value for run in runs for value in (*run, good)]
    history = [(0.5 * n, value) for n, value in enumerate(readings)]
    assert not after(VACUUM, *history).tripped


@settings(deadline=None)
@given(
    limits=levels, history=histories, outage=st.lists(st.sampled_from([None, nan, inf, -inf]), min_size=1, max_size=9)
)
def test_while_unreadable_nothing_trips_and_no_warning_comes_or_goes(
    limits: InterlockLimits, history: list[Reading], outage: list[float | None]
) -> None:
    before = after(limits, *history)
    later = after(limits, *((200.0 + 10 * n, value) for n, value in enumerate(outage)), start=before)
    assert later == replace(before, unreadable=True)


@settings(deadline=None)
@given(limits=levels, before=histories, last=st.integers(-14, 14).map(float))
def test_a_trip_stays_until_it_is_cleared_and_is_cleared_only_from_inside(
    limits: InterlockLimits, before: list[Reading], last: float
) -> None:
    state = after(limits, *before, (200.0, last), start=InterlockState(tripped=True))
    assert state.tripped
    low = -inf if limits.trip_below is None else BELOW * (1 - limits.deadband)
    high = inf if limits.trip_above is None else ABOVE * (1 - limits.deadband)
    if low <= last <= high:
        assert not clear(limits, state, 200.0).tripped
    else:
        with pytest.raises(Conflict, match="nothing was cleared"):
            clear(limits, state, 200.0)
