"""The states of ISA-18.2 and the ways between them [mem], one at a time."""

from __future__ import annotations

from itertools import permutations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.alarms.seen import HOUR_US, NOON_US, Watch, seen
from trapd.alarms.board import FLOOD_PER_10_MIN, Board, Condition, active, from_data, rate_per_10_min, step
from trapd.errors import BadRequest, Bug, Conflict, NotFound, TrapdError
from trapd.setpoint import Presence

ON, OFF, OUT = "interlock_tripped", "off_not_confirmed", "instrument_unreachable"
LOST = seen(OUT, "rf")
TRIPPED = seen(ON, "pressure")


@pytest.fixture
def watch() -> Watch:
    return Watch()


def test_an_alarm_is_raised_acknowledged_returns_and_is_gone(watch: Watch) -> None:
    assert watch.look(TRIPPED) == ["raised"]
    assert watch.state(ON, "pressure") == "unacknowledged"
    assert watch.look(TRIPPED, after_s=1) == []
    assert watch.acknowledge(ON, "pressure") == ["acknowledged"]
    assert watch.state(ON, "pressure") == "acknowledged"
    assert watch.look(TRIPPED, after_s=1) == []
    assert watch.look(after_s=1) == ["returned", "gone"]
    assert watch.events[-1].alarm.state == "normal"
    assert watch.board.alarms == {}


def test_one_that_returns_before_anybody_saw_it_stays_until_somebody_did(watch: Watch) -> None:
    watch.look(TRIPPED)
    assert watch.look(after_s=1) == ["returned"]
    assert watch.state(ON, "pressure") == "returned"
    assert watch.look(after_s=80_000) == []
    assert watch.acknowledge(ON, "pressure") == ["acknowledged", "gone"]
    assert [event.who for event in watch.events[-2:]] == ["ann", "ann"]
    assert watch.board.alarms == {}


def test_one_that_comes_again_wants_to_be_seen_again(watch: Watch) -> None:
    watch.look(TRIPPED)
    watch.look(after_s=1)
    assert watch.look(seen(ON, "pressure", "worse"), after_s=1) == ["raised"]
    alarm = watch.alarm(ON, "pressure")
    assert (alarm.times, alarm.message, alarm.state) == (2, "worse", "unacknowledged")
    assert (alarm.raised_us, alarm.since_us) == (NOON_US, NOON_US + 2_000_000)


def test_after_the_delay_it_is_raised_and_tells_since_when(watch: Watch) -> None:
    assert watch.look(LOST) == []
    assert watch.look(LOST, after_s=9.75) == []
    assert watch.look(LOST, after_s=0.25) == ["raised"]  # KINDS: 10 s
    alarm = watch.alarm(OUT, "rf")
    assert (alarm.since_us, alarm.raised_us) == (NOON_US, NOON_US + 10_000_000)


def test_after_the_other_delay_it_has_returned(watch: Watch) -> None:
    trips_soon = seen("interlock_warning", "pressure")
    watch.look(trips_soon)
    assert watch.look(trips_soon, after_s=2) == ["raised"]
    assert watch.look(after_s=1) == []
    assert watch.look(after_s=9.75) == []
    assert watch.look(after_s=0.25) == ["returned"]  # KINDS: 2 s there, 10 s away


@given(st.lists(st.tuples(st.booleans(), st.integers(1, 39)), max_size=40))
@settings(max_examples=60, deadline=None)
def test_chattering_inside_the_delays_raises_nothing(turns: list[tuple[bool, int]]) -> None:
    watch = Watch()
    for holds, quarters in turns:
        watch.look(*([LOST] if holds else []))
        watch.elapse(quarters / 4)
        watch.look()  # never there for 10 s (KINDS)
    assert watch.events == []
    assert rate_per_10_min(watch.board, watch.now_us) == 0


@given(st.lists(st.tuples(st.booleans(), st.integers(1, 39)), max_size=40))
@settings(max_examples=60, deadline=None)
def test_nor_does_it_return_while_it_chatters(turns: list[tuple[bool, int]]) -> None:
    watch = Watch()
    watch.look(LOST)
    watch.look(LOST, after_s=10)
    for holds, quarters in turns:
        watch.look(*([LOST] if holds else []))
        watch.elapse(quarters / 4)
        watch.look(LOST)  # never away for 10 s (KINDS)
    assert [event.what for event in watch.events] == ["raised"]


def test_a_step_of_the_wall_clock_neither_hastens_nor_holds_up_a_delay(watch: Watch) -> None:
    watch.look(LOST)
    watch.now_us += HOUR_US
    assert watch.look(LOST, after_s=9) == []
    watch.now_us -= 2 * HOUR_US
    assert watch.look(LOST, after_s=1) == ["raised"]


