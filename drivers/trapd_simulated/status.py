"""Error queue and registers: IEEE 488.2 clause 11 and SCPI-1999 volume 2 clause 21.8."""

from __future__ import annotations

from collections import deque
from enum import IntFlag

from trapd_simulated.errors import TEXTS


class Event(IntFlag):
    """Standard event status register, 488.2 11.5.1."""

    OPERATION_COMPLETE = 1
    QUERY_ERROR = 4
    DEVICE_ERROR = 8
    EXECUTION_ERROR = 16
    COMMAND_ERROR = 32
    USER_REQUEST = 64
    POWER_ON = 128


def event_of(code: int) -> Event:
    """The event bit an error sets (SCPI-1999 21.8.2): its hundreds; positive codes are the device's own."""
    if -199 <= code <= -100:
        return Event.COMMAND_ERROR
    if -299 <= code <= -200:
        return Event.EXECUTION_ERROR
    if -499 <= code <= -400:
        return Event.QUERY_ERROR
    return Event.DEVICE_ERROR


class Status:
    """State of one instrument's reporting since it was switched on."""

    def __init__(self, depth: int = 16) -> None:
        if depth < 2:
            raise ValueError(f"error queue of depth {depth}: expected 2 or more")
        self._depth = depth
        self._errors: deque[tuple[int, str]] = deque()
        self._events = Event.POWER_ON
        self.event_enable = 0
        self.service_enable = 0

    def report(self, event: Event) -> None:
        self._events |= event

    def queue(self, code: int, detail: str = "") -> None:
        """Add an error and its event. A full queue loses the newest: its last entry becomes -350 (21.8.1)."""
        self.report(event_of(code))
        text = TEXTS.get(code, "Device-specific error")
        entry = (code, f"{text};{detail}".replace('"', "'")[:255] if detail else text)
        if len(self._errors) < self._depth:
            self._errors.append(entry)
        else:
            self._errors[-1] = (-350, TEXTS[-350])
            self.report(event_of(-350))

    def next_error(self) -> tuple[int, str]:
        return self._errors.popleft() if self._errors else (0, TEXTS[0])

    @property
    def error_count(self) -> int:
        return len(self._errors)

    def take_events(self) -> int:
        """*ESR?: reading clears (488.2 11.5.1.3)."""
        events, self._events = int(self._events), Event(0)
        return events

    def clear(self) -> None:
        """*CLS: events and errors, not the enables (488.2 10.3)."""
        self._events = Event(0)
        self._errors.clear()

    def byte(self, message_available: bool) -> int:
        """*STB?, 488.2 11.2: bit 2 (SCPI's) error queue, 4 message available, 5 event, 6 master summary of the others.

        Reading changes nothing.
        """
        event = bool(self._events & self.event_enable)
        byte = 4 * bool(self._errors) + 16 * message_available + 32 * event
        return byte + 64 * bool(byte & self.service_enable)
