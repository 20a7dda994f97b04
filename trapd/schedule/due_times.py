"""When a schedule is due, and what hinders it. Pure: nothing here knows a clock or asks a record.

A cron has five fields in UTC, as `trapd.config.cron` lets them through. That refuses what readers of cron disagree on:
weekday numbers (0 is Sunday in POSIX, Monday in APScheduler 3), and a day of the month together with a weekday (POSIX,
crontab: either is enough; APScheduler: both must hold). One difference is left: a weekday beside a month means that
weekday in that month, as in every cron in use, not the "either" of POSIX's text.
"""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from functools import lru_cache
from itertools import islice
from typing import Any

from apscheduler.triggers.cron import CronTrigger

from trapd.controller import Situation
from trapd.record import rfc3339

MOST_MISSED = 500
"""Due times of one schedule that get an entry each when they were missed together."""

_MOST_COUNTED = 10_000
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_MICROSECOND = timedelta(microseconds=1)
_DAY_US = 86_400_000_000


@lru_cache(maxsize=64)
def trigger_of(cron: str) -> Any:
    """Raises ValueError for what is no cron."""
    return CronTrigger.from_crontab(cron, timezone=UTC)


def due_between(cron: str, after_us: int, until_us: int | None = None) -> Iterator[int]:
    """Each due time beyond ``after_us``, up to and with ``until_us``, in order; all UTC microseconds since the epoch."""
    trigger, moment = trigger_of(cron), _EPOCH + timedelta(microseconds=after_us)
    while (due := trigger.get_next_fire_time(None, moment + _MICROSECOND)) is not None:
        due_us = (due - _EPOCH) // _MICROSECOND
        if until_us is not None and due_us > until_us:
            return
        yield due_us
        moment = due


def backlog(cron: str, after_us: int, until_us: int, most: int = MOST_MISSED) -> list[tuple[int, str]]:
    """What is due beyond ``after_us``, up to and with ``until_us``, in order: the newest ``most`` times, each with what
    is to be said of it, which is nothing except of the first, when there were more before it.

    A cron can only be followed forwards, some 16 us a step: the newest are looked for in ever longer stretches.
    """
    if next(due_between(cron, after_us, until_us), None) is None:
        return []
    stretch_us = _DAY_US
    while len(found := list(due_between(cron, max(after_us, until_us - stretch_us), until_us))) < most:
        if until_us - stretch_us <= after_us:
            break
        stretch_us *= 2
    newest = found[-most:]
    earlier = list(islice(due_between(cron, after_us, newest[0] - 1), _MOST_COUNTED + 1))
    return [(newest[0], _and_before(earlier)), *((due_us, "") for due_us in newest[1:])]


def _and_before(earlier: list[int]) -> str:
    if not earlier:
        return ""
    count = f"{len(earlier)}" if len(earlier) <= _MOST_COUNTED else f"more than {_MOST_COUNTED}"
    return f"; and {count} before it since {utc(earlier[0])}"


def hindrance(situation: Situation, now_us: int) -> str | None:
    """Why nothing of the schedule may run now."""
    pause, claim = situation.pause, situation.claim
    if pause is not None and now_us < pause.until_us:
        return _because(f"{pause.who} paused the schedule until {utc(pause.until_us)}", pause.why)
    if claim is not None and (claim.until_us is None or now_us < claim.until_us):
        until = "" if claim.until_us is None else f" until {utc(claim.until_us)}"
        return _because(f"{claim.who} keeps the trap{until}", claim.why)
    absent = {
        "unknown": "the trap's contents are unknown",
        "none": "the trap is empty",
        "loading": "the trap is being loaded",
    }
    return absent.get(situation.contents.presence)


def _because(words: str, why: str) -> str:
    return f"{words}: {why}" if why else words


def utc(time_us: int) -> str:
    """To the second: a due time has nothing finer."""
    return f"{rfc3339(time_us)[:19]}Z"