def test_what_is_seen_once_stays_as_it_came_until_acknowledged(watch: Watch) -> None:
    watch.look(seen("power_cycled", "rf"))
    assert watch.look(after_s=1) == ["returned"]
    assert watch.state("power_cycled", "rf") == "unacknowledged"
    assert watch.acknowledge("power_cycled", "rf") == ["acknowledged", "gone"]


def test_what_is_seen_once_and_again_is_counted_and_not_taken_for_acknowledged(watch: Watch) -> None:
    watch.look(seen("power_cycled", "rf"))
    watch.acknowledge("power_cycled", "rf")
    assert watch.look(after_s=1) == ["returned", "gone"]
    assert watch.look(seen("power_cycled", "rf"), after_s=1) == ["raised"]
    watch.look(after_s=1)
    assert watch.look(seen("power_cycled", "rf"), after_s=1) == ["raised"]
    assert watch.alarm("power_cycled", "rf").times == 2


def test_no_counts_vanish_while_the_trap_is_empty_or_loading(watch: Watch) -> None:
    empty: tuple[Presence, ...] = ("none", "loading")
    for presence in empty:
        watch.presence = presence
        for _ in range(10):
            assert watch.look(seen("counts_vanished"), after_s=10) == []
    watch.presence = "held"
    assert watch.look(seen("counts_vanished"), after_s=1) == []
    assert watch.look(seen("counts_vanished"), after_s=2) == ["raised"]  # KINDS: 2 s, counted from here


def test_an_alarm_is_hidden_while_it_means_nothing_and_not_forgotten(watch: Watch) -> None:
    watch.look(seen("counts_vanished"))
    watch.look(seen("counts_vanished"), after_s=2)
    watch.presence = "loading"
    assert watch.look(seen("counts_vanished"), after_s=1) == ["suppressed"]
    assert watch.state("counts_vanished") == "suppressed"
    assert active(watch.board) == ()
    assert watch.look(seen("counts_vanished"), after_s=5) == ["returned"]
    assert watch.state("counts_vanished") == "suppressed"
    watch.presence = "held"
    assert watch.look(after_s=1) == ["unsuppressed"]
    assert watch.state("counts_vanished") == "returned"
    assert watch.acknowledge("counts_vanished") == ["acknowledged", "gone"]


def test_a_shelf_ends_by_itself(watch: Watch) -> None:
    watch.look(TRIPPED)
    assert watch.shelve(ON, "pressure", hours=1) == ["shelved"]
    assert watch.state(ON, "pressure") == "shelved"
    assert active(watch.board) == ()
    assert watch.look(TRIPPED, after_s=3599) == []
    assert watch.look(TRIPPED, after_s=1) == ["unshelved"]
    assert watch.state(ON, "pressure") == "unacknowledged"
    alarm = watch.alarm(ON, "pressure")
    assert (alarm.shelved_by, alarm.shelved_until_us, alarm.shelved_why) == (None, None, None)


def test_a_shelf_says_who_put_it_there_why_and_until_when(watch: Watch) -> None:
    watch.look(TRIPPED)
    watch.shelve(ON, "pressure", hours=1, why="the pump is changed")
    alarm = watch.alarm(ON, "pressure")
    shelf = (alarm.shelved_by, alarm.shelved_until_us, alarm.shelved_why)
    assert shelf == ("ann", NOON_US + HOUR_US, "the pump is changed")
    assert (watch.events[-1].who, watch.events[-1].why) == ("ann", "the pump is changed")


def test_what_comes_and_goes_on_a_shelf_is_written_down_and_told_to_nobody(watch: Watch) -> None:
    watch.look(TRIPPED)
    watch.acknowledge(ON, "pressure")
    watch.shelve(ON, "pressure", hours=1)
    assert watch.look(after_s=1) == ["returned"]
    assert watch.look(TRIPPED, after_s=1) == ["raised"]
    assert watch.look(after_s=1) == ["returned"]
    assert rate_per_10_min(watch.board, watch.now_us) == 1
    assert active(watch.board) == ()
    assert watch.unshelve(ON, "pressure", who="ben") == ["unshelved"]
    assert watch.state(ON, "pressure") == "returned"
    assert watch.events[-1].who == "ben"


def test_one_that_was_over_on_its_shelf_is_gone_with_the_shelf(watch: Watch) -> None:
    watch.look(TRIPPED)
    watch.acknowledge(ON, "pressure")
    watch.shelve(ON, "pressure", hours=1)
    watch.look(after_s=1)
    assert watch.state(ON, "pressure") == "shelved"
    assert watch.look(after_s=3600) == ["unshelved", "gone"]


def test_a_stale_alarm_is_told_once(watch: Watch) -> None:
    watch.look(TRIPPED)
    assert watch.look(TRIPPED, after_s=86_400) == []  # ISA-18.2: longer than 24 h [mem]
    assert watch.look(TRIPPED, after_s=1) == ["stale"]
    assert watch.alarm(ON, "pressure").stale
    assert watch.look(TRIPPED, after_s=86_400) == []


