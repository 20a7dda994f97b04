"""`Client`: one method for each thing that can be asked of a daemon."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any
from urllib.parse import quote

from trapd.address import find
from trapd.client.connection import Connection
from trapd.client.following import SILENT_S, Json, JsonEntry, Progress, follow, wait_result
from trapd.errors import BadRequest
from trapd.setpoint import Values

TOKEN = "TRAPD_TOKEN"
"""Environment variable: the token, needed over TCP only."""

Time = datetime | str
"""A `datetime` with its offset, or RFC 3339."""

RECONNECTING_S = 10.0
_LONGEST_WHY = 500


class Client:
    """Talks to one daemon. Not to be shared between threads. Answers are the JSON of the HTTP interface.

    Every method may raise `DaemonUnreachable` and what the daemon answers: `GuardRefused` with the verdict in
    ``details["verdict"]``, `NotPermitted`, `Conflict`, ...: see `trapd.errors`.
    """

    def __init__(self, at: str | Path | None = None, token: str | None = None) -> None:
        """``at``: a URL, a socket or a trap file; None: TRAPD_AT, else the only daemon that answers on this machine.

        ``token`` (None: TRAPD_TOKEN) goes to a URL only: over the socket the daemon knows who asks.
        """
        self.address = find(at)
        over_tcp = self.address.socket_path is None
        self._connection = Connection(self.address, (token or os.environ.get(TOKEN)) if over_tcp else None)

    def close(self) -> None:
        self._connection.close()

    def __enter__(self) -> Client:
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
        body = {"values": dict(values)} | _given({"from": from_, "ions": ions})
        return self._post("/v1/judge", body, within_s=120.0)

    def window(self, values: Values | None = None, ions: Mapping[str, int] | None = None) -> Json:
        """All stable and all allowed values of each setpoint, the others held."""
        return self._post("/v1/window", _given({"values": values, "ions": ions}), within_s=120.0)

    # What moves the trap. ``wait``: until it is done: the entry that says so; else the answer that it has begun.

    def set(self, values: Values, why: str, *, wait: bool = True, progress: Progress | None = None) -> Json:
        return self._move("/v1/set", {"values": dict(values), "why": why}, wait, progress)

    def go(self, point: str, why: str, *, wait: bool = True, progress: Progress | None = None) -> Json:
        return self._move("/v1/go", {"point": point, "why": why}, wait, progress)

    def back(self, why: str, *, wait: bool = True, progress: Progress | None = None) -> Json:
        """To the state before the last completed move."""
        return self._move("/v1/back", {"why": why}, wait, progress)

    def on(self, point: str | None = None, *, why: str, wait: bool = True, progress: Progress | None = None) -> Json:
        """Only from an empty trap. ``point``: the first of the trap file when None."""
        return self._move("/v1/on", _given({"point": point, "why": why}), wait, progress)

    def empty(
        self,
        point: str | None = None,
        *,
        why: str,
        stay_off: bool = False,
        wait: bool = True,
        progress: Progress | None = None,
    ) -> Json:
        """Let go of every ion, then to ``point``, or back to where it was, or not (``stay_off``)."""
        body = _given({"point": point, "why": why, "stay_off": stay_off})
        return self._move("/v1/empty", body, wait, progress)

    def ions(
        self, presence: str, ions: Mapping[str, int] | None = None, incoming: Sequence[str] = (), *, why: str
    ) -> Json:
        """Say what is in the trap: "held", "unknown", "none" or "loading"."""
        body = {"presence": presence, "ions": dict(ions or {}), "incoming": list(incoming), "why": why}
        return self._post("/v1/ions", body, within_s=None)

    def off(self, why: str = "") -> Json:
        """Everything off, now. See "off" in the answer: False when an instrument did not confirm."""
        return self._post("/v1/off", {"why": _printable(why)})

    def stop(self, why: str = "") -> Json:
        """Stop the move in progress where it is; the outputs hold."""
        return self._post("/v1/stop", {"why": _printable(why)})

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
        return self._get("/v1/state", at=_rfc3339(at) if isinstance(at, datetime) else at)

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

    # Tokens

    def tokens(self) -> list[Json]:
        found: list[Json] = self._get("/v1/tokens")["tokens"]
        return found

    def new_token(self, name: str, role: str) -> Json:
        """``role``: "read", "operate" or "administer". The answer's "token" is shown this once."""
        return self._post("/v1/tokens", {"name": name, "role": role})

    def revoke_token(self, name: str) -> Json:
        if not name:
            raise BadRequest("name the token to revoke; nothing was revoked")
        found: Json = self._connection.ask("DELETE", f"/v1/tokens/{quote(name, safe='')}")
        return found

    def _get(self, path: str, **asked: Any) -> Json:
        found: Json = self._connection.ask("GET", path, asked=asked)
        return found

    def _post(self, path: str, body: Json, *, within_s: float | None = 30.0) -> Json:
        found: Json = self._connection.ask("POST", path, body=body, within_s=within_s)
        return found

    def _move(self, path: str, body: Json, wait: bool, progress: Progress | None) -> Json:
        accepted = self._post(path, body, within_s=None)  # it waits its turn behind the move in progress
        return self.wait(accepted["entry"], progress) if wait else accepted


def _given(body: Json) -> Json:
    return {key: value for key, value in body.items() if value is not None}


def _printable(why: str) -> str:
    """`off` and `stop` are not refused for how their reason is written."""
    return "".join(c if c.isprintable() else " " for c in why)[:_LONGEST_WHY]


def _times(since: Time | None, until: Time | None) -> Json:
    return {"since": _rfc3339(since), "until": _rfc3339(until)}


def _rfc3339(time: Time | None) -> str | None:
    return time.isoformat() if isinstance(time, datetime) else time
