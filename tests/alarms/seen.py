"""A board with a clock set by hand, and everything it told."""

from __future__ import annotations

import json
from collections.abc import Iterable
from typing import Any

from trapd.alarms.board import Alarm, Board, Condition, Event, acknowledge, as_data, shelve, step, unshelve
from trapd.setpoint import Presence

NOON_US = 1_772_366_400_000_000  # 2026-03-01T12:00:00Z
HOUR_US = 3_600_000_000


def seen(kind: str, source: str = "", message: str = "as seen") -> Condition:
    return Condition(kind=kind, source=source, message=message)


class Watch:
    def __init__(self) -> None:
        self.board = Board()
        self.now_s, self.now_us = 1000.0, NOON_US
        self.presence: Presence = "held"
        self.events: list[Event] = []

    def look(self, *conditions: Condition, after_s: float = 0.0) -> list[str]:
        """So much time passes and then this holds; what is told about it."""
        self.elapse(after_s)
        return self._take(step(self.board, conditions, self.presence, self.now_s, self.now_us))

    def elapse(self, seconds: float) -> None:
        self.now_s += seconds
        self.now_us += round(seconds * 1e6)

    def acknowledge(self, kind: str, source: str = "", who: str = "ann") -> list[str]:
        return self._take(acknowledge(self.board, kind, source, who, self.now_us))

    def shelve(self, kind: str, source: str = "", *, hours: float, who: str = "ann", why: str = "works") -> list[str]:
        until_us = self.now_us + round(hours * HOUR_US)
        return self._take(shelve(self.board, kind, source, who, why, until_us, self.now_us))

    def unshelve(self, kind: str, source: str = "", who: str = "ann") -> list[str]:
        return self._take(unshelve(self.board, kind, source, who, self.now_us))

    def alarm(self, kind: str, source: str = "") -> Alarm:
        return self.board.alarms[kind, source]

    def state(self, kind: str, source: str = "") -> str:
        alarm = self.board.alarms.get((kind, source))
        return "normal" if alarm is None else alarm.state

    def recorded(self) -> list[dict[str, Any]]:
        """The events as they come back from the record."""
        return [json.loads(json.dumps(as_data(event), allow_nan=False)) for event in self.events]

    def _take(self, turn: tuple[Board, Iterable[Event]]) -> list[str]:
        self.board, events = turn
        told = list(events)
        self.events += told
        return [event.what for event in told]
