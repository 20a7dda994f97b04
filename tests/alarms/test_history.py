"""Whatever comes in whatever order: what is told is a possible history, whole, and enough to begin again from."""

from __future__ import annotations

import random

from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, precondition, rule

from tests.alarms.seen import NOON_US, Watch, seen
from trapd.alarms.board import Alarm, Event, active, from_data, rate_per_10_min, step
from trapd.alarms.kinds import KINDS
from trapd.setpoint import Presence

Key = tuple[str, str]
KEYS: list[Key] = [
    ("counts_vanished", ""),  # suppressed without ions
    ("instrument_unreachable", "dc"),  # delayed
    ("instrument_unreachable", "rf"),
    ("interlock_tripped", "pressure"),  # neither
    ("power_cycled", "rf"),  # latched
]
PRESENCES: list[Presence] = ["held", "unknown", "none", "loading"]


class Life:
    """One alarm told over again from its events alone, after the diagram of ISA-18.2 [mem]."""

    def __init__(self) -> None:
        self.there = self.holds = self.seen = self.shelved = self.suppressed = self.stale = False

    def hears(self, what: str) -> None:
        assert self.there or what == "raised", f"{what}, and there is no alarm"
        match what:
            case "raised":
                assert not self.holds, "raised twice"
                self.stale = self.stale and self.there
                self.there, self.holds, self.seen = True, True, False
            case "returned":
                assert self.holds, "returned twice"
                self.holds = False
            case "acknowledged":
                assert not self.seen, "acknowledged twice"
                self.seen = True
            case "shelved" | "unshelved":
                assert self.shelved == (what == "unshelved")
                self.shelved = not self.shelved
            case "suppressed" | "unsuppressed":
                assert self.suppressed == (what == "unsuppressed")
                self.suppressed = not self.suppressed
            case "gone":
                assert (self.holds, self.seen, self.shelved) == (False, True, False), "nobody may forget it yet"
                self.there = self.suppressed = False
            case _:
                assert what == "stale"
                assert not self.stale, "stale twice"
                self.stale = True

    def state(self, key: Key) -> str:
        """The letter of the diagram in words: A normal, B and E unacknowledged, C acknowledged, D returned, G shelved,
        H suppressed."""
        if self.shelved:
            return "shelved"
        if not self.there or (self.seen and not self.holds):
            return "normal"
        if self.suppressed:
            return "suppressed"
        if self.seen:
            return "acknowledged"
        return "unacknowledged" if self.holds or key[0] == "power_cycled" else "returned"


class Signal:
    """One condition as it was sampled, and a delay by its definition: a level counts when it was the same for so long."""

    def __init__(self, key: Key) -> None:
        self.kind = KINDS[key[0]]
        self.level = False
        self.samples: list[tuple[float, bool]] = []

    def sample(self, now_s: float, there: bool) -> None:
        self.samples.append((now_s, there))
        delay_s = self.kind.on_delay_s if there else self.kind.off_delay_s
        others = [at_s for at_s, other in self.samples if other != there]
        same = [at_s for at_s, _ in self.samples if not others or at_s > others[-1]]
        if now_s - same[0] >= delay_s:
            self.level = there


