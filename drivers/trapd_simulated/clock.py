"""The one clock of a rack: every slew, settle, lag and warm-up runs on it, so one factor speeds up all of them."""

from __future__ import annotations

import math
import time
from bisect import bisect_right
from collections import deque
from operator import itemgetter
from typing import Generic, Protocol, TypeVar

KEPT = 4096  # changes a timeline remembers; older ones are forgotten so that a rack may run for months


class Clock(Protocol):
    """Rack time in seconds from the moment the rack was built."""

    def now_s(self) -> float: ...

    def host_s(self, rack_s: float) -> float:
        """How long ``rack_s`` seconds of the rack take on the machine, s."""
        ...


class RackClock:
    """The machine's monotonic clock times ``speed``."""

    def __init__(self, speed: float = 1.0) -> None:
        if not speed > 0.0:
            raise ValueError(f"speed = {speed}: expected a number above 0; no rack was built")
        self.speed = speed
        self._origin_ns = time.monotonic_ns()

    def now_s(self) -> float:
        return (time.monotonic_ns() - self._origin_ns) * 1e-9 * self.speed

    def host_s(self, rack_s: float) -> float:
        return rack_s / self.speed


class ManualClock:
    """Stands still until told: for tests that want exact times and no sleeping."""

    def __init__(self) -> None:
        self._now_s = 0.0

    def now_s(self) -> float:
        return self._now_s

    def advance(self, rack_s: float) -> None:
        self._now_s += rack_s

    def host_s(self, rack_s: float) -> float:
        return 0.0


T = TypeVar("T")


class Timeline(Generic[T]):
    """What held from when: the law of motion in force at any rack time, not only now."""

    def __init__(self, start_s: float, first: T) -> None:
        self._laws: deque[tuple[float, T]] = deque([(start_s, first)], maxlen=KEPT)
        self.changes = 0

    def change(self, time_s: float, law: T) -> None:
        """From ``time_s`` on, ``law`` holds. Times never run backwards."""
        self._laws.append((max(time_s, self._laws[-1][0]), law))
        self.changes += 1

    @property
    def latest(self) -> T:
        return self._laws[-1][1]

    def next_s(self, after_s: float) -> float:
        """The time of the first change behind ``after_s``; infinite when there is none yet."""
        if self._laws[-1][0] <= after_s:
            return math.inf
        return self._laws[bisect_right(self._laws, after_s, key=itemgetter(0))][0]

    def at(self, time_s: float) -> T:
        """The law in force at ``time_s``; `ValueError` for a time before all that is remembered."""
        index = bisect_right(self._laws, time_s, key=itemgetter(0))
        if index == 0:
            raise ValueError(f"t = {time_s} s is before {self._laws[0][0]} s, the earliest rack time remembered")
        return self._laws[index - 1][1]
