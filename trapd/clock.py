"""The one source of time, handed to whoever needs it so that tests can stand where they like."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Protocol


class Clock(Protocol):
    """Wall time for the record, monotonic time for intervals. The two are never mixed."""

    def now_us(self) -> int:
        """UTC, microseconds since the Unix epoch. May step."""
        ...

    def monotonic_ns(self) -> int:
        """Nanoseconds from an arbitrary origin. Never steps back."""
        ...


class SystemClock:
    """The machine's own clocks."""

    def now_us(self) -> int:
        return time.time_ns() // 1000

    def monotonic_ns(self) -> int:
        return time.monotonic_ns()


def boot_id() -> str:
    """Name of this run of the kernel, the origin of `monotonic_ns`; "unknown" where the system gives none."""
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return "unknown"
