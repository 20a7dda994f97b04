"""The record followed live: nothing lost, nothing twice, and a slow viewer is nobody's problem but its own."""

from __future__ import annotations

import asyncio
import itertools
import json
import socket
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx2
import pytest

from tests.api.conftest import over_socket
from tests.running import RunningTrap, running_trap
from trapd.api import stream
from trapd.api.stream import MOST_VIEWERS, QUEUE_ENTRIES, Viewers
from trapd.clock import SystemClock
from trapd.errors import BadRequest, DaemonUnreachable, QueueFull
from trapd.record import Draft, Reader, Record

NOTE = Draft(kind="heartbeat", actor="trapd", data={})


@pytest.fixture
def record(tmp_path: Path) -> Iterator[Record]:
    one = Record.open(tmp_path / "record.sqlite", clock=SystemClock(), boot_id="test")
    yield one
    one.close()


def numbers(text: str) -> list[int]:
    """Of the entries in some events."""
    return [json.loads(line.removeprefix("data:"))["seq"] for line in text.splitlines() if line.startswith("data:")]


async def take(events: Any, count: int) -> list[int]:
    found: list[int] = []
    while len(found) < count:
        some = numbers(await asyncio.wait_for(anext(events), 10))
        assert len(some) <= QUEUE_ENTRIES, "no viewer makes the daemon hold more"
        found += some
    return found


def test_a_viewer_that_fell_behind_reads_the_gap_from_the_record(record: Record) -> None:
    many = 5 * QUEUE_ENTRIES + 3

    async def view() -> list[int]:
        with Reader.open(record.path) as reader:
            events = Viewers(record, reader).open(None)
            await anext(events)  # from here on it follows, and then looks away
            for _ in range(many):
                future = record.append(NOTE)
            await asyncio.wrap_future(future)
            await asyncio.sleep(0)  # the queue gets what the loop was told of
            return await take(events, many)

    assert asyncio.run(view()) == list(range(1, many + 1))


def test_nothing_is_lost_between_the_record_read_and_the_record_heard(record: Record) -> None:
    async def view() -> list[int]:
        with Reader.open(record.path) as reader:
            viewers = Viewers(record, reader)
            record.append(*[NOTE] * 700).result()
            events = viewers.open(0)
            writer = threading.Thread(target=lambda: [record.append(NOTE).result() for _ in range(300)])
            writer.start()
            found = await take(events, 1000)
            writer.join()
            return found

    assert asyncio.run(view()) == list(range(1, 1001))


def test_the_writer_does_not_wait_for_viewers_and_survives_the_end_of_their_loop(record: Record) -> None:
    async def open_and_leave() -> None:
        with Reader.open(record.path) as reader:
            events = Viewers(record, reader).open(None)
            await anext(events)

    asyncio.run(open_and_leave())
    assert record.append(NOTE).result(10)[0].seq == 1
    assert record.append(NOTE).result(10)[0].seq == 2


def test_more_viewers_than_there_is_room_for_are_refused_and_room_is_made_when_one_leaves(record: Record) -> None:
    async def crowd() -> None:
        with Reader.open(record.path) as reader:
            viewers = Viewers(record, reader)
            crowd = [viewers.open(None) for _ in range(MOST_VIEWERS)]
            for events in crowd:
                await anext(events)
            with pytest.raises(QueueFull):
                viewers.open(None)
            await crowd[0].aclose()  # type: ignore[attr-defined]
            viewers.open(None)

    asyncio.run(crowd())


