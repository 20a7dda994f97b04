"""The client raises what the daemon answered, and says where it asked when nobody does."""

from __future__ import annotations

import json
import math
import subprocess
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path

import pytest

from tests.controller.test_faults import DeadDisk
from tests.running import RunningTrap, hurried, running_trap
from tests.traps import NORTH_BENCH
from trapd import errors
from trapd.client import Client, JsonEntry
from trapd.client.connection import error_kinds
from trapd.client.following import wait_result
from trapd.errors import (
    BadRequest,
    DaemonUnreachable,
    InstrumentUnreachable,
    NotConfirmed,
    RecordUnwritable,
    Superseded,
)

TREE = [kind for kind in vars(errors).values() if isinstance(kind, type) and issubclass(kind, errors.TrapdError)]


@pytest.mark.parametrize("kind", TREE)
def test_every_code_leads_back_to_its_error(kind: type[errors.TrapdError]) -> None:
    found = error_kinds()[kind.code]
    assert issubclass(found, kind) or kind.code in ("bad_request", "refused")
    assert (found.code, found.exit_code) == (kind.code, kind.exit_code)


def test_a_refusal_by_code_is_the_guards() -> None:
    assert error_kinds()["refused"] is errors.GuardRefused
    assert error_kinds()["bad_request"] is errors.BadRequest
    assert error_kinds()["bug"] is errors.Bug


