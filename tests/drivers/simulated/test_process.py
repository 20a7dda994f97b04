"""The rack as a process of its own: its line, its log, its control port, and that it outlives whoever started it."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.drivers.simulated.client import Client
from trapd_simulated import Rack, RackUseError, ask
from trapd_simulated.control import ControlServer

DRIVERS = Path(__file__).resolve().parents[3] / "drivers"
COMMAND = [sys.executable, "-m", "trapd_simulated"]
ENVIRONMENT = {**os.environ, "PYTHONPATH": str(DRIVERS)}


def run(*options: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [*COMMAND, *options], env=ENVIRONMENT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )


def first_line(process: subprocess.Popen[str]) -> dict[str, Any]:
    assert process.stdout is not None
    found: dict[str, Any] = json.loads(process.stdout.readline())
    return found


def wait_gone(pid: int) -> None:
    """Until no living process has ``pid`` (a zombie is not alive)."""
    deadline = time.monotonic() + 10.0
    stat = Path(f"/proc/{pid}/stat")
    while stat.exists() and stat.read_text().rsplit(")", 1)[1].split()[0] != "Z":
        assert time.monotonic() < deadline, f"process {pid} is still there"
        time.sleep(0.01)


@pytest.fixture
def process(tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    one = run("--log", str(tmp_path / "received.jsonl"), "--seed", "7", "--speed", "100", "--print-ports")
    yield one
    one.kill()
    one.communicate()


def test_the_line_names_every_port_and_the_process(process: subprocess.Popen[str]) -> None:
    line = first_line(process)
    assert line["pid"] == process.pid
    assert {name: one["kind"] for name, one in line["instruments"].items()} == {
        "rf": "rf-source",
        "dc": "dc-supply",
        "tickle": "rf-source",
        "counter": "photon-counter",
        "vacuum": "gauge",
    }
    for one in line["instruments"].values():
        with Client(one["port"]) as client:
            assert client.ask("*IDN?").startswith("TRAPD SIMULATED RACK,")
    assert ask(line["control"], "describe")["instruments"] == line["instruments"]
    assert ask(line["control"], "describe")["speed"] == 100.0


@pytest.mark.parametrize("end", [signal.SIGTERM, signal.SIGINT, None])
def test_it_ends_when_told_to_and_not_at_a_hangup(process: subprocess.Popen[str], end: signal.Signals | None) -> None:
    line = first_line(process)
    process.send_signal(signal.SIGHUP)
    assert ask(line["control"], "describe")["seed"] == 7
    if end:
        process.send_signal(end)
    else:
        assert ask(line["control"], "quit") is None
    assert process.wait(10.0) == 0
    assert process.stderr is not None
    assert process.stderr.read() == ""


def test_each_message_is_in_the_log_before_it_is_answered(process: subprocess.Popen[str], tmp_path: Path) -> None:
    line = first_line(process)
    with Client(line["instruments"]["rf"]["port"]) as client:
        for count in range(20):
            client.ask(f"VOLT {count / 10};VOLT?")
            logged = [json.loads(text) for text in (tmp_path / "received.jsonl").read_text().splitlines()]
            assert logged[-1]["text"] == f"VOLT {count / 10};VOLT?"
    assert logged == ask(line["control"], "received")
    assert ask(line["control"], "received", after=18) == logged[18:]
    assert [one["index"] for one in logged] == list(range(20))
    assert logged[0].keys() == {"index", "instrument", "monotonic_ns", "wall_us", "text"}
    assert logged[0]["monotonic_ns"] <= time.monotonic_ns()


def test_the_control_port_does_everything_the_python_interface_does(process: subprocess.Popen[str]) -> None:
    line = first_line(process)
    control, port = line["control"], line["instruments"]["rf"]["port"]
    ask(control, "front_panel", instrument="rf", command_text="FREQ 21.0005 MHZ;VOLT 5;:OUTP ON")
    assert float(ask(control, "front_panel", instrument="rf", command_text="VOLT?")) == 5.0
    later_s = ask(control, "describe")["time_s"] + 1.0
    assert ask(control, "electrodes", t=later_s)["drive_amplitude_v"] == pytest.approx(5.0 * 38.2, rel=1e-3)
    assert ask(control, "electrodes")["voltages_v"]["dc"]["1"] == 0.0
    ask(control, "inject", instrument="rf", kind="wrong_identity", text="A,B,C,D", times=1)
    with Client(port) as client:
        assert client.ask("*IDN?") == "A,B,C,D"
    ask(control, "inject", instrument="rf", kind="refuse_connections")
    with pytest.raises(ConnectionRefusedError):
        Client(port)
    ask(control, "clear", instrument="rf")
    ask(control, "power_cycle", instrument="rf", seconds=1.0)
    with Client(port) as client:
        assert client.ask("OUTP?;*ESR?") == "0;128"


@pytest.fixture(scope="module")
def control() -> Iterator[int]:
    with Rack() as rack, ControlServer(rack, 0, threading.Event()) as server:
        yield server.port
        server.shutdown()


@pytest.mark.parametrize(
    ("request_", "message"),
    [
        ({"do": "dance"}, "cannot do 'dance'"),
        ({"do": "clear"}, "missing a required argument"),
        ({"do": "clear", "instrument": "rf", "colour": 1}, "unexpected keyword"),
        ({"do": "clear", "instrument": "laser"}, "no instrument 'laser'"),
        ({"do": "inject", "instrument": "rf", "kind": "explode"}, "no fault 'explode'"),
        ({"do": "inject", "instrument": "rf", "kind": "hang", "colour": 1}, "a fault has no 'colour'"),
        ({"do": "inject", "instrument": "rf", "kind": "hang", "times": "many"}, "'<' not supported"),
        ({"do": "electrodes", "t": -1.0}, "earliest"),
    ],
)
def test_a_wrong_request_is_answered_with_one_error(control: int, request_: dict[str, Any], message: str) -> None:
    with pytest.raises(RackUseError, match=message):
        ask(control, **request_)
    with Client(control) as client:
        assert "error" in json.loads(client.ask("no JSON"))
        assert json.loads(client.ask('{"do": "describe"}'))["ok"]


def test_the_rack_outlives_the_process_that_started_it(tmp_path: Path) -> None:
    """The parent prints the rack's line on and is killed; its end of the rack's pipes dies with it."""
    parent_code = (
        "import subprocess, sys, time\n"
        f"rack = subprocess.Popen({COMMAND!r}, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)\n"
        "print(rack.stdout.readline(), flush=True)\n"
        "time.sleep(60)\n"
    )
    parent = subprocess.Popen(
        [sys.executable, "-c", parent_code], env=ENVIRONMENT, stdout=subprocess.PIPE, text=True, start_new_session=True
    )
    line = first_line(parent)
    try:
        with Client(line["instruments"]["rf"]["port"]) as client:
            client.ask("VOLT 5;:OUTP ON;*OPC?")
            parent.kill()
            parent.communicate()
            assert client.ask("OUTP?") == "1"
        with Client(line["instruments"]["rf"]["port"]) as client:
            assert float(client.ask("VOLT?")) == 5.0
    finally:
        ask(line["control"], "quit")
    wait_gone(line["pid"])


def test_ports_follow_the_base_and_a_taken_one_is_said(process: subprocess.Popen[str]) -> None:
    taken = first_line(process)["instruments"]["rf"]["port"]
    other = run("--port-base", str(taken))
    _, complaint = other.communicate(timeout=10.0)
    assert other.returncode == 2
    assert complaint.count("\n") == 1
    assert str(taken) in complaint
    assert "not started" in complaint


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (["--settings", "nowhere.toml"], "nowhere.toml: cannot be read"),
        (["--speed", "0"], "speed = 0"),
        (["--port-base", "65534"], "do not fit"),
        (["--log", "/nowhere/received.jsonl"], "/nowhere/received.jsonl"),
    ],
)
def test_a_wrong_option_is_one_line_and_no_traceback(options: list[str], message: str) -> None:
    done = subprocess.run(
        [*COMMAND, *options], env=ENVIRONMENT, capture_output=True, text=True, timeout=20.0, check=False
    )
    assert done.returncode == 2
    assert message in done.stderr
    assert done.stderr.count("\n") == 1
    assert done.stdout == ""
