"""What a cron means, against published readings of it, and how a long backlog is told."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime, timedelta

import pytest

from tests.schedule.stage import HOUR_US, MINUTE_US, NOON_US
from trapd.config.cron import wanted_instead
from trapd.schedule.due_times import MOST_MISSED, backlog, due_between

DAY_US = 24 * HOUR_US
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
LEAP_YEAR_DAY_US = (datetime(2028, 2, 27, tzinfo=UTC) - EPOCH) // timedelta(microseconds=1)


def minute_scan(fits: Callable[[datetime], bool], after_us: int, until_us: int) -> list[int]:
    """Every minute is asked: slow, and nothing to get wrong."""
    first = after_us // MINUTE_US + 1
    moments = (minute * MINUTE_US for minute in range(first, until_us // MINUTE_US + 1))
    return [at_us for at_us in moments if fits(EPOCH + timedelta(microseconds=at_us))]


# The meanings are those of crontab(5) and of the equivalents it prints: "0-23/2" is "0,2,4,...,22", "@monthly" is
# "0 0 1 * *", "@daily" is "0 0 * * *", "@hourly" is "0 * * * *"; its example "5 4 * * sun" is [mem].
READINGS: list[tuple[str, Callable[[datetime], bool]]] = [
    ("0 * * * *", lambda t: t.minute == 0),
    ("0 0 * * *", lambda t: (t.hour, t.minute) == (0, 0)),
    ("0 0 1 * *", lambda t: (t.day, t.hour, t.minute) == (1, 0, 0)),
    ("*/20 * * * *", lambda t: t.minute in (0, 20, 40)),
    ("23 0-23/2 * * *", lambda t: t.minute == 23 and t.hour in (0, 2, 4, 6, 8, 10, 12, 14, 16, 18, 20, 22)),
    ("5 4 * * sun", lambda t: t.isoweekday() == 7 and (t.hour, t.minute) == (4, 5)),
    ("15 3 * * mon-fri", lambda t: t.isoweekday() <= 5 and (t.hour, t.minute) == (3, 15)),
    ("0,30 8-10 * * *", lambda t: t.minute in (0, 30) and t.hour in (8, 9, 10)),
    ("0 0 29 2 *", lambda t: (t.month, t.day, t.hour, t.minute) == (2, 29, 0, 0)),
    ("0 6 * mar sat", lambda t: t.month == 3 and t.isoweekday() == 6 and (t.hour, t.minute) == (6, 0)),
]


@pytest.mark.parametrize(("cron", "fits"), READINGS, ids=[cron for cron, _ in READINGS])
def test_a_cron_means_what_its_manual_says(cron: str, fits: Callable[[datetime], bool]) -> None:
    assert wanted_instead(cron) is None, "the trap file may hold it"
    start_us, end_us = LEAP_YEAR_DAY_US, LEAP_YEAR_DAY_US + 9 * DAY_US
    expected = minute_scan(fits, start_us, end_us)
    assert expected
    assert list(due_between(cron, start_us, end_us)) == expected


@pytest.mark.parametrize("cron", ["30 4 1,15 * 5", "30 4 1,15 * fri", "0 0 1,15 * mon"])
def test_a_day_of_the_month_with_a_weekday_never_comes_here(cron: str) -> None:
    # crontab(5) of "30 4 1,15 * 5": on the 1st and 15th of each month, plus every Friday. APScheduler: both at once.
    assert wanted_instead(cron) is not None


def test_the_end_belongs_to_the_stretch_and_its_beginning_does_not() -> None:
    assert list(due_between("0 * * * *", NOON_US, NOON_US + HOUR_US)) == [NOON_US + HOUR_US]
    assert list(due_between("0 * * * *", NOON_US - 1, NOON_US + HOUR_US - 1)) == [NOON_US]


def test_the_hour_that_summer_time_repeats_is_one_hour_in_utc() -> None:
    # Central European Summer Time ended on 2026-10-25 at 01:00 UTC (Directive 2000/84/EC: the last Sunday of October).
    night_us = (datetime(2026, 10, 25, tzinfo=UTC) - EPOCH) // timedelta(microseconds=1)
    assert [(due - night_us) // MINUTE_US for due in due_between("30 2 * * *", night_us, night_us + DAY_US)] == [150]


def test_a_backlog_names_each_time_of_a_short_stretch() -> None:
    found = backlog("0 * * * *", NOON_US, NOON_US + 3 * HOUR_US)
    assert found == [(NOON_US + hour * HOUR_US, "") for hour in (1, 2, 3)]
    assert backlog("0 * * * *", NOON_US, NOON_US + HOUR_US - 1) == []


@pytest.mark.parametrize(
    ("cron", "every_us"), [("0 * * * *", HOUR_US), ("* * * * *", MINUTE_US), ("0 0 * * *", DAY_US)]
)
def test_a_long_backlog_is_told_by_its_newest_times_and_counts_the_others(cron: str, every_us: int) -> None:
    start_us = NOON_US - NOON_US % DAY_US
    earlier = 1234
    end_us = start_us + (MOST_MISSED + earlier) * every_us
    found = backlog(cron, start_us, end_us)
    assert [due_us for due_us, _ in found] == [end_us - back * every_us for back in reversed(range(MOST_MISSED))]
    first = EPOCH + timedelta(microseconds=start_us + every_us)
    assert found[0][1] == f"; and 1234 before it since {first:%Y-%m-%dT%H:%M:%SZ}"
    assert {more for _, more in found[1:]} == {""}


def test_a_backlog_of_decades_is_not_counted_to_its_end() -> None:
    found = backlog("* * * * *", 0, NOON_US)
    assert len(found) == MOST_MISSED
    assert found[0][1] == "; and more than 10000 before it since 1970-01-01T00:01:00Z"
