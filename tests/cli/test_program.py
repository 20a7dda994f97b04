"""What holds for every command: help, cautions, errors, pipes, colour, Ctrl-C."""

from __future__ import annotations

import contextlib
import os
import re
import signal
import subprocess
import sys
import termios
from collections.abc import Callable, Iterator
from pathlib import Path
from unittest.mock import Mock

import click
import pytest

from tests.cli.typed import Ended, trapd
from trapd.cli.program import COMMANDS, MODULES, PROGRAM
from trapd.errors import NotConfirmed, TrapdError


def every_command() -> Iterator[tuple[str, click.Command]]:
    context = click.Context(PROGRAM)
    for name in MODULES:
        command = PROGRAM.get_command(context, name)
        assert command is not None
        if isinstance(command, click.Group):
            yield from ((f"{name} {sub}", one) for sub, one in command.commands.items())
        else:
            yield name, command


@pytest.mark.parametrize(("name", "command"), list(every_command()), ids=[name for name, _ in every_command()])
def test_every_command_has_examples_of_itself_and_json(name: str, command: click.Command) -> None:
    ended = trapd(f"{name} --help")
    assert ended.code == 0
    assert "Examples:" in ended.out
    assert f"\n    trapd {name}" in ended.out
    assert "--json" in ended.out
    assert command.get_short_help_str()


def test_help_lists_every_command_and_the_cautions() -> None:
    out = trapd("--help").out
    for group, names in COMMANDS.items():
        assert f"{group}:" in out
        for name in names:
            assert f"\n  {name} " in out
    cautions = " ".join(out.partition("People:")[2].split())
    for words in ("RF burns", "high voltage and stored charge", "lasers", "vacuum", "local rules and qualified people"):
        assert words in cautions


def test_the_version_is_told() -> None:
    assert trapd("--version").out.startswith("trapd ")


def test_a_command_that_does_not_exist_is_refused_with_a_hint() -> None:
    ended = trapd("statis")
    assert ended.code == 2
    assert 'there is no command "statis"; did you mean "status"?' in ended.err


def errors(kind: type[TrapdError] = TrapdError) -> Iterator[type[TrapdError]]:
    yield kind
    for narrower in kind.__subclasses__():
        if narrower.__module__ == TrapdError.__module__:
            yield from errors(narrower)


Failing = Callable[..., Ended]


@pytest.fixture
def failing(file: Path, monkeypatch: pytest.MonkeyPatch) -> Failing:
    """A command that fails with this error."""

    def run(error: BaseException, options: str = "") -> Ended:
        monkeypatch.setattr("trapd.cli.offline.read_model", Mock(side_effect=error))
        return trapd(f"judge {file} {options}")

    return run


@pytest.mark.parametrize("kind", list(errors()))
def test_every_error_leaves_with_its_own_exit_code_and_one_document(kind: type[TrapdError], failing: Failing) -> None:
    ended = failing(kind("the sentence", {"number": 1}), "--json")
    assert ended.code == kind.exit_code
    assert ended.json == {"code": kind.code, "message": "the sentence", "details": {"number": 1}}
    assert "the sentence" in ended.err


def test_a_bug_alone_shows_a_traceback_and_asks_for_a_report(failing: Failing) -> None:
    ended = failing(ZeroDivisionError("division by zero"))
    assert ended.code == 1
    assert "Traceback" in ended.err
    assert "Please report it" in ended.err
    assert "bug: ZeroDivisionError: division by zero" in ended.err
    assert failing(NotConfirmed("rf: did not say so")).err == "not confirmed: rf: did not say so\n"


def test_ctrl_c_is_a_word_and_130(failing: Failing) -> None:
    ended = failing(KeyboardInterrupt())
    assert ended.code == 130
    assert ended.err.strip() == "interrupted"


def test_a_reader_that_stops_reading_is_no_error(file: Path) -> None:
    """As under `| head -0`: the pipe is closed before anything is written."""
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "wb") as pipe:
        command = [sys.executable, "-m", "trapd.cli", "window", str(file), "--json"]
        ran = subprocess.run(command, stdout=pipe, stderr=subprocess.PIPE, text=True, check=False)
    assert ran.stderr == ""
    assert ran.returncode == 128 + signal.SIGPIPE


def test_output_that_is_piped_is_plain_and_unwrapped(file: Path) -> None:
    command = [sys.executable, "-m", "trapd.cli", "judge", str(file), "drive.amplitude=90V", "endcaps=200V"]
    ran = subprocess.run(command, capture_output=True, text=True, check=False, env={**os.environ, "COLUMNS": "40"})
    assert "\x1b" not in ran.stdout
    assert max(map(len, ran.stdout.splitlines())) > 80
    assert all(line == line.rstrip() for line in ran.stdout.splitlines())


def in_a_terminal(command: list[str], columns: int, **environment: str) -> str:
    """What the command writes to a terminal of that width."""
    ours, theirs = os.openpty()
    termios.tcsetwinsize(theirs, (50, columns))
    clean = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "COLUMNS")}
    with subprocess.Popen(command, stdout=theirs, env={**clean, "TERM": "xterm", **environment}) as process:
        os.close(theirs)
        written = bytearray()
        with contextlib.suppress(OSError):  # the terminal is closed when its last writer is gone
            while piece := os.read(ours, 4096):
                written += piece
        process.wait()
    os.close(ours)
    return written.decode()


@pytest.mark.parametrize("columns", [60, 80, 120])
@pytest.mark.parametrize("name", ["judge", "window"])
def test_in_a_terminal_there_is_colour_and_nothing_runs_over_its_edge(file: Path, name: str, columns: int) -> None:
    command = [sys.executable, "-m", "trapd.cli", name, str(file), "drive.amplitude=90V", "endcaps=200V"]
    shown = in_a_terminal(command, columns)
    assert name == "window" or "\x1b[1;31mrefused" in shown
    plain = re.sub(r"\x1b\[[0-9;]*m", "", shown)
    assert max(map(len, plain.splitlines())) <= columns
    assert "…" not in plain


def test_no_color_is_honoured(file: Path) -> None:
    command = [sys.executable, "-m", "trapd.cli", "judge", str(file)]
    shown = in_a_terminal(command, 80, NO_COLOR="1")
    assert "accepted" in shown
    assert not re.search(r"\x1b\[[0-9;]*3[0-9]", shown)
