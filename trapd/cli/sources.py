"""Where the record is asked: a file, read-only and beside a running daemon too, or the daemon."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Protocol

from trapd.cli.daemon import connect
from trapd.cli.moments import microseconds

_MOST = 1000
"""Verdicts looked through for refusals."""

Row = dict[str, Any]
Rows = list[Row]


@dataclass(frozen=True, kw_only=True)
class Asked:
    """The newest ``limit`` that match; None does not narrow."""

    limit: int
    kind: str | None = None
    who: str | None = None
    since: datetime | None = None


class Source(Protocol):
    """Rows in order, the newest last, every one with its ``seq`` and ``time`` (RFC 3339, UTC)."""

    def entries(self, asked: Asked) -> Rows: ...

    def setpoints(self, asked: Asked) -> Rows: ...

    def refusals(self, asked: Asked) -> Rows: ...


@dataclass(frozen=True)
class FileSource:
    path: Path

    def entries(self, asked: Asked) -> Rows:
        from trapd.record import Reader

        with Reader.open(self.path) as reader:
            return _timed(reader.entries(actor=asked.who, kind=asked.kind, **_common(asked)))

    def setpoints(self, asked: Asked) -> Rows:
        from trapd.record import Reader

        with Reader.open(self.path) as reader:
            return _timed(reader.setpoints(who=asked.who, **_common(asked)))

    def refusals(self, asked: Asked) -> Rows:
        from trapd.record import Reader

        with Reader.open(self.path) as reader:
            return _timed(reader.refusals(who=asked.who, **_common(asked)))


@dataclass(frozen=True)
class DaemonSource:
    """``at`` names the daemon, None finds it."""

    at: str | None

    def entries(self, asked: Asked) -> Rows:
        with connect(self.at) as client:
            return list(client.entries(kind=asked.kind, actor=asked.who, limit=asked.limit, since=asked.since))

    def setpoints(self, asked: Asked) -> Rows:
        with connect(self.at) as client:
            return list(client.setpoints(who=asked.who, limit=asked.limit, since=asked.since))

    def refusals(self, asked: Asked) -> Rows:
        with connect(self.at) as client:
            verdicts = client.entries(kind="verdict", actor=asked.who, limit=_MOST, since=asked.since)
            refused = [one for one in verdicts if not one["data"]["accepted"]][-asked.limit :]
            requests = {one["seq"]: client.entry(one["data"]["request"]) for one in refused}
        rows = [
            _refusal(verdict, requests[verdict["seq"]], reason)
            for verdict in refused
            for reason in verdict["data"]["reasons"]
        ]
        return rows[-asked.limit :]


def _refusal(verdict: Row, request: Row, reason: Mapping[str, Any]) -> Row:
    """The row that the record's own view `refusals` gives."""
    head = {key: verdict[key] for key in ("seq", "time", "time_us")}
    return {**head, "request": request["seq"], "who": verdict["actor"], "why": request["data"]["why"], **reason}


def _common(asked: Asked) -> dict[str, Any]:
    since_us = None if asked.since is None else microseconds(asked.since)
    return {"limit": asked.limit, "since_us": since_us, "newest": True}


def _timed(records: Sequence[Any]) -> Rows:
    from trapd.record import rfc3339

    return [{"seq": one.seq, "time": rfc3339(one.time_us), **asdict(one)} for one in records]