class History(RuleBasedStateMachine):
    def __init__(self) -> None:
        super().__init__()
        self.watch = Watch()
        self.signals = {key: Signal(key) for key in KEYS}
        self.lives, self.heard = {key: Life() for key in KEYS}, 0
        self.random = random.Random(0)

    @rule(
        there=st.sets(st.sampled_from(KEYS)),
        presence=st.sampled_from(["held", *PRESENCES]),
        after_s=st.sampled_from([0.25, 1.0, 2.0, 5.0, 7.5, 10.0, 400.0, 50_000.0]),
        wait_s=st.sampled_from([0.0, 0.0, 3600.0]),
    )
    def look(self, there: set[Key], presence: Presence, after_s: float, wait_s: float) -> None:
        watch, before = self.watch, self.watch.board
        watch.now_us += round(wait_s * 1e6)  # the wall clock is set forward
        watch.presence = presence
        conditions = [seen(*key, message=f"no. {len(watch.events)}") for key in KEYS if key in there]
        watch.look(*conditions, after_s=after_s)
        self.random.shuffle(conditions)
        assert step(before, conditions, presence, watch.now_s, watch.now_us)[0] == watch.board
        for key, signal in self.signals.items():
            signal.sample(watch.now_s, key in there and presence not in KINDS[key[0]].suppressed_in)
            assert (key in watch.board.alarms and watch.alarm(*key).holds) == signal.level
        assert all(one.shelved_until_us is None or one.shelved_until_us > watch.now_us for one in self.alarms)

    @precondition(lambda self: any(one.acknowledged_by is None for one in self.alarms))
    @rule(data=st.data())
    def acknowledge(self, data: st.DataObject) -> None:
        one = data.draw(st.sampled_from([one for one in self.alarms if one.acknowledged_by is None]))
        self.watch.acknowledge(one.kind, one.source)

    @precondition(lambda self: any(one.shelved_by is None for one in self.alarms))
    @rule(data=st.data(), hours=st.sampled_from([0.001, 1.0, 40.0]))
    def shelve(self, data: st.DataObject, hours: float) -> None:
        one = data.draw(st.sampled_from([one for one in self.alarms if one.shelved_by is None]))
        self.watch.shelve(one.kind, one.source, hours=hours)

    @precondition(lambda self: any(one.shelved_by is not None for one in self.alarms))
    @rule(data=st.data())
    def unshelve(self, data: st.DataObject) -> None:
        one = data.draw(st.sampled_from([one for one in self.alarms if one.shelved_by is not None]))
        self.watch.unshelve(one.kind, one.source)

    @rule()
    def restart(self) -> None:
        before, self.watch.board = self.watch.board, from_data(self.watch.recorded())
        assert (self.watch.board.alarms, self.watch.board.shown_us) == (before.alarms, before.shown_us)
        assert self.watch.board.pending == {}
        self.watch.now_s = 0.0  # another monotonic clock
        for signal in self.signals.values():
            signal.samples.clear()  # delays begin anew

    @property
    def alarms(self) -> list[Alarm]:
        return [self.watch.board.alarms[key] for key in sorted(self.watch.board.alarms)]

    @invariant()
    def what_is_told_is_a_possible_history_and_the_board_is_its_end(self) -> None:
        lives = self.lives
        for event in self.watch.events[self.heard :]:
            key = event.alarm.kind, event.alarm.source
            lives[key].hears(event.what)
            assert (event.alarm.state, event.alarm.stale) == (lives[key].state(key), lives[key].stale)
            old = event.at_us - event.alarm.raised_us > 86_400_000_000
            assert event.what != "stale" or (old and event.alarm.is_shown)
        self.heard = len(self.watch.events)
        assert {key: self.watch.state(*key) for key in KEYS} == {key: life.state(key) for key, life in lives.items()}
        shown = {(one.kind, one.source) for one in active(self.watch.board)}
        assert shown == {k for k in KEYS if lives[k].state(k) in ("unacknowledged", "acknowledged", "returned")}

    @invariant()
    def an_alarm_counts_how_often_it_came(self) -> None:
        for one in self.alarms:
            mine = [e for e in self.watch.events if (e.alarm.kind, e.alarm.source) == (one.kind, one.source)]
            ends = [number for number, event in enumerate(mine) if event.what == "gone"]
            came = [event for event in mine[ends[-1] + 1 if ends else 0 :] if event.what == "raised"]
            assert (one.times, one.raised_us) == (len(came), came[0].at_us)
            assert one.message == came[-1].alarm.message

    @invariant()
    def the_rate_is_that_of_what_was_told(self) -> None:
        def counts(event: Event) -> bool:
            return event.what == "raised" and event.alarm.shelved_by is None

        now_us = self.watch.now_us
        told = [event for event in self.watch.events if counts(event) and event.at_us > now_us - 600_000_000]
        assert rate_per_10_min(self.watch.board, now_us) == len(told)


TestHistory = History.TestCase
TestHistory.settings = settings(max_examples=60, stateful_step_count=30, deadline=None)


def test_after_a_restart_what_was_acknowledged_and_shelved_still_is() -> None:
    watch = Watch()
    conditions = [seen("interlock_tripped", "pressure"), seen("off_not_confirmed", "rf")]
    watch.look(*conditions)
    watch.acknowledge("interlock_tripped", "pressure")
    watch.shelve("off_not_confirmed", "rf", hours=2)
    watch.board = from_data(watch.recorded())
    assert watch.look(*conditions, after_s=7199) == []
    assert watch.state("interlock_tripped", "pressure") == "acknowledged"
    assert watch.state("off_not_confirmed", "rf") == "shelved"
    assert watch.look(*conditions, after_s=1) == ["unshelved"]


def test_a_shelf_that_ended_while_nobody_watched_ends_with_the_first_look() -> None:
    watch = Watch()
    watch.look(seen("interlock_tripped", "pressure"))
    watch.shelve("interlock_tripped", "pressure", hours=1)
    watch.board = from_data(watch.recorded())
    assert watch.look(seen("interlock_tripped", "pressure"), after_s=86_400) == ["unshelved"]


def test_an_alarm_that_returned_while_nobody_watched_returns_with_the_first_look() -> None:
    watch = Watch()
    watch.look(seen("interlock_tripped", "pressure"))
    watch.board = from_data(watch.recorded())
    assert watch.look() == ["returned"]
    assert watch.events[-1].at_us == NOON_US


def test_events_are_json_and_tell_the_state() -> None:
    watch = Watch()
    watch.look(seen("interlock_tripped", "pressure", "1e-5 mbar"))
    watch.shelve("interlock_tripped", "pressure", hours=1)
    told = watch.recorded()
    assert [(one["what"], one["alarm"]["state"]) for one in told] == [
        ("raised", "unacknowledged"),
        ("shelved", "shelved"),
    ]
    assert {"what", "who", "why", "at_us", "alarm"} == set(told[0])
