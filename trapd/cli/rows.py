"""Rows of the record for `trapd record`: the same ones from a file and from a daemon."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict
from datetime import datetime
from pathlib import Path
from typing import Any

from trapd.cli.answer import Data
from trapd.client import Client

Rows = list[dict[str, Any]]

MOMENTS: Mapping[str, str] = {"frequencies": "at_us", "due": "due_us"}
"""Which of its times a row is about, where that is not when it was written."""

_MOST = 1000
"""Verdicts looked through for refusals."""


def from_file(file: Path, view: str, *, since: datetime | None, limit: int, **only: str | None) -> Rows:
    """Rows in order, the newest last, every one with its ``seq`` and ``time`` (RFC 3339, UTC). ``only``: "kind" and "who"."""
    from trapd.record import Reader, rfc3339

    asked: dict[str, Any] = {"limit": limit, "newest": True, "since_us": since and round(since.timestamp() * 1e6)}
    if view == "entries":
        asked["actor"] = only.pop("who")
    asked |= {key: value for key, value in only.items() if value is not None}
    with Reader.open(file) as reader:
        views: Mapping[str, Callable[..., Sequence[Any]]] = {
            "entries": reader.entries,
            "setpoints": reader.setpoints,
            "refusals": reader.refusals,
            "scans": reader.findings,
            "frequencies": reader.secular_frequencies,
            "due": reader.due_runs,
        }
        found = views[view](**asked)
    moment = MOMENTS.get(view, "time_us")
    return [{"seq": one.seq, "time": rfc3339(getattr(one, moment)), **asdict(one)} for one in found]


def from_daemon(at: str | None, view: str, *, since: datetime | None, limit: int, **only: str | None) -> Rows:
    """The same rows."""
    kind, who = only["kind"], only["who"]
    with Client(at) as client:
        match view:
            case "entries":
                return client.entries(kind=kind, actor=who, limit=limit, since=since)
            case "setpoints":
                return client.setpoints(who=who, limit=limit, since=since)
            case "frequencies":
                return client.frequencies(limit=limit, since=since)
            case "due":
                due: Rows = client.due(limit=limit, since=since)["due"]
                return due
            case "scans":
                return [_finding(one) for one in client.entries(kind="finding", actor=who, limit=limit, since=since)]
        verdicts = client.entries(kind="verdict", actor=who, limit=_MOST, since=since)
        refused = [one for one in verdicts if not one["data"]["accepted"]][-limit:]
        return [row for one in refused for row in _refusals(one, client.entry(one["data"]["request"]))][-limit:]


def _finding(entry: Data) -> dict[str, Any]:
    """The row that the record's own view `scans` gives."""
    data = entry["data"]
    numbers = ("request", "scan", "mode", "species", "state", "frequency_hz", "uncertainty_hz", "predicted_hz")
    row = {key: entry[key] for key in ("seq", "time", "time_us")} | {key: data[key] for key in numbers}
    row |= {"min_contrast": data["min_contrast"], "message": data["message"], "flags": " ".join(data["flags"])}
    return row | {"who": entry["actor"], "why": data["why"]}


def _refusals(verdict: Data, request: Data) -> Rows:
    """The rows that the record's own view `refusals` gives."""
    head = {key: verdict[key] for key in ("seq", "time", "time_us")}
    head |= {"request": request["seq"], "who": verdict["actor"], "why": request["data"]["why"]}
    return [{**head, **reason} for reason in verdict["data"]["reasons"]]
