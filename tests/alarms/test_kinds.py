"""Every alarm says what happens, what to do and how urgent it is: ISA-18.2 wants all of it of each alarm [mem]."""

from __future__ import annotations

import pytest

from trapd.alarms.kinds import KINDS, AlarmKind, kind_of

ONE = pytest.mark.parametrize("kind", KINDS.values(), ids=lambda kind: kind.name)


def test_everything_that_needs_a_person_has_a_kind() -> None:
    assert set(KINDS) == {  # the list
        *("instrument_unreachable", "off_not_confirmed", "readback_differs", "output_changed", "power_cycled"),
        *("protection_tripped", "identity_changed", "counts_vanished", "frequency_off_prediction", "gauge_unreadable"),
        *(
            "interlock_warning",
            "interlock_tripped",
            "record_unwritable",
            "clock_stepped",
            "schedule_missed",
            "tickle_on",
        ),
    }
    assert all(name == kind.name for name, kind in KINDS.items())


@ONE
def test_a_kind_says_in_a_sentence_each_what_happens_and_what_to_do(kind: AlarmKind) -> None:
    for sentence in (kind.consequence, kind.action):
        assert sentence[0].isupper()
        assert sentence.endswith(".")
        assert sentence.count(".") == 1
        assert len(sentence) <= 80, "one line of a terminal"


@ONE
def test_what_is_seen_only_once_does_not_wait_for_a_second_look(kind: AlarmKind) -> None:
    if kind.latched:
        assert (kind.on_delay_s, kind.off_delay_s) == (0.0, 0.0)
        assert not kind.suppressed_in


def test_what_happens_only_once_is_latched() -> None:
    latched = {name for name, kind in KINDS.items() if kind.latched}
    assert latched == {  # the list
        "power_cycled",
        "protection_tripped",
        "clock_stepped",
        "schedule_missed",
        "identity_changed",
    }


def test_few_alarms_are_urgent() -> None:
    urgent = [name for name, kind in KINDS.items() if kind.priority == "high"]
    assert 0 < len(urgent) <= len(KINDS) / 4  # ISA-18.2 and EEMUA 191 want about 5 % of many [mem]; of 16 it is 4


def test_only_what_is_said_of_ions_is_suppressed_without_them() -> None:
    suppressed = {name: kind.suppressed_in for name, kind in KINDS.items() if kind.suppressed_in}
    assert suppressed == {name: {"none", "loading"} for name in ("counts_vanished", "frequency_off_prediction")}


def test_no_alarm_waits_longer_than_a_slow_signal_may() -> None:
    # ISA-18.2's starting points for delays go from 15 s (flow, pressure) to 60 s (level, temperature) [mem].
    assert all(0 <= delay_s <= 15 for kind in KINDS.values() for delay_s in (kind.on_delay_s, kind.off_delay_s))


def test_a_name_that_only_an_older_record_knows_is_no_trouble() -> None:
    old = kind_of("door_open")
    assert (old.on_delay_s, old.off_delay_s, old.suppressed_in, old.latched) == (0.0, 0.0, frozenset(), False)
