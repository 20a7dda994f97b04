"""Claims and pauses are data: others respect them, off ends them, and they outlive the daemon."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

from tests.controller.bench import Bench, bench
from trapd.errors import BadRequest, Conflict
from trapd.setpoint import Request


def soon_us(seconds: float) -> int:
    return time.time_ns() // 1000 + int(seconds * 1e6)


def ask_as(made: Bench, author: str, kind: str, **fields: object) -> dict[str, object]:
    request = Request(kind=kind, author=author, **{"why": "test", **fields})  # type: ignore[arg-type]
    return made.controller.submit(request).done.result(30)


@pytest.fixture
def made(tmp_path: Path):  # type: ignore[no-untyped-def]
    with bench(tmp_path) as one:
        yield one


def test_under_a_claim_others_need_interrupt_and_the_claimant_does_not(made: Bench) -> None:
    ask_as(made, "ada", "claim", why="aligning")
    with pytest.raises(Conflict, match=r"ada claims the trap \(aligning\); --interrupt goes ahead .* nothing was sent"):
        ask_as(made, "ben", "ions", contents=None)
    with pytest.raises(BadRequest, match="say what is in the trap"):  # it came as far as the request itself
        ask_as(made, "ada", "ions", contents=None)
    with pytest.raises(BadRequest, match="say what is in the trap"):
        ask_as(made, "ben", "ions", contents=None, interrupt=True)


def test_a_refused_request_is_in_the_record_with_the_claim_as_its_reason(made: Bench) -> None:
    ask_as(made, "ada", "claim", why="aligning")
    with pytest.raises(Conflict):
        ask_as(made, "ben", "on")
    made.wait(lambda: bool(made.entries("result")))
    assert [(e.actor, e.data["state"], e.data["code"]) for e in made.entries("result")] == [
        ("ben", "failed", "conflict")
    ]


def test_nobody_claims_a_claimed_trap_nor_releases_it_by_accident(made: Bench) -> None:
    ask_as(made, "ada", "claim")
    with pytest.raises(Conflict):
        ask_as(made, "ben", "claim")
    with pytest.raises(Conflict, match="ada claims the trap"):
        ask_as(made, "ben", "release")
    assert ask_as(made, "ben", "release", interrupt=True)["claim"] is None
    assert [e.data["state"] for e in made.entries("claim")] == ["claimed", "released"]


def test_off_ends_a_claim_and_needs_no_interrupt(made: Bench) -> None:
    ask_as(made, "ada", "claim")
    assert ask_as(made, "ben", "off")["off"] is True
    made.wait(lambda: made.controller.situation.claim is None)
    made.wait(lambda: len(made.entries("claim")) == 2)
    last = made.entries("claim")[-1]
    assert (last.data["state"], last.data["who"], last.actor) == ("revoked", "ada", "ben")


def test_a_claim_ends_by_itself_at_its_time(made: Bench) -> None:
    ask_as(made, "ada", "claim", until_us=soon_us(0.3))
    made.wait(lambda: soon_us(0) > (made.controller.situation.claim or made).until_us)  # type: ignore[union-attr]
    with pytest.raises(BadRequest, match="say what is in the trap"):
        ask_as(made, "ben", "ions", contents=None)
    assert made.controller.situation.claim is None


@pytest.mark.parametrize("kind", ["claim", "pause"])
def test_a_time_that_has_passed_is_a_mistake_and_changes_nothing(made: Bench, kind: str) -> None:
    with pytest.raises(BadRequest, match="has passed already; nothing was changed"):
        ask_as(made, "ada", kind, until_us=soon_us(-1))
    assert made.entries(kind) == []


@pytest.mark.parametrize("kind", ["claim", "pause"])
def test_a_reason_is_required(made: Bench, kind: str) -> None:
    with pytest.raises(BadRequest, match="a reason is required"):
        ask_as(made, "ada", kind, until_us=soon_us(60), why=" ")


def test_a_pause_has_an_end_and_is_ended_by_resume(made: Bench) -> None:
    with pytest.raises(BadRequest, match="say until when"):
        ask_as(made, "ada", "pause")
    with pytest.raises(Conflict, match="not paused"):
        ask_as(made, "ada", "resume")
    until_us = soon_us(600)
    assert ask_as(made, "ada", "pause", until_us=until_us)["pause"]["until_us"] == until_us  # type: ignore[index]
    assert ask_as(made, "ben", "resume")["pause"] is None
    assert [e.data["state"] for e in made.entries("pause")] == ["paused", "resumed"]


def test_claim_and_pause_outlive_the_daemon(tmp_path: Path) -> None:
    with bench(tmp_path) as first:
        ask_as(first, "ada", "claim", why="all night")
        ask_as(first, "ada", "pause", why="all night", until_us=soon_us(600))
        before = first.controller.situation
    with bench(tmp_path) as second:
        after = second.controller.situation
        assert (after.claim, after.pause) == (before.claim, before.pause)
        assert after.claim is not None


def test_a_claim_that_cannot_be_written_is_no_claim(made: Bench, monkeypatch: pytest.MonkeyPatch) -> None:
    from concurrent.futures import Future

    from trapd.errors import RecordUnwritable

    def failing(*_: object) -> Future[object]:
        future: Future[object] = Future()
        future.set_exception(RecordUnwritable("no space left"))
        return future

    monkeypatch.setattr(made.record, "append", failing)
    with pytest.raises(RecordUnwritable):
        ask_as(made, "ada", "claim")
    assert made.controller.situation.claim is None
