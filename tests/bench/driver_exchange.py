"""Set and read back through the driver, beside a raw socket that sends and receives the same bytes."""

from __future__ import annotations

import json
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from trapd_drivers.scpi.rf_source import ScpiRfSource

_ROUNDS = 15
_EXCHANGES = 60
_GOAL = 3.0


def measure() -> list[dict[str, Any]]:
    """One row: seconds for one set and read-back (two exchanges); the peer is the raw socket.

    The rack is a process of its own, as in service. Driver and socket take turns in short rounds, and the best round of
    each counts, which is what the machine does when it does nothing else.
    """
    with _rack() as port:
        source = ScpiRfSource.open(f"TCPIP::127.0.0.1::{port}::SOCKET")
        raw = socket.create_connection(("127.0.0.1", port))
        raw.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        ours, theirs = [], []
        for _ in range(_ROUNDS):
            ours.append(_seconds_each(lambda count: _through_driver(source, count)))
            theirs.append(_seconds_each(lambda count: _through_socket(raw, count)))
        raw.close()
        source.close()
    value, peer = min(ours), min(theirs)
    ratio = value / peer
    return [
        {
            "name": "driver: set and read back",
            "value": value,
            "unit": "s",
            "peer": peer,
            "ratio": ratio,
            "goal": _GOAL,
            "met": ratio <= _GOAL,
        }
    ]


@contextmanager
def _rack() -> Iterator[int]:
    """The port of the RF source of a rack in a process of its own."""
    command = [sys.executable, "-m", "trapd_simulated"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        try:
            assert process.stdout is not None
            yield json.loads(process.stdout.readline())["instruments"]["rf"]["port"]
        finally:
            process.terminate()


def _seconds_each(work: Callable[[int], None]) -> float:
    start_s = time.perf_counter()
    work(_EXCHANGES)
    return (time.perf_counter() - start_s) / _EXCHANGES


def _through_driver(source: ScpiRfSource, count: int) -> None:
    for step in range(count):
        source.set_level_v(1.0 + 1e-3 * step)
        source.read_level_v()


def _through_socket(raw: socket.socket, count: int) -> None:
    for step in range(count):
        for message in (f"VOLT {1.0 + 1e-3 * step:.4f};:SYST:ERR?\n", "VOLT?\n"):
            raw.sendall(message.encode("ascii"))
            reply = b""
            while not reply.endswith(b"\n"):
                reply += raw.recv(4096)
