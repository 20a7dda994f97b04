"""Claims and pauses over HTTP: who may go ahead, until when, and what ends them."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from typing import Any

import httpx2
import pytest

from tests.api.test_errors import assert_shape
from tests.running import RunningTrap
from trapd.client import Client
from trapd.errors import BadRequest, Conflict

SOON = datetime.now(UTC) + timedelta(hours=1)


@pytest.fixture
def ben(trap: RunningTrap) -> Iterator[Client]:
    """Somebody else, who operates; nothing is claimed or paused before and after."""
    names = [one["name"] for one in trap.client.tokens()]
    if "ben" in names:
        trap.client.revoke_token("ben")
    with trap.over_tcp(trap.client.new_token("ben", "operate")["token"]) as client:
        yield client
    situation = trap.client.status()["situation"]
    if situation["claim"]:
        trap.client.release(interrupt=True)
    if situation["pause"]:
        trap.client.resume()


def test_a_claim_keeps_others_out_until_it_is_released(trap: RunningTrap, ben: Client) -> None:
    answer = trap.client.claim("aligning", until=SOON)
    assert answer["claim"] == trap.client.status()["situation"]["claim"]
    assert answer["claim"]["until_us"] == round(SOON.timestamp() * 1e6)
    assert trap.client.entry(answer["entry"])["kind"] == "claim"
    with pytest.raises(Conflict, match="aligning"):
        ben.set({"endcaps": 121.0}, why="in a hurry")
    trap.client.set({"endcaps": 121.0}, why="mine")
    assert trap.client.release("done")["claim"] is None
    ben.set({"endcaps": 120.0}, why="now I may")


def test_a_claim_gives_way_to_whoever_interrupts(trap: RunningTrap, ben: Client) -> None:
    trap.client.claim("aligning")
    ben.set({"endcaps": 121.0}, why="it matters", interrupt=True)
    ben.go("work", why="it matters", interrupt=True)
    ben.back(why="it matters", interrupt=True)
    with pytest.raises(Conflict):
        ben.release()
    assert ben.claim("my turn", interrupt=True)["claim"]["who"] == "ben"
    assert ben.release("she went home")["claim"] is None


def test_a_pause_has_an_end_and_can_be_ended_sooner(trap: RunningTrap, ben: Client) -> None:
    paused = ben.pause(SOON, "visitors")["pause"]
    assert (paused["who"], paused["why"]) == ("ben", "visitors")
    assert trap.client.status()["situation"]["pause"] == paused
    assert trap.client.resume()["pause"] is None
    with pytest.raises(Conflict):
        trap.client.resume()


def test_a_time_is_meant_with_its_offset(trap: RunningTrap, ben: Client) -> None:
    """12:00 two hours east of Greenwich is 10:00 UTC (RFC 3339, section 4.2) [mem]."""
    claim = trap.client.claim("a long one", until="2100-01-01T12:00:00+02:00")["claim"]
    assert claim["until_us"] == datetime(2100, 1, 1, 10, tzinfo=UTC).timestamp() * 1e6


@pytest.mark.parametrize("path", ["claim", "pause"])
@pytest.mark.parametrize(
    "until", ["2020-01-01T00:00:00Z", "2100-01-01T12:00:00", "tomorrow", "18:00", "", 1_900_000_000, True]
)
def test_a_time_that_has_passed_or_is_none_is_a_422(local: httpx2.Client, path: str, until: object) -> None:
    assert_shape(local.post(f"/v1/{path}", json={"why": "a test", "until": until}), 422, "bad_request")


@pytest.mark.parametrize(
    ("path", "body"),
    [
        ("claim", {}),
        ("claim", {"why": " "}),
        ("pause", {"why": "a test"}),
        ("pause", {"until": "2100-01-01T00:00:00Z"}),
        ("release", {"interrupt": "yes"}),
        ("resume", {"interrupt": True}),
    ],
)
def test_claims_and_pauses_are_asked_for_strictly(local: httpx2.Client, path: str, body: dict[str, Any]) -> None:
    assert_shape(local.post(f"/v1/{path}", json=body), 422, "bad_request")


@pytest.mark.parametrize("path", ["release", "resume"])
def test_what_there_is_not_cannot_be_ended(local: httpx2.Client, path: str) -> None:
    assert_shape(local.post(f"/v1/{path}"), 409, "conflict")


def test_the_client_says_what_was_wrong_with_a_time(trap: RunningTrap) -> None:
    with pytest.raises(BadRequest, match="passed"):
        trap.client.claim("too late", until=datetime(2020, 1, 1, tzinfo=UTC))
