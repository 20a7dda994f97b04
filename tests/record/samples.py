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


def scan_point(request: int | SameCommit, intent: int | SameCommit | None, **fields: Any) -> Draft:
    data: dict[str, Any] = {"request": request, "intent": intent, "pass_number": 1, "point": 0, "level_v": 0.0005}
    data |= {"frequency_hz": None if intent is None else 2_033_000.0, "dwell_s": 0.02, "counts": 412}
    return Draft(kind="scan_point", actor="scans", data=data | {"at_us": NOON_US + 10_000} | fields)


def plan(request: int | SameCommit, **fields: Any) -> Draft:
    data: dict[str, Any] = {"request": request, "scan": "y", "mode": "y", "species": "40Ca+"}
    return Draft(kind="plan", actor="ada", data=data | {"predicted_hz": 2_033_000.0, "min_contrast": 0.05} | fields)


def result(request: int | SameCommit, state: str = "failed", **fields: Any) -> Draft:
    data = {"request": request, "state": state, "error": "scan: the trap is empty", "code": "conflict"}
    return Draft(kind="result", actor="ada", data=data | fields)


def finding(request: int | SameCommit, state: str = "found", **fields: Any) -> Draft:
    data: dict[str, Any] = {"request": request, "scan": "y", "mode": "y", "species": "40Ca+", "state": state}
    data |= {"frequency_hz": 2_033_100.0, "uncertainty_hz": 30.0, "predicted_hz": 2_033_000.0, "min_contrast": 0.05}
    data |= {"message": "a resonance", "flags": ["wide", "near_edge"], "why": "daily"}
    return Draft(kind="finding", actor="scans", data=data | fields)


def secular_frequency(request: int | SameCommit, finding: int | SameCommit, **fields: Any) -> Draft:
    data: dict[str, Any] = {"request": request, "finding": finding, "scan": "y", "species": "40Ca+", "mode": "y"}
    data |= {"frequency_hz": 2_033_100.0, "uncertainty_hz": 30.0, "low_95_hz": 2_033_041.2, "high_95_hz": 2_033_158.8}
    data |= {"at_us": NOON_US + 20_000, "predicted_hz": 2_033_000.0, "predicted_uncertainty_hz": 40.0}
    data |= {"width_hz": 1900.0, "contrast": 0.4, "likelihood_ratio": 88.5, "method": "uniform", "fit_version": "1"}
    data |= {"calibration": None, "flags": "wide near_edge", "points": 24, "who": "ada", "why": "daily"}
    return Draft(kind="secular_frequency", actor="scans", data=data | fields)


def due_run(state: str = "run", due_us: int = NOON_US, **fields: Any) -> Draft:
    data: dict[str, Any] = {"schedule": "nightly", "scan": "y", "due_us": due_us, "state": state, "late_s": 0.5}
    return Draft(kind="due_run", actor="schedule", data=data | {"request": None, "reason": ""} | fields)


def write_scan(record: Record) -> int:
    """Seven entries: due, request, intent, a point without and one with the tickle, what was found. The request's seq."""
    due = due_run(request=None)
    asked = record.append(due, request(kind="scan"), intent(2_033_000.0, setpoint="tickle.frequency")).result()[1].seq
    record.append(scan_point(asked, None), scan_point(asked, asked + 1, point=1)).result()
    record.append(finding(asked), secular_frequency(asked, SameCommit(0))).result()
    return asked


def write_day(record: Record) -> None:
    """Six entries: a request refused, two steps of which the second has no outcome, a heartbeat."""
    record.append(request(), refusal(SameCommit(0))).result()
    first = record.append(intent(), note()).result()[0]
    record.append(outcome(first.seq), intent(265.0, step=1)).result()


def plain(path: Path) -> sqlite3.Connection:
    """Any other program: no pragmas, no authorizer, `recursive_triggers` off."""
    return sqlite3.connect(path, isolation_level=None)
