"""``trapd clear`` and what ``status``, ``check`` and ``record`` say of an interlock, against a running daemon."""

from __future__ import annotations

import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.cli import typed
from tests.controller.test_interlocks import INTERLOCK
from tests.running import NORTH_BENCH, RunningTrap, running_trap


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningTrap]:
    with running_trap(tmp_path_factory.mktemp("trap"), NORTH_BENCH + INTERLOCK.format(action="hold")) as trap:
        yield trap


def trapd(running: RunningTrap, line: str) -> typed.Ended:
    return typed.trapd(line, TRAPD_AT=str(running.socket_path))


def wait_for(running: RunningTrap, words: str) -> str:
    until = time.monotonic() + 20
    while words not in (out := trapd(running, "status").out):
        assert time.monotonic() < until, out
    return out


def test_an_interlock_is_shown_tripped_and_cleared(running: RunningTrap) -> None:
    wait_for(running, "e-08 Pa")
    running.rack.set_pressure("vacuum", 1e-4)
    assert "Pa; `trapd clear vacuum --why ...` ends it" in wait_for(running, "TRIPPED  interlock vacuum: ")
    refused = trapd(running, "on --why 'too early'")
    assert refused.code == 3
    assert "interlock vacuum has tripped" in refused.err
    too_soon = trapd(running, "clear vacuum --why 'pump is back'")
    assert (too_soon.code, "expected at most 9e-05 Pa; nothing was cleared" in too_soon.err) == (3, True)
    running.rack.set_pressure("vacuum", 1e-10)
    wait_for(running, "e-0")
    assert trapd(running, "clear vacuum --why 'pump is back'").out.startswith("cleared  interlock vacuum (entry ")
    entries = trapd(running, "record --kind interlock").out
    assert "vacuum tripped and warned, 0.0" in entries
    assert entries.rstrip().endswith(" Pa: pump is back")


def test_check_shows_the_levels(running: RunningTrap) -> None:
    out = trapd(running, f"check {running.path}").out
    assert "vacuum" in out
    assert "0.0001 Pa" in out
    assert "hold" in out


def test_the_file_is_held_to_what_an_interlock_needs(running: RunningTrap, tmp_path: Path) -> None:
    wrong = tmp_path / "trap.toml"
    text = running.path.read_text(encoding="utf-8")
    wrong.write_text(text.replace('trip_above = "1e-6 mbar"', 'trip_above = "1e-12 mbar"').replace('"hold"', '"stop"'))
    err = trapd(running, f"check {wrong}").err
    assert "interlocks.vacuum.warn_above" in err
    assert "expected a level before trip_above" in err
    assert 'interlocks.vacuum.action = "stop"; expected "hold" or "ramp down" or "off"' in err
