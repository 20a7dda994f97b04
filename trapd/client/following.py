"""The daemon's stream of entries, across lost connections; and the end of a request in it."""

from __future__ import annotations

import json
import math
import time
from collections.abc import Callable, Iterator
from typing import Any

from trapd.client.connection import Connection, Silent, error_kinds
from trapd.errors import DaemonUnreachable, NotConfirmed, RecordUnwritable

Json = dict[str, Any]
JsonEntry = Json
Progress = Callable[[JsonEntry], None]

AGAIN_S = 0.5
"""Between two tries to connect again."""

DEAD_S = 45.0
"""A stream says something every 15 s; one that is silent for so long is dead."""

SILENT_S = 2.0
"""After so long without an entry a move that is waited for is asked about."""


def follow(
    connection: Connection, after: int | None, patience_s: float, silent_s: float | None = None
) -> Iterator[JsonEntry | None]:
    """Entries after ``after``, from now on when None, without end, gap or repetition.

    A lost connection is taken up where it was; `DaemonUnreachable` at once when there never was one, else when none was
    found again for ``patience_s``. With ``silent_s`` also a None each time that no entry came for so long.
    """
    last = after
    lost_at: float | None = -math.inf
    while True:
        try:
            headers = {} if last is None else {"Last-Event-ID": str(last)}
            with connection.lines("/v1/stream", headers, silent_s or DEAD_S) as lines:
                for number, entry in _events(lines):
                    last, lost_at = number, None
                    if entry is not None:
                        yield entry
        except DaemonUnreachable as error:
            if isinstance(error, Silent) and silent_s is not None:
                yield None
                continue
            lost_at = time.monotonic() if lost_at is None else lost_at
            if time.monotonic() - lost_at >= patience_s:
                raise
        time.sleep(AGAIN_S)


def wait_result(
    entries: Iterator[JsonEntry | None], request: int, progress: Progress | None, ask_status: Callable[[], Json]
) -> JsonEntry:
    """The entry of kind "result" that ends a request; ``progress`` is called with every entry on the way.

    ``entries`` holds None where the stream was silent. Raises the error it ended with, such as `Superseded` and
    `NotConfirmed`, with ``entry``, ``state``, ``from`` and ``to`` in its details; `NotConfirmed` also when the daemon died
    over it, and `RecordUnwritable` when its end cannot be written.
    """
    for entry in _or_lost(entries, request):
        if entry is None:
            _check_that_its_end_may_come(ask_status()["situation"], request)
            continue
        if progress is not None:
            progress(entry)
        data = entry["data"]
        if entry["kind"] == "result" and data["request"] == request:
            return _done(entry)
        if entry["kind"] == "start":
            raise NotConfirmed(
                f"the daemon was started anew before request {request} ended; its outputs hold, its entries are in the record",
                {"request": request, "state": "failed", "from": None, "to": None, "entry": None},
            )
    raise DaemonUnreachable(f"the stream ended before request {request} did; its result will be in the record")


def _or_lost(entries: Iterator[JsonEntry | None], request: int) -> Iterator[JsonEntry | None]:
    """The daemon went away over a move that had begun: something was sent, and nobody here knows what."""
    try:
        yield from entries
    except DaemonUnreachable as error:
        cause = error.message.removesuffix("; nothing was sent")
        raise DaemonUnreachable(
            f"the daemon stopped answering while request {request} was under way; every output holds where it was, and "
            f"`trapd record` tells how far it came ({cause})",
            {"request": request},
        ) from error


def _check_that_its_end_may_come(situation: Json, request: int) -> None:
    under_way = [one["request"] for one in (situation["moving"], situation["scanning"]) if one is not None]
    unwritten = situation["unwritten"]
    if unwritten and request not in under_way:
        raise RecordUnwritable(
            "it has ended and its end cannot be written; see `trapd status`",
            {"request": request, "unwritten": unwritten},
        )


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
