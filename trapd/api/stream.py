"""The record, followed live: server-sent events. The record is the event stream, so nothing can be lost.

Every viewer has a short queue that the record's writer fills and never waits for. What a slow viewer's queue could not
hold is read again from the record, by number.
"""

from __future__ import annotations

import asyncio
import json
from collections import deque
from collections.abc import AsyncIterator

from starlette.concurrency import run_in_threadpool

from trapd.api.answers import entry
from trapd.errors import BadRequest, QueueFull
from trapd.record import Entry, Reader, Record

MOST_VIEWERS = 64
QUEUE_ENTRIES = 256
HEARTBEAT_S = 15.0
_PAGE = 256


class Viewers:
    """Everybody who follows the record. Lives on the event loop; only `_heard` runs on the record's writer thread."""

    def __init__(self, record: Record, reader: Reader) -> None:
        self._record = record
        self._reader = reader
        self._viewers: set[_Viewer] = set()
        self._loop: asyncio.AbstractEventLoop | None = None
        self._ended = False
        record.add_listener(self._heard)

    def open(self, after: int | None) -> AsyncIterator[str]:
        """Events of the entries after ``after``; None: those that come from now on.

        Raises `QueueFull`, and `BadRequest` when the record is not that long.
        """
        if len(self._viewers) >= MOST_VIEWERS:
            raise QueueFull(f"{MOST_VIEWERS} viewers follow the record already")
        last = self._record.last_seq
        if after is not None and after > last:
            raise BadRequest(f"after = {after}: the record ends at entry {last}; is this another record?")
        self._loop = asyncio.get_running_loop()
        return self._events(_Viewer(self._reader, last if after is None else after))

    def end(self) -> None:
        """On the event loop: every stream ends after what it is sending."""
        self._ended = True
        for viewer in self._viewers:
            viewer.end()

    async def _events(self, viewer: _Viewer) -> AsyncIterator[str]:
        self._viewers.add(viewer)
        viewer.wanted = self._record.last_seq  # read once no entry can be missed any more
        try:
            yield f"id: {viewer.sent}\n\n"  # where it begins, so that it can be resumed before anything came
            while not (self._ended or viewer.ended):
                batch = await viewer.next()
                yield "".join(map(_event, batch)) if batch else ": nothing new\n\n"
        finally:
            self._viewers.discard(viewer)

    def _heard(self, entries: tuple[Entry, ...]) -> None:
        loop = self._loop
        if not self._viewers or loop is None or loop.is_closed():
            return
        loop.call_soon_threadsafe(self._deliver, entries)

    def _deliver(self, entries: tuple[Entry, ...]) -> None:
        for viewer in self._viewers:
            viewer.take(entries)


class _Viewer:
    """``sent``: the number of the last entry handed on; ``wanted``: that of the newest there is."""

    def __init__(self, reader: Reader, sent: int) -> None:
        self.ended = False
        self.wanted = sent
        self._reader = reader
        self.sent = sent
        self._queue: deque[Entry] = deque(maxlen=QUEUE_ENTRIES)
        self._news = asyncio.Event()

    def take(self, entries: tuple[Entry, ...]) -> None:
        self._queue.extend(entries)
        self.wanted = max(self.wanted, entries[-1].seq)
        self._news.set()

    def end(self) -> None:
        self.ended = True
        self._news.set()

    async def next(self) -> list[Entry]:
        """The entries that follow, without a gap; none after a while in which nothing came."""
        if self.sent >= self.wanted and not self.ended:
            try:
                await asyncio.wait_for(self._news.wait(), HEARTBEAT_S)
            except TimeoutError:
                return []
        self._news.clear()
        batch = [one for one in self._queue if one.seq > self.sent]
        self._queue.clear()
        if self.sent < self.wanted and (not batch or batch[0].seq != self.sent + 1):
            after = self.sent
            batch = list(await run_in_threadpool(self._reader.entries, after=after, limit=_PAGE))
        if batch:
            self.sent = batch[-1].seq
        return batch


def _event(one: Entry) -> str:
    return f"id: {one.seq}\nevent: {one.kind}\ndata: {json.dumps(entry(one), separators=(',', ':'))}\n\n"