def test_a_quiet_stream_says_that_it_lives(record: Record, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(stream, "HEARTBEAT_S", 0.01)

    async def view() -> str:
        with Reader.open(record.path) as reader:
            events = Viewers(record, reader).open(None)
            await anext(events)
            return await asyncio.wait_for(anext(events), 10)

    said = asyncio.run(view())
    assert said.startswith(":"), "a comment: no event for anybody"
    assert said.endswith("\n\n")


def test_the_events_are_the_entries_of_the_record(trap: RunningTrap, local: httpx2.Client) -> None:
    with local.stream("GET", "/v1/stream", params={"after": 2}) as answer:
        assert answer.headers["Content-Type"].startswith("text/event-stream")
        lines = itertools.islice((line for line in answer.iter_lines() if line), 4)
        begin, number, kind, data = list(lines)
    entry = trap.client.entry(3)
    assert (begin, number, kind) == ("id: 2", "id: 3", f"event: {entry['kind']}")
    assert json.loads(data.removeprefix("data: ")) == entry


def test_last_event_id_resumes_and_goes_before_the_query(trap: RunningTrap, local: httpx2.Client) -> None:
    headers = {"Last-Event-ID": "4"}
    with local.stream("GET", "/v1/stream", params={"after": 1}, headers=headers) as answer:
        data = next(line for line in answer.iter_lines() if line.startswith("data:"))
    assert numbers(data) == [5]


def test_a_number_beyond_the_record_is_refused(trap: RunningTrap) -> None:
    last = trap.client.status()["record"]["last_seq"]
    with pytest.raises(BadRequest, match="another record"):
        next(trap.client.follow(last + 1000))


def test_following_without_a_number_begins_now(trap: RunningTrap) -> None:
    last = trap.client.status()["record"]["last_seq"]

    def stop_until_seen() -> None:
        with over_socket(trap) as http:
            while not seen.wait(0.05):
                http.post("/v1/stop")

    seen = threading.Event()
    stopping = threading.Thread(target=stop_until_seen)
    stopping.start()
    assert next(trap.client.follow())["seq"] > last
    seen.set()
    stopping.join()


def test_a_reader_that_does_not_read_hurts_nobody_and_misses_nothing(trap: RunningTrap) -> None:
    begin = trap.client.status()["record"]["last_seq"]
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as slow:
        slow.connect(str(trap.socket_path))
        slow.sendall(f"GET /v1/stream?after={begin} HTTP/1.1\r\nHost: localhost\r\n\r\n".encode())
        # More than sockets and buffers hold: each note is a kilobyte
        longest_s = 0.0
        for _ in range(600):
            began = time.monotonic()
            trap.client.stop("x" * 500)
            longest_s = max(longest_s, time.monotonic() - began)
        assert longest_s < 2.0
        last = begin + 600
        fast = [one["seq"] for one in itertools.islice(trap.client.follow(begin), 600)]
        assert fast == list(range(begin + 1, last + 1))
        slow.settimeout(20)
        text = b""
        while f"id: {last}\n".encode() not in text:
            text += slow.recv(1 << 16)
    late = [int(line.removeprefix(b"id: ")) for line in text.splitlines() if line.startswith(b"id: ")]
    assert late[:601] == list(range(begin, last + 1))


def test_the_client_follows_across_a_restart_of_the_daemon(tmp_path: Path) -> None:
    seen: list[int] = []
    with running_trap(tmp_path) as trap:
        followed = trap.client.follow(0, patience_s=30)
        seen += [next(followed)["seq"] for _ in range(3)]
        trap.daemon.stop()
        trap.daemon.start()
        last = trap.client.status()["record"]["last_seq"]
        seen += [next(followed)["seq"] for _ in range(last - 3)]
    assert seen == list(range(1, last + 1))


def test_a_daemon_that_stays_away_is_told(tmp_path: Path) -> None:
    with running_trap(tmp_path) as trap:
        followed = trap.client.follow(0, patience_s=0)
        next(followed)
        trap.daemon.stop()
        with pytest.raises(DaemonUnreachable, match=r"trapd\.sock"):
            list(followed)


def test_open_streams_do_not_hold_up_the_stop(tmp_path: Path) -> None:
    with running_trap(tmp_path) as trap:
        others = [trap.over_tcp(trap.client.new_token("viewer", "read")["token"]).follow(0), trap.client.follow(0)]
        for followed in others:
            next(followed)
        began = time.monotonic()
        trap.daemon.stop()
        assert time.monotonic() - began < 1.5
