"""What is to be done at a later moment of the monotonic clock. One thread, no alarm of its own: it is asked."""

from __future__ import annotations

from collections.abc import Callable

from trapd.clock import Clock


class Timers:
    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._due: list[tuple[int, Callable[[], None]]] = []

    def add(self, seconds: float, act: Callable[[], None]) -> None:
        self._due.append((self._clock.monotonic_ns() + int(seconds * 1e9), act))

    def patience_s(self, most_s: float) -> float:
        """How long until the next one, ``most_s`` at most."""
        if not self._due:
            return most_s
        until_ns = min(when for when, _ in self._due) - self._clock.monotonic_ns()
        return min(most_s, max(0.0, until_ns / 1e9))

    def take_ready(self) -> list[Callable[[], None]]:
        """Those whose moment has come."""
        now_ns = self._clock.monotonic_ns()
        ready = [act for when, act in self._due if when <= now_ns]
        self._due = [(when, act) for when, act in self._due if when > now_ns]
        return ready
