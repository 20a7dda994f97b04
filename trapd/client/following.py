"""The daemon's stream of entries, across lost connections; and the end of a request in it."""

from __future__ import annotations

import json
import math
import time
from collections.abc import Callable, Iterator
from typing import Any

from trapd.client.connection import Connection, error_kinds
from trapd.errors import DaemonUnreachable, NotConfirmed

JsonEntry = dict[str, Any]
Progress = Callable[[JsonEntry], None]

AGAIN_S = 0.5
"""Between two tries to connect again."""


def follow(connection: Connection, after: int | None, patience_s: float) -> Iterator[JsonEntry]:
    """Entries after ``after``, from now on when None, without end, gap or repetition.

    A lost connection is taken up where it was; `DaemonUnreachable` at once when there never was one, else when none was
    found again for ``patience_s``.
    """
    last = after
    lost_at: float | None = -math.inf
    while True:
        try:
            headers = {} if last is None else {"Last-Event-ID": str(last)}
            with connection.lines("/v1/stream", {}, headers) as lines:
                lost_at = None
                for number, entry in _events(lines):
                    last = number
                    if entry is not None:
                        yield entry
        except DaemonUnreachable:
            lost_at = time.monotonic() if lost_at is None else lost_at
            if time.monotonic() - lost_at >= patience_s:
                raise
        time.sleep(AGAIN_S)


def wait_result(entries: Iterator[JsonEntry], request: int, progress: Progress | None) -> JsonEntry:
    """The entry of kind "result" that ends a request; ``progress`` is called with every entry on the way.

    Raises the error it ended with, such as `Superseded` and `NotConfirmed`; the latter also when the daemon died over it.
    """
    for entry in entries:
        if progress is not None:
            progress(entry)
        data = entry["data"]
        if entry["kind"] == "result" and data["request"] == request:
            return _done(entry)
        if entry["kind"] == "start":
            raise NotConfirmed(
                f"the daemon was started anew before request {request} ended; see its entries in the record",
                {"request": request},
            )
    raise DaemonUnreachable(f"the stream ended before request {request} did; its result will be in the record")


def _done(entry: JsonEntry) -> JsonEntry:
    data: JsonEntry = entry["data"]
    if data["state"] == "done":
        return entry
    kind = error_kinds().get(data["code"], NotConfirmed)
    raise kind(data["error"] or f"request {data['request']} {data['state']}", {"entry": entry["seq"], **data})


def _events(lines: Iterator[str]) -> Iterator[tuple[int, JsonEntry | None]]:
    """Server-sent events as our daemon writes them: the number of the last entry, and the entry where one is sent."""
    number: int | None = None
    for line in lines:
        if line.startswith("id:"):
            number = int(line.removeprefix("id:"))
        elif line.startswith("data:"):
            entry: JsonEntry = json.loads(line.removeprefix("data:"))
            number = None
            yield entry["seq"], entry
        elif not line and number is not None:
            yield number, None
