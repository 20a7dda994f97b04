"""A real daemon process on a rack that the test can watch: `trapd serve`, killed and started as the test likes."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from tests.controller.bench import QUICK
from tests.traps import write
from trapd.client import Client
from trapd.errors import TrapdError
from trapd_simulated import Rack

ENOUGH_S = 30.0


@dataclass
class Serving:
    """The daemon of one folder. `start` waits until it answers; `kill` is SIGKILL."""

    folder: Path
    rack: Rack
    toml: str = QUICK
    record_folder: Path | None = None
    wrapper: Sequence[str] = ()
    process: subprocess.Popen[bytes] | None = None
    log: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        text = self.toml.replace("127.0.0.1:8417", "127.0.0.1:0")
        text = text.replace("[server]", f'[server]\nsocket = "{self.socket}"')
        if self.record_folder is not None:
            text = text.replace('file = "north-bench.sqlite"', f'file = "{self.record_folder}/north-bench.sqlite"')
        self.trap_file = write(self.folder, text, **self.rack.ports)

    @property
    def socket(self) -> Path:
        return self.folder / "d.sock"

    @property
    def record(self) -> Path:
        return (self.record_folder or self.folder) / "north-bench.sqlite"

    @property
    def log_file(self) -> Path:
        return self.folder / "serve.log"

    def launch(self) -> None:
        with self.log_file.open("ab") as log:
            command = [*self.wrapper, sys.executable, "-m", "trapd.cli", "serve", str(self.trap_file)]
            self.process = subprocess.Popen(command, stdout=log, stderr=log)

    def start(self) -> Client:
        self.launch()
        until = time.monotonic() + ENOUGH_S
        client = Client(self.socket)
        while True:
            try:
                client.status()
            except TrapdError:
                assert self.process is not None
                assert self.process.poll() is None, self.log_file.read_text()
                assert time.monotonic() < until, self.log_file.read_text()
                time.sleep(0.02)
            else:
                return client

    def kill(self) -> None:
        assert self.process is not None
        self.process.send_signal(signal.SIGKILL)
        self.process.wait()

    def stop(self) -> int:
        """SIGTERM, and how it ended."""
        if self.process is None:
            return 0
        if self.process.poll() is None:
            self.process.send_signal(signal.SIGTERM)
        return self.process.wait(ENOUGH_S)


def wait_until_empty(client: Client) -> None:
    until = time.monotonic() + ENOUGH_S
    while client.status()["situation"]["contents"]["presence"] != "none":
        assert time.monotonic() < until
        time.sleep(0.02)


def asked_for(name: str, ordinary: int) -> int:
    """How many, unless the environment asks for more."""
    return int(os.environ.get(name, ordinary))