@contextmanager
def answering(status: int, body: bytes) -> Iterator[str]:
    """Something on a port that is no daemon."""

    class Handler(BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            self.send_response(status)
            self.send_header("Content-Length", str(len(body)))
            self.end_headers()
            self.wfile.write(body)

        def log_message(self, *_: object) -> None:
            pass

    with HTTPServer(("127.0.0.1", 0), Handler) as server:
        threading.Thread(target=server.serve_forever, args=(0.01,), daemon=True).start()
        yield f"http://127.0.0.1:{server.server_port}"
        server.shutdown()


@pytest.mark.parametrize(
    ("status", "body"),
    [(200, b"<html>"), (404, b"not here"), (500, b"[]"), (502, b'{"error": "gateway"}'), (503, b"\xff")],
)
def test_what_is_no_daemon_is_told_with_its_address(status: int, body: bytes) -> None:
    with (
        answering(status, body) as url,
        Client(url) as client,
        pytest.raises(DaemonUnreachable, match="is no trapd") as caught,
    ):
        client.status()
    assert url in caught.value.message


def test_an_unknown_code_of_a_newer_daemon_is_shown() -> None:
    body = json.dumps({"code": "too_new", "message": "words", "details": {}}).encode()
    with answering(409, body) as url, Client(url) as client, pytest.raises(errors.TrapdError, match="words"):
        client.status()


@pytest.mark.parametrize("at", ["{}/nobody.sock", "http://127.0.0.1:1", "http://[", "http://no-such-host.invalid"])
def test_nobody_there_is_told_with_its_address(tmp_path: Path, at: str) -> None:
    where = at.format(tmp_path)
    with pytest.raises(DaemonUnreachable) as caught, Client(where) as client:
        client.set({"endcaps": 1.0}, why="a test")
    assert where in caught.value.message


@pytest.mark.parametrize("value", [math.nan, math.inf, object()])
def test_what_json_cannot_say_is_not_sent(trap: RunningTrap, value: float) -> None:
    with pytest.raises(BadRequest, match="nothing was sent"):
        trap.client.set({"endcaps": value}, why="a test")


def test_times_are_asked_for_as_datetimes_or_text(trap: RunningTrap) -> None:
    begin = datetime(2020, 1, 1, tzinfo=UTC)
    now = trap.client.entries(limit=1)[0]["time"]
    assert trap.client.entries(since=begin, limit=5)
    assert trap.client.entries(until=begin) == []
    assert trap.client.setpoints(until=begin) == []
    assert trap.client.state(begin)["seq"] == 0
    assert trap.client.state(now)["seq"] >= 1


def test_the_record_is_read_in_pages_the_newest_last(trap: RunningTrap) -> None:
    first = trap.client.entries(after=0, limit=3)
    last = trap.client.entries(limit=3)
    assert [one["seq"] for one in first] == [1, 2, 3]
    assert [one["seq"] for one in last] == sorted(one["seq"] for one in last)
    assert last[-1]["seq"] > 3
    assert {one["kind"] for one in trap.client.entries(kind="found")} == {"found"}


def test_what_was_sent_and_read_back_can_be_asked_for(trap: RunningTrap) -> None:
    trap.client.set({"endcaps": 119.0}, why="to be found again")
    row = trap.client.setpoints(setpoint="endcaps", limit=1)[0]
    assert (row["value"], row["unit"], row["state"], row["why"]) == (119.0, "V", "confirmed", "to be found again")
    # Confirmed means within the profile: 0.1 V + 0.1 %, and half a step of 10 mV; the supply may still be slewing.
    assert row["readback"] == pytest.approx(119.0, abs=0.1 + 0.119 + 0.005)
    assert trap.client.state()["setpoints"]["endcaps"]["seq"] == row["seq"]
    assert trap.client.state()["outputs"]["drive.output"]["level"] == 1.0


def test_the_record_verifies_and_a_head_that_is_not_in_it_is_found(trap: RunningTrap) -> None:
    assert trap.client.verify(head=trap.client.status()["record"]["head"])["ok"] is True
    report = trap.client.verify(head="0" * 63 + "1")
    assert report["ok"] is False
    assert "rewritten" in report["problems"][0]["message"]


def test_the_trap_describes_itself(trap: RunningTrap) -> None:
    said = trap.client.trap()
    assert said["setpoints"]["endcaps"] == {
        "unit": "V",
        "low": 0.0,
        "high": 900.0,
        "slew_per_s": 5000.0,
        "step": 25.0,
    }
    assert said["points"]["work"]["endcaps"] == 120.0
    assert said["simulated"] is True
    assert "stability" in said["rules"]
    # 40Ca+: 39.962590850 u less an electron (AME2020; CODATA 2022 for u and the electron) [mem]
    assert said["species"]["40Ca+"]["mass_kg"] == pytest.approx(6.635944e-26, rel=1e-6)


def entry(seq: int, kind: str, **data: object) -> dict[str, object]:
    return {"seq": seq, "kind": kind, "data": data}


def test_waiting_tells_progress_and_returns_the_result_of_its_own_request() -> None:
    entries = [
        entry(8, "outcome", intent=7),
        entry(9, "result", request=2, state="failed", error="another's"),
        entry(10, "result", request=5, state="done", error=None),
        entry(11, "heartbeat"),
    ]
    seen: list[object] = []
    result = wait_result(iter(entries), 5, lambda one: seen.append(one["seq"]), dict)
    assert result is entries[2]
    assert seen == [8, 9, 10]


@pytest.mark.parametrize("kind", [Superseded, NotConfirmed, InstrumentUnreachable, RecordUnwritable])
def test_waiting_raises_what_it_ended_with(kind: type[errors.TrapdError]) -> None:
    ended = entry(10, "result", request=5, state="failed", code=kind.code, error="why it ended")
    with pytest.raises(kind, match="why it ended") as caught:
        wait_result(iter([ended]), 5, None, dict)
    assert caught.type is kind
    assert caught.value.details["entry"] == 10


def test_waiting_ends_when_the_daemon_was_started_anew() -> None:
    with pytest.raises(NotConfirmed, match="started anew"):
        wait_result(iter([entry(10, "start")]), 5, None, dict)


@pytest.mark.parametrize("activity", ["moving", "scanning"])
@pytest.mark.parametrize(
    ("under_way", "unwritten", "ended"), [(None, 2, True), (4, 2, True), (5, 2, False), (None, 0, False)]
)
def test_a_silent_stream_is_waited_on_unless_the_end_cannot_be_written(
    activity: str, under_way: int | None, unwritten: int, ended: bool
) -> None:
    situation = {"moving": None, "scanning": None, activity: under_way and {"request": under_way}}
    status = {"situation": {**situation, "unwritten": unwritten}}
    entries = [None, entry(10, "result", request=5, state="done")]
    if ended:
        with pytest.raises(RecordUnwritable, match="its end cannot be written"):
            wait_result(iter(entries), 5, None, lambda: status)
    else:
        assert wait_result(iter(entries), 5, None, lambda: status) is entries[1]


def test_a_move_over_which_the_disk_dies_is_not_waited_for_forever(tmp_path: Path) -> None:
    def kill_disk(one: JsonEntry) -> None:
        if one["kind"] == "intent":
            disk.dead = True

    with running_trap(tmp_path, hurried(NORTH_BENCH, faster=10)) as trap:
        trap.switch_on()
        desk = trap.daemon.controller._desk
        desk.record = disk = DeadDisk(desk.record)
        with pytest.raises(RecordUnwritable, match="it has ended"):
            trap.client.set({"endcaps": 800.0}, why="a long way", progress=kill_disk)
        disk.dead = False


def test_the_client_costs_nothing_before_it_is_used() -> None:
    heavy = ["httpx2", "fastapi", "uvicorn", "pydantic", "sqlalchemy", "numpy", "pyvisa"]
    check = f"import sys, trapd.client; sys.exit(', '.join(set({heavy!r}) & set(sys.modules)) or 0)"
    done = subprocess.run([sys.executable, "-c", check], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
