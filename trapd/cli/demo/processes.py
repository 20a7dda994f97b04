"""The demo's two processes: the simulated rack and the daemon. Neither outlives the demo, however that ends."""

from __future__ import annotations

import ctypes
import json
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from typing import Any

from trapd.cli.demo.bench import Folder
from trapd.client import Client
from trapd.errors import DaemonUnreachable, Mistake, TrapdError, Unreachable

READY_S = 30.0
ENDING_S = 15.0
_DIE_WITH_PARENT = 1  # PR_SET_PDEATHSIG of prctl(2)


@contextmanager
def running_rack() -> Iterator[Mapping[str, Any]]:
    """A rack in its own process on free ports; its first line: ``instruments`` (port and kind by name), ``control``."""
    command = [sys.executable, "-m", "trapd_simulated", "--print-ports"]
    with _running(command, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        line = process.stdout.readline()
        if not line:
            raise Unreachable(f"the simulated rack did not start (exit code {process.wait()})")
        yield json.loads(line)


def ask_bench(control_port: int, do: str) -> None:
    """Something that no instrument does, such as loading an ion: a line of JSON to the rack, and its answer."""
    with socket.create_connection(("127.0.0.1", control_port), timeout=ENDING_S) as line, line.makefile("rwb") as file:
        file.write(json.dumps({"do": do}).encode() + b"\n")
        file.flush()
        answer = json.loads(file.readline())
    if not answer["ok"]:
        raise Unreachable(f"the simulated bench: {do}: {answer['error']}")


@contextmanager
def running_daemon(folder: Folder) -> Iterator[subprocess.Popen[Any]]:
    """``trapd serve`` in its own process, serving, when it has found the trap dark and so empty."""
    command = [sys.executable, "-m", "trapd.cli", "serve", str(folder.trap_file)]
    with folder.log.open("ab") as log, _running(command, stdout=log, stderr=log) as process:
        _wait_until_ready(folder, process)
        yield process


@contextmanager
def _running(command: list[str], **streams: Any) -> Iterator[subprocess.Popen[Any]]:
    # A session of its own: Ctrl-C is for the demo, which ends its processes in order.
    process = subprocess.Popen(
        command, stdin=subprocess.DEVNULL, start_new_session=True, preexec_fn=_die_with_parent, **streams
    )
    try:
        yield process
    finally:
        process.terminate()
        try:
            process.wait(ENDING_S)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def _die_with_parent() -> None:
    """In the child: SIGTERM when the demo is gone without having said so (Linux; elsewhere nothing)."""
    if sys.platform == "linux":
        ctypes.CDLL(None).prctl(_DIE_WITH_PARENT, signal.SIGTERM)


def _wait_until_ready(folder: Folder, process: subprocess.Popen[Any]) -> None:
    until = time.monotonic() + READY_S
    while True:
        with suppress(DaemonUnreachable), Client(folder.trap_file) as client:
            if client.status()["situation"]["contents"]["presence"] == "none":
                return
        if process.poll() is not None:
            raise _did_not_start(folder, process.returncode)
        if time.monotonic() > until:
            raise Unreachable(f"the daemon did not find the trap dark within {READY_S:g} s; see {folder.log}")
        time.sleep(0.05)


def _did_not_start(folder: Folder, exit_code: int) -> TrapdError:
    last = folder.log.read_text(encoding="utf-8", errors="replace").splitlines()[-5:]
    text = "\n".join([f"the daemon did not start (exit code {exit_code}); {folder.log} ends with", *last])
    return Mistake(text) if exit_code == Mistake.exit_code else Unreachable(text)
