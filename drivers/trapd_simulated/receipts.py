"""What the instruments received, in order, as evidence: kept in memory and, when asked for, in a file."""

from __future__ import annotations

import json
import threading
import time
from collections import deque
from collections.abc import Callable
from dataclasses import asdict, dataclass
from itertools import islice
from pathlib import Path

KEPT = 200_000  # in memory; the file keeps all


@dataclass(frozen=True, kw_only=True)
class Received:
    """One complete program message as it came over the wire, without its newline.

    ``index`` counts from 0 over the whole rack. Bytes that are no ASCII stand as their Latin-1 characters.
    """

    index: int
    instrument: str
    monotonic_ns: int
    wall_us: int
    text: str


class Receipts:
    """Appended to before the message is executed; in the file a line is written out before `add` returns."""

    def __init__(self, on_receive: Callable[[Received], None] | None = None, log: Path | None = None) -> None:
        self._lock = threading.Lock()
        self._kept: deque[Received] = deque(maxlen=KEPT)
        self._next = 0
        self._on_receive = on_receive
        self._log = log.open("ab", buffering=0) if log else None

    def add(self, instrument: str, text: str) -> None:
        with self._lock:
            now = {"monotonic_ns": time.monotonic_ns(), "wall_us": time.time_ns() // 1000}
            record = Received(index=self._next, instrument=instrument, text=text, **now)
            self._next += 1
            self._kept.append(record)
            if self._log:
                self._log.write(json.dumps(asdict(record)).encode() + b"\n")
        if self._on_receive:
            self._on_receive(record)

    def after(self, count: int = 0) -> list[Received]:
        """Those with index ``count`` and up that are still kept."""
        with self._lock:
            skip = max(0, count - (self._next - len(self._kept)))
            return list(islice(self._kept, skip, None))

    def close(self) -> None:
        with self._lock:
            if self._log:
                self._log.close()
                self._log = None
