"""Requests through the API: accepted, refused, waiting, stopped, off."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import httpx2
import pytest

from tests.api.conftest import over_socket
from tests.api.test_errors import assert_shape
from tests.controller.bench import is_query
from tests.running import NORTH_BENCH, RunningTrap, running_trap
from trapd.client import Client
from trapd.errors import Conflict, GuardRefused, NotFound, QueueFull, RecordUnwritable, Superseded
from trapd.record import Reader

SLOW_SHIM = NORTH_BENCH.replace('slew = "500 V/s", step = "5 V"', 'slew = "0.5 V/s", step = "0.05 V"')
"""shim_x and rods take two seconds a volt."""

HIGHEST_V = 420.0 / 1.02
"""By hand: max = 420 V at the top of a gain known to 2 %."""
STEP_V = 38.0 * 1e-4
"""What 0.1 mV of the simulated synthesizer is at the electrode, 38 V/V."""


@pytest.fixture
def slow(tmp_path: Path) -> Iterator[RunningTrap]:
    """On, and shim_x moves for ten seconds when it is sent to 5 V."""
    assert SLOW_SHIM != NORTH_BENCH
    toml = SLOW_SHIM.replace('rods = "1 V"', 'rods = "0 V"')
    with running_trap(tmp_path, toml) as trap:
        trap.switch_on()
        yield trap


def commands(trap: RunningTrap, after: int = 0) -> list[str]:
    return [one.text for one in trap.rack.received[after:] if not is_query(one.text)]


def in_background(trap: RunningTrap, act: Callable[[Client], Any]) -> Future[Any]:
    """Ask over a connection of its own."""

    def ask() -> Any:
        with Client(trap.socket_path) as client:
            return act(client)

    future: Future[Any] = Future()

    def run() -> None:
        try:
            future.set_result(ask())
        except Exception as error:
            future.set_exception(error)

    threading.Thread(target=run, daemon=True).start()
    return future


def test_a_move_is_answered_202_when_it_begins_and_its_end_is_an_entry(trap: RunningTrap, local: httpx2.Client) -> None:
    answer = local.post("/v1/set", json={"values": {"endcaps": 118.0}, "why": "a test"})
    begun = answer.json()
    assert answer.status_code == 202
    assert begun["accepted"] is True
    assert begun["verdict"]["values"]["endcaps"] == 118.0
    assert trap.client.entry(begun["entry"])["kind"] == "request"
    for entry in trap.client.follow(begun["entry"]):
        if entry["kind"] == "result":
            break
    assert entry["data"]["request"] == begun["entry"]
    assert entry["data"]["state"] == "done"
    assert trap.client.status()["situation"]["values"]["endcaps"] == 118.0


def test_back_leads_to_the_state_before_the_last_move(trap: RunningTrap) -> None:
    trap.client.set({"endcaps": 120.0}, why="from here")
    trap.client.set({"endcaps": 123.0}, why="to there")
    trap.client.back(why="and back")
    assert trap.client.status()["situation"]["values"]["endcaps"] == 120.0


def test_a_refusal_is_a_409_with_its_entry_and_its_verdict_and_nothing_is_sent(
    trap: RunningTrap, local: httpx2.Client
) -> None:
    before = len(trap.rack.received)
    answer = local.post("/v1/set", json={"values": {"drive.amplitude": 430.0}, "why": "too much"})
    details = assert_shape(answer, 409, "refused")["details"]
    assert trap.client.entry(details["entry"])["kind"] == "request"
    assert details["verdict"]["accepted"] is False
    limit = next(one for one in details["verdict"]["reasons"] if one["rule"] == "limit")
    assert HIGHEST_V - 2 * STEP_V < limit["nearest"] <= HIGHEST_V
    assert commands(trap, before) == []


def test_the_client_raises_the_refusal_with_its_verdict(trap: RunningTrap) -> None:
    with pytest.raises(GuardRefused, match=r"nothing was sent$") as caught:
        trap.client.set({"endcaps": -1.0}, why="below")
    assert caught.value.details["verdict"]["reasons"][0]["bound"] == 0.0


def test_a_dry_run_gives_the_same_verdict_and_sends_and_records_nothing(trap: RunningTrap) -> None:
    messages, last = len(trap.rack.received), trap.client.status()["record"]["last_seq"]
    good = trap.client.judge({"endcaps": 125.0})
    bad = trap.client.judge({"drive.amplitude": 430.0})
    way = trap.client.judge({"endcaps": 125.0}, from_={"endcaps": 110.0}, ions={"40Ca+": 2})
    trap.client.window({"endcaps": 125.0})
    assert (good["accepted"], bad["accepted"], way["accepted"]) == (True, False, True)
    # 15 V in steps of 25 V at most (the file, hurried)
    assert way["steps"] == 1
    assert len(trap.rack.received) == messages
    assert trap.client.status()["record"]["last_seq"] == last
    with pytest.raises(GuardRefused) as caught:
        trap.client.set({"drive.amplitude": 430.0}, why="for comparison")
    assert caught.value.details["verdict"]["reasons"] == bad["reasons"]


def test_the_window_shows_where_a_refused_value_would_be_allowed(trap: RunningTrap) -> None:
    allowed = trap.client.window(ions={"40Ca+": 1})["allowed"]["drive.amplitude"]
    assert allowed["unit"] == "V"
    highest = allowed["intervals"][-1]
    assert HIGHEST_V - STEP_V < highest["high"] <= HIGHEST_V
    assert highest["high_by"]["rule"] == "limit"


def test_a_point_that_the_file_does_not_name_is_a_404(trap: RunningTrap) -> None:
    with pytest.raises(NotFound, match="work"):
        trap.client.go("nowhere", why="a test")


def test_on_with_the_drive_on_is_a_conflict(trap: RunningTrap) -> None:
    with pytest.raises(Conflict):
        trap.client.on(why="again")


def test_a_second_request_waits_until_the_first_has_ended(tmp_path: Path) -> None:
    with running_trap(tmp_path, SLOW_SHIM.replace("0.5 V/s", "5 V/s").replace('rods = "1 V"', 'rods = "0 V"')) as trap:
        trap.switch_on()
        first = trap.client.set({"shim_x": 2.0}, why="first", wait=False)
        second = trap.client.set({"endcaps": 121.0}, why="second")
        ended = [one for one in trap.client.entries(kind="result") if one["data"]["request"] == first["entry"]]
        assert ended[0]["data"]["state"] == "done"
        assert second["data"]["request"] > ended[0]["seq"]
        assert second["data"]["from"]["shim_x"] == 2.0


def test_a_full_queue_is_a_429_and_a_stop_answers_all_that_wait(slow: RunningTrap) -> None:
    move = slow.client.set({"shim_x": 5.0}, why="a long move", wait=False)
    before = len(slow.rack.received)
    with ThreadPoolExecutor(17) as pool:

        def ask(number: int) -> type[Exception]:
            with Client(slow.socket_path) as client, pytest.raises((QueueFull, Superseded)) as caught:
                client.set({"endcaps": 121.0}, why=f"number {number}")
            if caught.type is QueueFull:
                slow.client.stop("enough")
            return caught.type

        kinds = list(pool.map(ask, range(17)))
    assert kinds.count(QueueFull) == 1, "sixteen wait, one too many is told so"
    assert kinds.count(Superseded) == 16
    ended = {one["data"]["request"]: one["data"] for one in slow.client.entries(kind="result")}
    assert ended[move["entry"]]["state"] == "stopped"
    assert not [one for one in commands(slow, before) if "121" in one]


def test_stop_holds_the_outputs_where_they_are(slow: RunningTrap) -> None:
    waiting = in_background(slow, lambda client: client.set({"shim_x": 5.0}, why="a long move"))
    for entry in slow.client.follow(slow.client.status()["record"]["last_seq"]):
        if entry["kind"] == "outcome" and entry["data"]["state"] == "confirmed":
            break
    assert slow.client.stop("far enough")["stopped"] is True
    with pytest.raises(Superseded):
        waiting.result(20)
    situation = slow.client.status()["situation"]
    assert 0.0 < situation["values"]["shim_x"] < 5.0
    assert all(situation["outputs"].values())


def test_off_comes_through_while_a_move_is_on_and_requests_wait(slow: RunningTrap) -> None:
    moving = in_background(slow, lambda client: client.set({"shim_x": 5.0}, why="a long move"))
    for entry in slow.client.follow(slow.client.status()["record"]["last_seq"]):
        if entry["kind"] == "intent":
            break
    waiting = in_background(slow, lambda client: client.set({"endcaps": 121.0}, why="behind it"))
    report = slow.client.off("enough")
    assert report["off"] is True
    assert report["recorded"] is True
    assert {name: one["off"] for name, one in report["instruments"].items()} == {"rf": True, "dc": True}
    with pytest.raises(Superseded):
        moving.result(20)
    with pytest.raises((Superseded, Conflict)):  # the latter where it came after `off`
        waiting.result(20)
    assert not any(slow.client.status()["situation"]["outputs"].values())
    assert not [one for one in commands(slow) if "121" in one]


@pytest.mark.parametrize("sent", [{}, {"json": {}}, {"json": {"why": "by hand"}}], ids=["nothing", "empty", "why"])
def test_off_needs_no_body(tmp_path: Path, sent: dict[str, Any]) -> None:
    with running_trap(tmp_path) as trap, over_socket(trap) as http:
        assert http.post("/v1/off", **sent).json()["off"] is True


def test_a_reason_that_cannot_be_printed_does_not_hold_up_a_stop(trap: RunningTrap) -> None:
    last = trap.client.status()["record"]["last_seq"]
    trap.client.stop("\x1b[2J" * 1000)
    why = next(one for one in trap.client.follow(last) if one["kind"] == "halt")["data"]["why"]
    assert why.isprintable()
    assert len(why) == 500


def test_off_and_status_do_not_wait_behind_readers_of_a_dead_disk(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    disk_is_back, reading = threading.Event(), threading.Semaphore(0)

    def hang(*_: object, **__: object) -> tuple[()]:
        reading.release()
        disk_is_back.wait(30)
        return ()

    with running_trap(tmp_path) as trap:
        trap.switch_on()
        monkeypatch.setattr(Reader, "entries", hang)
        readers = [in_background(trap, lambda client: client.entries()) for _ in range(60)]
        for _ in range(40):  # as many as there are threads for such work
            assert reading.acquire(timeout=20)
        try:
            assert trap.client.off("enough")["off"] is True
            assert not any(trap.client.status()["situation"]["outputs"].values())
            assert not any(one.done() for one in readers)
        finally:
            disk_is_back.set()
        assert [one.result(20) for one in readers] == [[]] * 60


def test_off_that_an_instrument_does_not_confirm_is_an_answer_that_names_it(tmp_path: Path) -> None:
    with running_trap(tmp_path) as trap:
        trap.switch_on()
        trap.rack.inject("dc", "hang")
        report = trap.client.off()
        assert report["off"] is False
        assert report["instruments"]["rf"]["off"] is True
        assert report["instruments"]["dc"]["error"]
        assert trap.client.status()["situation"]["off_pending"] == ["dc"]
        trap.rack.clear("dc")


def test_when_the_record_is_lost_nothing_moves_but_off_does(tmp_path: Path) -> None:
    """The file renamed away: SQLite itself would go on writing to it, where nobody looks."""
    with running_trap(tmp_path) as trap:
        trap.switch_on()
        before = len(trap.rack.received)
        trap.record_path.rename(trap.record_path.with_suffix(".away"))
        with pytest.raises(RecordUnwritable):
            trap.client.set({"endcaps": 121.0}, why="into the void")
        assert commands(trap, before) == []
        report = trap.client.off()
        assert (report["off"], report["recorded"], report["entry"]) == (True, False, None)
        situation = trap.client.status()["situation"]
        assert situation["unwritten"] >= 1
        assert not any(situation["outputs"].values())
        assert trap.client.health()["ready"] is False