def test_a_shelved_alarm_is_not_stale_before_it_is_shown_again(watch: Watch) -> None:
    watch.look(TRIPPED)
    watch.shelve(ON, "pressure", hours=30)
    assert watch.look(TRIPPED, after_s=25 * 3600) == []
    assert watch.look(TRIPPED, after_s=5 * 3600) == ["unshelved", "stale"]


def test_the_most_urgent_come_first_and_then_the_oldest(watch: Watch) -> None:
    sources = [("clock_stepped", ""), ("power_cycled", "rf"), (ON, "b"), (ON, "a")]
    for kind, source in sources:
        watch.look(*[seen(*one) for one in watch.board.alarms], seen(kind, source), after_s=1)
    watch.look(*[seen(*one) for one in watch.board.alarms], seen("tickle_on"), seen(OFF, "rf"), after_s=1)
    shown = [(alarm.kind, alarm.source) for alarm in active(watch.board)]
    assert shown == [(ON, "b"), (ON, "a"), (OFF, "rf"), ("power_cycled", "rf"), ("clock_stepped", "")]


def test_the_rate_counts_ten_minutes(watch: Watch) -> None:
    for number in range(FLOOD_PER_10_MIN + 1):
        watch.look(*[seen(ON, str(one)) for one in range(number + 1)], after_s=1)
    assert rate_per_10_min(watch.board, watch.now_us) == 11
    assert rate_per_10_min(watch.board, watch.now_us + 589_999_999) == 11
    assert rate_per_10_min(watch.board, watch.now_us + 590_000_000) == 10, "the first came 10 min ago"
    assert rate_per_10_min(watch.board, watch.now_us + 600_000_000) == 0


def test_an_alarm_counts_for_ten_minutes_whatever_comes_after_it(watch: Watch) -> None:
    for seconds in (0, 300, 299):
        watch.look(TRIPPED, after_s=seconds / 2)
        watch.look(after_s=seconds / 2)
    assert rate_per_10_min(watch.board, watch.now_us) == 3


def test_the_order_of_conditions_means_nothing() -> None:
    found = [seen(ON, "a"), seen(OFF, "rf"), seen("clock_stepped"), seen(ON, "a", "twice, in other words")]
    turns = [step(Board(), order, "held", 0.0, NOON_US) for order in permutations(found)]
    assert len(turns[0][1]) == 3
    assert all(turn == turns[0] for turn in turns)


@pytest.mark.parametrize(
    ("error", "call", "words"),
    [
        (NotFound, lambda watch: watch.acknowledge(ON, "gauge"), f"no alarm '{ON} gauge'; there are: {ON} pressure; "),
        (NotFound, lambda watch: watch.shelve("tickle_on", hours=1), "no alarm 'tickle_on'; there are: "),
        (NotFound, lambda watch: watch.unshelve(ON), f"no alarm '{ON}'; "),
        (BadRequest, lambda watch: watch.acknowledge(ON, "pressure", who=" "), "who must be given; "),
        (BadRequest, lambda watch: watch.shelve(ON, "pressure", hours=1, why=""), "why must be given; "),
        (BadRequest, lambda watch: watch.shelve(ON, "pressure", hours=0), "a shelf ends later than now, "),
        (Conflict, lambda watch: watch.unshelve(ON, "pressure"), f"{ON} pressure is unacknowledged, not shelved; "),
    ],
)
def test_what_cannot_be_changes_nothing_and_says_why(
    watch: Watch, error: type[TrapdError], call: object, words: str
) -> None:
    watch.look(TRIPPED)
    before = watch.board
    with pytest.raises(error) as caught:
        call(watch)  # type: ignore[operator]
    assert str(caught.value).startswith(words)
    assert str(caught.value).endswith("; nothing was changed")
    assert watch.board == before


def test_nobody_acknowledges_or_shelves_over_another(watch: Watch) -> None:
    watch.look(TRIPPED)
    watch.acknowledge(ON, "pressure")
    with pytest.raises(Conflict, match=r"^ann acknowledged interlock_tripped pressure before; nothing was changed$"):
        watch.acknowledge(ON, "pressure", who="ben")
    watch.shelve(ON, "pressure", hours=1)
    with pytest.raises(Conflict, match=r"^ann shelved interlock_tripped pressure \(works\); nothing was changed$"):
        watch.shelve(ON, "pressure", hours=9, who="ben")


def test_a_condition_of_no_kind_is_our_own_mistake() -> None:
    with pytest.raises(Bug, match="no kind of alarm 'door_open'"):
        Condition(kind="door_open", message="open")


def test_an_alarm_of_a_kind_that_is_no_more_can_still_be_acknowledged(watch: Watch) -> None:
    watch.look(TRIPPED)
    old = watch.recorded()
    old[0]["alarm"]["kind"] = "door_open"
    watch.board = from_data(old)
    assert watch.look() == ["returned"]
    assert watch.acknowledge("door_open", "pressure") == ["acknowledged", "gone"]
