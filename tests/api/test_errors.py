"""Every failure, on every route, has the one shape; and its code and status are those of the tree."""

from __future__ import annotations

import json
import socket
from typing import Any

import httpx2
import pytest

from tests.api.routes import ROUTES, WITH_BODY, Route, named
from tests.running import RunningTrap
from trapd import errors
from trapd.api.answers import problem

JSON = {"Content-Type": "application/json"}


def assert_shape(answer: httpx2.Response, status: int, code: str) -> dict[str, Any]:
    found: dict[str, Any] = answer.json()
    assert (answer.status_code, found.get("code")) == (status, code), answer.text
    assert set(found) == {"code", "message", "details"}
    assert isinstance(found["message"], str)
    assert found["message"]
    assert isinstance(found["details"], dict)
    assert answer.headers["X-Request-Id"]
    return found


def test_the_routes_are_those_of_the_openapi_document(tcp: httpx2.Client) -> None:
    document = tcp.get("/v1/openapi.json").json()
    described = {(method.upper(), path) for path, methods in document["paths"].items() for method in methods}
    assert described == {(route.method, route.path) for route in ROUTES}


def test_every_error_of_the_document_has_the_shape(tcp: httpx2.Client) -> None:
    document = tcp.get("/v1/openapi.json").json()
    shape = {"$ref": "#/components/schemas/Problem"}
    assert set(document["components"]["schemas"]["Problem"]["properties"]) == {"code", "message", "details"}
    for path, methods in document["paths"].items():
        for method, described in methods.items():
            for status, answer in described["responses"].items():
                if not status.startswith("2"):
                    assert answer["content"]["application/json"]["schema"] == shape, (method, path, status)


@pytest.mark.parametrize("path", ["/docs", "/redoc", "/openapi.json", "/", "/v1", "/v1/set/", "/v1/nothing"])
def test_what_is_not_there_is_a_404_of_that_shape(local: httpx2.Client, path: str) -> None:
    assert_shape(local.get(path), 404, "not_found")


@pytest.mark.parametrize("route", ROUTES, ids=named)
def test_a_wrong_method_is_a_405_of_that_shape(local: httpx2.Client, route: Route) -> None:
    answer = local.request("PATCH", route.url)
    assert_shape(answer, 405, "bad_request")
    assert route.method in answer.headers["Allow"]


@pytest.mark.parametrize("route", WITH_BODY, ids=named)
@pytest.mark.parametrize(
    "raw", [b"{", b"null", b"[]", b'"text"', b"\xff\xfe", b"[" * 60_000, b'{"unknown": 1}', b'{"\\ud800": 1}']
)
def test_a_body_that_is_none_is_a_422_of_that_shape(local: httpx2.Client, route: Route, raw: bytes) -> None:
    assert_shape(local.request(route.method, route.url, content=raw, headers=JSON), 422, "bad_request")


@pytest.mark.parametrize("route", WITH_BODY, ids=named)
def test_a_body_that_is_not_declared_as_json_is_a_422(local: httpx2.Client, route: Route) -> None:
    raw = json.dumps(route.body).encode()
    answer = local.request(route.method, route.url, content=raw, headers={"Content-Type": "text/plain"})
    assert_shape(answer, 422, "bad_request")


@pytest.mark.parametrize("route", ROUTES, ids=named)
def test_a_body_over_64_kib_is_a_413_of_that_shape(local: httpx2.Client, route: Route) -> None:
    answer = local.request(route.method, route.url, content=b" " * (64 * 1024 + 1), headers=JSON)
    assert_shape(answer, 413, "bad_request")


def test_a_body_of_64_kib_is_not_too_long(local: httpx2.Client) -> None:
    raw = b'{"values": {}}'.ljust(64 * 1024)
    assert local.post("/v1/judge", content=raw, headers=JSON).status_code == 200


def test_a_body_that_does_not_say_how_long_it_is_is_measured(local: httpx2.Client) -> None:
    def chunks() -> Any:
        for _ in range(9):
            yield b" " * 8192

    assert_shape(local.post("/v1/judge", content=chunks(), headers=JSON), 413, "bad_request")


@pytest.mark.parametrize(
    "path",
    [
        "/v1/entries?after=-1",
        "/v1/entries?after=1e3",
        "/v1/entries?limit=0",
        "/v1/entries?limit=1001",
        "/v1/entries?unknown=1",
        "/v1/entries?since=yesterday",
        "/v1/entries?since=2025-01-01T00:00:00",
        "/v1/entries/none",
        "/v1/entries/99999999999999999999",
        "/v1/setpoints?unknown=1",
        "/v1/state?at=99999999999999999999",
        "/v1/state?at=noon",
        "/v1/stream?after=-1",
        "/v1/stream?after=9000000000000000000",
        "/v1/verify?head=12",
    ],
)
def test_a_question_that_makes_no_sense_is_a_422_of_that_shape(local: httpx2.Client, path: str) -> None:
    assert_shape(local.get(path), 422, "bad_request")


def test_a_bug_is_a_500_of_that_shape(
    trap: RunningTrap, local: httpx2.Client, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def broken(*_: object) -> None:
        raise RuntimeError("nobody expected this")

    monkeypatch.setattr("trapd.api.judging.judge", broken)
    answer = local.post("/v1/judge", json={"values": {}}, headers={"X-Request-Id": "abc-1"})
    assert "nobody expected this" in assert_shape(answer, 500, "bug")["message"]
    assert answer.headers["X-Request-Id"] == "abc-1"
    (logged,) = [one for one in caplog.records if "abc-1" in one.getMessage()]
    assert logged.exc_info is not None, "a bug is the one error with a traceback"


def test_a_verdict_that_cannot_be_computed_does_not_hide_the_state(
    trap: RunningTrap, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_: object) -> None:
        raise RuntimeError("nobody expected this")

    monkeypatch.setattr("trapd.api.judging.judge", broken)
    trap.client.set({"shim_x": 0.25}, why="a state whose verdict is not known yet")
    status = trap.client.status()
    assert status["verdict"] is None
    assert status["situation"]["values"]["shim_x"] == pytest.approx(0.25)


def test_what_is_no_http_gets_the_shape_too(trap: RunningTrap) -> None:
    with socket.create_connection(trap.daemon.address, timeout=10) as peer:
        peer.sendall(b"VOLT 5\n\n")
        answer = b"".join(iter(lambda: peer.recv(4096), b""))
    head, _, body = answer.partition(b"\r\n\r\n")
    assert head.startswith(b"HTTP/1.1 400 ")
    assert set(json.loads(body)) == {"code", "message", "details"}


def test_a_request_id_is_kept_when_it_can_be_and_made_when_not(local: httpx2.Client) -> None:
    assert local.get("/v1/health", headers={"X-Request-Id": "run-7"}).headers["X-Request-Id"] == "run-7"
    made = [local.get("/v1/health", headers=given).headers["X-Request-Id"] for given in ({}, {"X-Request-Id": 'a "b'})]
    assert all(one.isalnum() for one in made)
    assert made[0] != made[1]


TREE = [kind for kind in vars(errors).values() if isinstance(kind, type) and issubclass(kind, errors.TrapdError)]


@pytest.mark.parametrize("kind", TREE)
def test_every_error_of_the_tree_is_encoded_with_its_own_code_and_status(kind: type[errors.TrapdError]) -> None:
    answer = problem(kind("words", {"key": 1}))
    assert answer.status_code == kind.http_status
    assert json.loads(bytes(answer.body)) == {"code": kind.code, "message": "words", "details": {"key": 1}}
