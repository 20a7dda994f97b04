"""``trapd demo``: a simulated rack, a daemon and a first hour with them, on one line and without configuration."""

from __future__ import annotations

import os
import shutil
import signal
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click

from trapd.cli.answer import tell_json, wants_json
from trapd.cli.demo.bench import Folder
from trapd.cli.demo.processes import ask_bench, running_daemon, running_rack
from trapd.cli.demo.story import say_how_to_talk, tell_story
from trapd.cli.options import command
from trapd.cli.terminal import STRONG, say
from trapd.config.quantity import QuantityError, quantity
from trapd.errors import BadRequest, DaemonUnreachable

_LOOK_S = 0.25


class _Ended(BaseException):
    """Ctrl-C, SIGTERM or a closed terminal: the demo cleans up and ends."""


@command("trapd demo", "trapd demo --dir demo --for 30s")
@click.option(
    "--dir",
    "directory",
    type=click.Path(path_type=Path),
    help="Keep its files there (default: a new temporary folder).",
)
@click.option(
    "--for",
    "time_text",
    metavar="TIME",
    help="Stop by itself after so long, such as 30s; not before the end of the story.",
)
def demo_command(directory: Path | None, time_text: str | None) -> None:
    """A simulated rack and a daemon, shown and yours to try. What they do with a good and a bad setpoint comes first.

    The trap is invented and nothing real is touched. Ctrl-C ends it; the record stays.
    """
    seconds = None if time_text is None else _seconds(time_text)
    began = time.monotonic()
    folder = Folder.make(directory)
    try:
        with _ending_on_signals():
            _run(folder, None if seconds is None else began + seconds)
    except _Ended:
        pass
    if not wants_json():
        click.echo(f"\nThe demo's daemon and rack are stopped. What is left: {folder.path}")
        click.echo(f"  {_program()} record --file {folder.record}")


def _run(folder: Folder, until: float | None) -> None:
    with running_rack() as rack:
        ports = {name: one["port"] for name, one in rack["instruments"].items()}
        folder.write_trap_file(ports)
        os.environ["TRAPD_AT"] = str(folder.trap_file)
        with running_daemon(folder) as daemon:
            if wants_json():
                tell_json({"trap_file": str(folder.trap_file), "record": str(folder.record), "rack": rack})
                sys.stdout.flush()
            else:
                _tell(folder, ports, rack["control"])
            _keep_running(daemon, until)


def _tell(folder: Folder, ports: Mapping[str, int], control_port: int) -> None:
    say(("trapd demo: an invented trap, simulated instruments, a real daemon", STRONG))
    say(f"rack: {', '.join(f'{name} on port {port}' for name, port in ports.items())}")
    say(f"trap file: {folder.trap_file}")
    tell_story(lambda do: ask_bench(control_port, do))
    say_how_to_talk(folder, _program())


def _keep_running(daemon: Any, until: float | None) -> None:
    if not wants_json():
        click.echo("Ctrl-C ends the demo." if until is None else "It ends by itself, or with Ctrl-C.")
    while until is None or time.monotonic() < until:
        if daemon.poll() is not None:
            raise DaemonUnreachable(
                f"the demo's daemon ended by itself (exit code {daemon.returncode}); its log is beside the record"
            )
        time.sleep(_LOOK_S)


@contextmanager
def _ending_on_signals() -> Iterator[None]:
    """Turns the first of these signals into `_Ended`; more of them do not disturb the cleaning up."""
    ends = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)

    def end(number: int, frame: object) -> None:
        for each in ends:
            signal.signal(each, signal.SIG_IGN)
        raise _Ended

    before = {each: signal.signal(each, end) for each in ends}
    try:
        yield
    finally:
        for each, handler in before.items():
            signal.signal(each, handler)


def _seconds(text: str) -> float:
    try:
        return quantity(text, "time")
    except QuantityError as error:
        raise BadRequest(f'--for "{text}": {error}') from error


def _program() -> str:
    """How this program is called from another terminal."""
    script = Path(sys.argv[0])
    if script.name != "trapd":
        return f"{sys.executable} -m trapd.cli"
    found = shutil.which("trapd")
    return "trapd" if found and Path(found).resolve() == script.resolve() else str(script.absolute())
