"""The sockets: whose they are, what is left of them, how fast they answer, how promptly they close."""

from __future__ import annotations

import socket
import statistics
import time
from pathlib import Path

import httpx2
import pytest
from fastapi import FastAPI

from tests.running import RunningTrap
from trapd.api.server import ApiServer
from trapd.errors import ConfigError, Locked


class NoViewers:
    def end(self) -> None:
        pass


def app() -> FastAPI:
    one = FastAPI()
    one.state.viewers = NoViewers()

    @one.get("/")
    async def hello() -> str:
        return "hello"

    return one


def get(path: Path) -> int:
    with httpx2.Client(transport=httpx2.HTTPTransport(uds=str(path)), base_url="http://localhost") as http:
        return http.get("/").status_code


def test_it_serves_both_sockets_and_leaves_neither(tmp_path: Path) -> None:
    path = tmp_path / "made for it" / "trapd.sock"
    server = ApiServer(app(), "127.0.0.1", 0, path)
    server.start()
    assert get(path) == 200
    assert httpx2.get(f"http://127.0.0.1:{server.address[1]}/").status_code == 200
    server.stop()
    server.stop()
    assert not path.exists()
    with pytest.raises(OSError, match="refused"):
        socket.create_connection(server.address, timeout=1)


def test_it_can_be_started_again(tmp_path: Path) -> None:
    for _ in range(2):
        server = ApiServer(app(), "127.0.0.1", 0, tmp_path / "trapd.sock")
        server.start()
        assert get(tmp_path / "trapd.sock") == 200
        server.stop()


def test_the_socket_that_a_dead_daemon_left_is_replaced(tmp_path: Path) -> None:
    path = tmp_path / "trapd.sock"
    with socket.socket(socket.AF_UNIX) as dead:
        dead.bind(str(path))
    server = ApiServer(app(), "127.0.0.1", 0, path)
    server.start()
    try:
        assert get(path) == 200
    finally:
        server.stop()


def test_the_socket_of_a_daemon_that_lives_is_not_taken(tmp_path: Path) -> None:
    path = tmp_path / "trapd.sock"
    first = ApiServer(app(), "127.0.0.1", 0, path)
    first.start()
    try:
        with pytest.raises(Locked, match="daemon that is running"):
            ApiServer(app(), "127.0.0.1", 0, path).start()
        assert get(path) == 200
    finally:
        first.stop()


@pytest.mark.parametrize("kind", ["file", "folder", "link"])
def test_what_is_no_socket_is_not_replaced(tmp_path: Path, kind: str) -> None:
    path, other = tmp_path / "trapd.sock", tmp_path / "precious"
    other.write_text("data")
    if kind == "file":
        path.write_text("data")
    elif kind == "folder":
        path.mkdir()
    else:
        path.symlink_to(other)
    with pytest.raises(ConfigError, match="is no socket"):
        ApiServer(app(), "127.0.0.1", 0, path).start()
    assert path.exists()
    assert other.read_text() == "data"


def test_a_port_that_is_taken_is_told_and_no_socket_is_left(tmp_path: Path) -> None:
    path = tmp_path / "trapd.sock"
    with socket.create_server(("127.0.0.1", 0)) as other:
        port = other.getsockname()[1]
        with pytest.raises(Locked, match=f"127.0.0.1:{port} is in use"):
            ApiServer(app(), "127.0.0.1", port, path).start()
    assert not path.exists()


@pytest.mark.parametrize("host", ["192.0.2.1", "no-such-host.invalid"])
def test_an_address_that_is_not_this_machines_is_told(tmp_path: Path, host: str) -> None:
    """192.0.2.0/24 is TEST-NET-1, nobody's (RFC 5737); .invalid never resolves (RFC 6761)."""
    with pytest.raises(ConfigError, match="nothing was opened"):
        ApiServer(app(), host, 0, tmp_path / "trapd.sock").start()


def test_a_path_too_long_for_a_socket_is_told(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="cannot be made"):
        ApiServer(app(), "127.0.0.1", 0, tmp_path / ("x" * 120)).start()


def test_answers_are_not_held_back_by_the_wire(trap: RunningTrap, tcp: httpx2.Client) -> None:
    """Without TCP_NODELAY, Nagle's algorithm and delayed acknowledgement cost 40 ms an answer (RFC 1122, 4.2.3.2)."""
    tcp.get("/v1/health")
    times = []
    for _ in range(15):
        began = time.perf_counter()
        tcp.get("/v1/health")
        times.append(time.perf_counter() - began)
    assert statistics.median(times) < 0.030
