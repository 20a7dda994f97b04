"""What a daemon can be asked without changing anything."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from datetime import datetime
from pathlib import Path
from typing import Any, Self

from trapd.address import find
from trapd.client.connection import Connection
from trapd.client.following import SILENT_S, Json, JsonEntry, Progress, follow, wait_result
from trapd.setpoint import Values

TOKEN = "TRAPD_TOKEN"
"""Environment variable: the token, needed over TCP only."""

Time = datetime | str
"""A `datetime` with its offset, or RFC 3339."""

RECONNECTING_S = 10.0


class Questions:
    """A connection to one daemon, and everything that only asks."""

    def __init__(self, at: str | Path | None = None, token: str | None = None) -> None:
        """``at``: a URL, a socket or a trap file; None: TRAPD_AT, else the only daemon that answers on this machine.

        ``token`` (None: TRAPD_TOKEN) goes to a URL only: over the socket the daemon knows who asks.
        """
        self.address = find(at)
        over_tcp = self.address.socket_path is None
        self._connection = Connection(self.address, (token or os.environ.get(TOKEN)) if over_tcp else None)

    def close(self) -> None:
        self._connection.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    # What is

    def health(self) -> Json:
        return self._get("/v1/health")

    def trap(self) -> Json:
        """What the trap file says: setpoints with their limits, species, points, rules."""
        return self._get("/v1/trap")

    def status(self) -> Json:
        """The present situation, the verdict on it, the record's head."""
        return self._get("/v1/status")

    # What would be: nothing is sent

    def judge(self, values: Values, from_: Values | None = None, ions: Mapping[str, int] | None = None) -> Json:
        """The verdict on the present state with ``values`` in it; with ``from_`` on the way from there as well.

        ``ions``: as if these were held ({}: nobody); None: what is in the trap.
        """
        body = {"values": dict(values)} | given({"from": from_, "ions": ions})
        return self._post("/v1/judge", body, within_s=120.0)

    def window(self, values: Values | None = None, ions: Mapping[str, int] | None = None) -> Json:
        """All stable and all allowed values of each setpoint, the others held."""
        return self._post("/v1/window", given({"values": values, "ions": ions}), within_s=120.0)

    # The record

    def entries(
        self,
        *,
        after: int | None = None,
        limit: int = 100,
        kind: str | None = None,
        actor: str | None = None,
        since: Time | None = None,
        until: Time | None = None,
    ) -> list[JsonEntry]:
        """In order: the first ones after ``after``, or without it the last ones. At most 1000."""
        asked = {"after": after, "limit": limit, "kind": kind, "actor": actor}
        found: list[JsonEntry] = self._get("/v1/entries", **asked, **_times(since, until))["entries"]
        return found

    def entry(self, seq: int) -> JsonEntry:
        return self._get(f"/v1/entries/{seq:d}")

    def setpoints(
        self,
        *,
        after: int | None = None,
        limit: int = 100,
        setpoint: str | None = None,
        state: str | None = None,
        who: str | None = None,
        since: Time | None = None,
        until: Time | None = None,
    ) -> list[Json]:
        """What was sent and what came of it, in order as with `entries`."""
        asked = {"after": after, "limit": limit, "setpoint": setpoint, "state": state, "who": who}
        found: list[Json] = self._get("/v1/setpoints", **asked, **_times(since, until))["setpoints"]
        return found

    def state(self, at: int | Time | None = None) -> Json:
        """What had been commanded by an entry or by a time; None: by now."""
        return self._get("/v1/state", at=rfc3339(at) if isinstance(at, datetime) else at)

    def follow(self, after: int | None = None, *, patience_s: float = RECONNECTING_S) -> Iterator[JsonEntry]:
        """Entries as they come, without end, gap or repetition; from now on, or those after ``after`` first.

        Survives a restart of the daemon that takes less than ``patience_s``.
        """
        return (entry for entry in follow(self._connection, after, patience_s) if entry is not None)

    def wait(self, request: int, progress: Progress | None = None) -> JsonEntry:
        """The entry of kind "result" that ends a request, which is named by its entry.

        Raises what it ended with (`Superseded`, `NotConfirmed`, ...), and `RecordUnwritable` when its end cannot be written.
        """
        entries = follow(self._connection, request, RECONNECTING_S, SILENT_S)
        return wait_result(entries, request, progress, self.status)

    def verify(self, head: str | None = None) -> Json:
        """Prove the record. ``head``: a digest noted elsewhere that must be in it."""
        found: Json = self._connection.ask("GET", "/v1/verify", asked={"head": head}, within_s=None)
        return found

    # Scans

    def scans(self) -> list[Json]:
        """The scans of the trap file, each with its newest finding."""
        found: list[Json] = self._get("/v1/scans", limit=1)["scans"]
        return found

    def scans_made(
        self,
        *,
        after: int | None = None,
        limit: int = 100,
        scan: str | None = None,
        state: str | None = None,
        who: str | None = None,
        since: Time | None = None,
        until: Time | None = None,
    ) -> list[Json]:
        """Every scan that began, named by the entry of its request, and how it ended; in order as with `entries`."""
        asked = {"after": after, "limit": limit, "scan": scan, "state": state, "who": who}
        found: list[Json] = self._get("/v1/scans", **asked, **_times(since, until))["made"]
        return found

    def scan_at(self, request: int) -> Json:
        """One scan by the entry of its request: plan, points, newest estimate, finding (None before the end)."""
        return self._get(f"/v1/scans/{request:d}")

    def frequencies(
        self,
        *,
        after: int | None = None,
        limit: int = 100,
        scan: str | None = None,
        species: str | None = None,
        mode: str | None = None,
        since: Time | None = None,
        until: Time | None = None,
    ) -> list[Json]:
        """Secular frequencies that were measured, in order as with `entries`."""
        asked = {"after": after, "limit": limit, "scan": scan, "species": species, "mode": mode}
        found: list[Json] = self._get("/v1/frequencies", **asked, **_times(since, until))["frequencies"]
        return found

    def due(
        self,
        *,
        after: int | None = None,
        limit: int = 100,
        schedule: str | None = None,
        state: str | None = None,
        since: Time | None = None,
        until: Time | None = None,
    ) -> Json:
        """ "due": what the schedule did, in order as with `entries`; "upcoming": what comes next."""
        asked = {"after": after, "limit": limit, "schedule": schedule, "state": state}
        return self._get("/v1/due", **asked, **_times(since, until))

    def _get(self, path: str, **asked: Any) -> Json:
        found: Json = self._connection.ask("GET", path, asked=asked)
        return found

    def _post(self, path: str, body: Json, *, within_s: float | None = 30.0) -> Json:
        found: Json = self._connection.ask("POST", path, body=body, within_s=within_s)
        return found


def given(body: Json) -> Json:
    return {key: value for key, value in body.items() if value is not None}


def _times(since: Time | None, until: Time | None) -> Json:
    return {"since": rfc3339(since), "until": rfc3339(until)}


def rfc3339(time: Time | None) -> str | None:
    return time.isoformat() if isinstance(time, datetime) else time
