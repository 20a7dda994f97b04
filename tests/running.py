"""A whole trap in this process: simulated rack, daemon, client. Every test that goes end to end stands on it.

with running_trap(tmp_path) as trap:
    trap.switch_on()
    trap.client.set({"endcaps": 121.0}, why="a test")
    trap.rack.received
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tests import traps
from trapd.client import Client
from trapd.clock import Clock
from trapd.config.read import read
from trapd.daemon import Daemon
from trapd_simulated import Rack, RackSettings


def hurried(toml: str, faster: float = 100.0, coarser: float = 5.0) -> str:
    """The same trap, ramped so much faster and in so much larger steps."""

    def times(factor: float) -> Any:
        return lambda match: f"{match[1]}{float(match[2]) * factor:g}{match[3]}"

    toml = re.sub(r'(slew = ")([0-9.]+)([^"]*")', times(faster), toml)
    return re.sub(r'(step = ")([0-9.]+)([^"]*")', times(coarser), toml)


NORTH_BENCH = hurried(traps.NORTH_BENCH)


@dataclass(frozen=True, kw_only=True)
class RunningTrap:
    """``client`` speaks over the Unix socket, as the local user. ``url``: the same daemon over TCP, with a token."""

    rack: Rack
    daemon: Daemon
    client: Client
    path: Path
    record_path: Path
    socket_path: Path
    url: str

    def over_tcp(self, token: str | None = None) -> Client:
        return Client(self.url, token)

    def wait_contents(self, presence: str) -> None:
        """Until the trap's contents are ``presence``: after a start on a dark trap "none" comes within a second."""
        if self.client.status()["situation"]["contents"]["presence"] == presence:
            return
        seen = self.client.entries(kind="contents", limit=1)[-1]
        if seen["data"]["presence"] == presence:
            return
        for entry in self.client.follow(seen["seq"]):
            if entry["kind"] == "contents" and entry["data"]["presence"] == presence:
                return

    def switch_on(self) -> None:
        """On, at the first point of the file, with nothing in the trap."""
        self.wait_contents("none")
        self.client.on(why="a test")


@contextmanager
def running_trap(
    tmp_path: Path,
    toml: str = NORTH_BENCH,
    settings: RackSettings | None = None,
    *,
    rack: Rack | None = None,
    seed: int = 0,
    speed: float = 1.0,
    clock: Clock | None = None,
) -> Iterator[RunningTrap]:
    """Its files are in ``tmp_path``; ports are free ones. A ``rack`` that is given runs already and outlives the daemon."""
    if rack is None:
        with Rack(settings, seed=seed, speed=speed) as own, running_trap(tmp_path, toml, rack=own, clock=clock) as trap:
            yield trap
        return
    path = traps.write(tmp_path, _here(toml), **rack.ports)
    daemon = Daemon(path, clock=clock)
    daemon.start()
    try:
        with Client(daemon.socket_path) as client:
            yield RunningTrap(
                rack=rack,
                daemon=daemon,
                client=client,
                path=path,
                record_path=read(path).record_file,
                socket_path=daemon.socket_path,
                url=f"http://127.0.0.1:{daemon.address[1]}",
            )
    finally:
        daemon.stop()


def _here(toml: str) -> str:
    """Listening on a free port, and on a socket beside the file instead of the one that a real daemon has."""
    return re.sub(r"(?m)^listen = .*$", 'listen = "127.0.0.1:0"\nsocket = "trapd.sock"', toml)
