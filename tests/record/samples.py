"""Drafts and a clock for the tests of the record."""

from __future__ import annotations

import sqlite3
from pathlib import Path
from typing import Any

from trapd.record import Draft, Record, SameCommit

NOON_US = 1_772_366_400_000_000  # 2026-03-01T12:00:00Z
BOOT = "0d3b8f0e-0000-4000-8000-000000000001"


class StandingClock:
    """Stands until it is set."""

    def __init__(self, time_us: int = NOON_US) -> None:
        self.time_us = time_us

    def now_us(self) -> int:
        return self.time_us

    def monotonic_ns(self) -> int:
        return self.time_us * 1000


def intent(value: Any = 260.0, **fields: Any) -> Draft:
    data = {"setpoint": "drive.amplitude", "value": value, "unit": "V", "instrument": "rf", "channel": None}
    data |= {"quantity": "level_v", "level": 6.8, "who": "ada", "why": "warm-up", "step": 0}
    return Draft(kind="intent", actor="ada", data=data | fields)


def outcome(intent: int | SameCommit, **fields: Any) -> Draft:
    data: dict[str, Any] = {
        "intent": intent,
        "state": "confirmed",
        "sent_us": NOON_US + 10,
        "acknowledged_us": NOON_US + 20,
    }
    data |= {"verified_us": NOON_US + 30, "readback": 260.25, "difference": 0.25, "error": None}
    return Draft(kind="outcome", actor="ada", data=data | fields)


def request(**fields: Any) -> Draft:
    data = {"kind": "set", "values": {"drive.amplitude": 350.0}, "point": None, "why": "see how far it goes"}
    return Draft(kind="request", actor="ada", data=data | fields)


def refusal(request: int | SameCommit) -> Draft:
    edge = {"rule": "window", "quantity": "drive.amplitude", "unit": "V", "found": 350.0, "bound": 331.5}
    edge |= {"species": "40Ca+", "mode": "x", "message": "beyond the edge of the window", "nearest": 315.0}
    limit = {"rule": "range", "quantity": "drive.amplitude", "unit": "V", "found": 350.0, "bound": 340.0}
    limit |= {"species": None, "mode": None, "message": "over the limit", "nearest": 340.0}
    data: dict[str, Any] = {
        "request": request,
        "accepted": False,
        "reasons": [edge, limit],
        "warnings": [],
        "species": [],
        "values": {},
    }
    return Draft(kind="verdict", actor="guard", data=data)


def note(text: str = "nothing happened", kind: str = "heartbeat") -> Draft:
    return Draft(kind=kind, actor="daemon", data={"note": text})


def write_day(record: Record) -> None:
    """Six entries: a request refused, two steps of which the second has no outcome, a heartbeat."""
    record.append(request(), refusal(SameCommit(0))).result()
    first = record.append(intent(), note()).result()[0]
    record.append(outcome(first.seq), intent(265.0, step=1)).result()


def plain(path: Path) -> sqlite3.Connection:
    """Any other program: no pragmas, no authorizer, `recursive_triggers` off."""
    return sqlite3.connect(path, isolation_level=None)
