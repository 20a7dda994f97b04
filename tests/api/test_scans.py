"""Scans through the API: begun, followed, stopped, found again; and what the schedule does beside them."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx2
import pytest

from tests.api.conftest import over_socket
from tests.api.test_errors import assert_shape
from tests.controller.test_faults import DeadDisk
from tests.resonance import DIP_HZ, SCANNED, WIDTH_HZ, darken, resonant_trap
from tests.running import RunningTrap
from trapd.client import Client, JsonEntry
from trapd.client.following import wait_result
from trapd.errors import BadRequest, Conflict, DaemonUnreachable, NotFound, RecordUnwritable, Superseded

ENDLESS = SCANNED.replace('target = "100 Hz"', 'target = "1 mHz"')
"""Its scan goes on through all its passes."""


@pytest.fixture(scope="module")
def scanned(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningTrap]:
    """One scan was made of it."""
    with resonant_trap(tmp_path_factory.mktemp("scanned")) as trap:
        trap.client.scan("x", why="for the tests")
        yield trap


@pytest.fixture
def endless(tmp_path: Path) -> Iterator[RunningTrap]:
    with resonant_trap(tmp_path, ENDLESS) as trap:
        yield trap


def begin(trap: RunningTrap, **more: Any) -> int:
    """A scan under way that has counted something; the entry of its request."""
    entry: int = trap.client.scan("x", wait=False, **more)["entry"]
    for one in trap.client.follow(entry):
        if one["kind"] == "scan_point" and one["data"]["frequency_hz"] is not None:
            break
    return entry


def test_a_scan_is_answered_202_with_its_plan_and_its_end_is_a_finding(scanned: RunningTrap) -> None:
    with over_socket(scanned) as http:
        answer = http.post("/v1/scans", json={"scan": "x"})
    begun = answer.json()
    assert answer.status_code == 202
    assert begun["accepted"] is True
    plan = begun["plan"]
    assert plan["low_hz"] < plan["predicted_hz"] < plan["high_hz"]
    # 40Ca+ at that point: 2.155 MHz, computed by another method (tests/guard/test_verdict.py)
    assert plan["predicted_hz"] == pytest.approx(2.155e6, abs=500)
    finding = scanned.client.wait_finding(begun["entry"])
    assert scanned.client.entry(finding["seq"])["kind"] == "finding"


def test_the_client_returns_the_finding_and_its_number_is_where_the_dip_is(scanned: RunningTrap) -> None:
    seen: list[str] = []
    finding = scanned.client.scan("x", why="where is it", progress=lambda one: seen.append(one["kind"]))
    assert finding["state"] == "found"
    assert abs(finding["frequency_hz"] - DIP_HZ) < 5 * finding["uncertainty_hz"]
    assert finding["uncertainty_hz"] < 100.0
    assert seen.count("scan_point") == finding["points"]
    assert "finding" in seen


def test_one_scan_is_told_with_every_point_of_it(scanned: RunningTrap) -> None:
    before = len(scanned.rack.received)
    request = scanned.client.scan("x")["request"]
    told = scanned.client.scan_at(request)
    assert told["request"]["data"]["scan"] == "x"
    assert told["finding"]["request"] == told["plan"]["request"] == request
    assert told["result"]["state"] == "done"
    assert told["estimate"]["pass_number"] == told["finding"]["passes"] - 1
    assert len(told["points"]) == told["finding"]["points"]
    bursts = sum("INIT" in one.text for one in scanned.rack.received_after(before) if one.instrument == "tickle")
    assert sum(point["frequency_hz"] is not None for point in told["points"]) == bursts


def test_an_entry_that_is_no_scan_is_a_404(scanned: RunningTrap) -> None:
    with pytest.raises(NotFound, match="no request for a scan"):
        scanned.client.scan_at(1)
    moved = scanned.client.set({"shim_x": 0.0}, why="a move")["data"]["request"]
    with pytest.raises(NotFound, match="no request for a scan"):
        scanned.client.scan_at(moved)
    with pytest.raises(NotFound):
        scanned.client.scan_at(10**9)


def test_the_scans_of_the_file_are_listed_each_with_its_newest_finding(scanned: RunningTrap) -> None:
    newest = scanned.client.scan("x")
    (listed,) = scanned.client.scans()
    assert listed["finding"].items() >= newest.items()
    expected = {"name": "x", "mode": "x", "species": None, "tickle_v": 0.5e-3, "span_hz": 200e3, "dwell_s": 5e-3}
    assert listed.items() >= expected.items()
    assert listed["target_hz"] == 100.0


def test_the_scans_made_are_listed_with_how_they_ended(scanned: RunningTrap) -> None:
    client, begin = scanned.client, datetime.now(UTC)
    finding = client.scan("x", why="to be listed")
    (row,) = client.scans_made(limit=1)
    assert (row["seq"], row["finding"], row["state"]) == (finding["request"], finding["seq"], "found")
    assert (row["frequency_hz"], row["why"], row["scan"]) == (finding["frequency_hz"], "to be listed", "x")
    assert client.scans_made(since=begin) == client.scans_made(after=row["seq"] - 1) == [row]
    assert client.scans_made(after=row["seq"]) == client.scans_made(scan="y") == client.scans_made(state="none") == []
    assert client.scans_made(who="nobody") == []
    assert row not in client.scans_made(until=begin)


def test_measured_frequencies_can_be_asked_for(scanned: RunningTrap) -> None:
    client, begin, finding = scanned.client, datetime.now(UTC), scanned.client.scan("x", why="to be found again")
    (row,) = client.frequencies(scan="x", species="40Ca+", mode="x", limit=1)
    assert (row["finding"], row["frequency_hz"]) == (finding["seq"], finding["frequency_hz"])
    assert row["why"] == "to be found again"
    assert row["low_95_hz"] < row["frequency_hz"] < row["high_95_hz"]
    assert client.frequencies(since=begin) == [row]
    assert client.frequencies(after=row["seq"]) == []
    assert row not in client.frequencies(until=begin)
    for nothing in ({"scan": "y"}, {"species": "88Sr+"}, {"mode": "z"}):
        assert client.frequencies(**nothing) == []  # type: ignore[arg-type]


def test_status_compares_what_was_measured_with_what_is_predicted(scanned: RunningTrap) -> None:
    finding = scanned.client.scan("x")
    (here,) = scanned.client.status()["frequencies"]
    assert here["measured_hz"] == finding["frequency_hz"]
    assert here["same_setpoints"] is True
    assert here["difference_hz"] == here["measured_hz"] - here["predicted_hz"]
    scanned.client.set({"endcaps": 125.0}, why="elsewhere")
    (elsewhere,) = scanned.client.status()["frequencies"]
    scanned.client.go("work", why="and back")
    assert elsewhere["same_setpoints"] is False
    assert elsewhere["difference_hz"] == pytest.approx(here["difference_hz"])
    assert elsewhere["predicted_hz"] < here["predicted_hz"] - 1000.0, "more on the endcaps is less along x"


def test_status_tells_of_the_scan_under_way_and_stop_ends_it(endless: RunningTrap) -> None:
    request = begin(endless)
    scanning = endless.client.status()["situation"]["scanning"]
    assert (scanning["request"], scanning["scan"], scanning["species"]) == (request, "x", "40Ca+")
    assert endless.client.stop("enough")["stopped"] is True
    with pytest.raises(Superseded) as caught:
        endless.client.wait_finding(request)
    assert caught.value.details["state"] == "stopped"
    told = endless.client.scan_at(request)
    assert told["finding"] is None
    assert told["result"]["state"] == "stopped"
    assert told["points"]


def test_another_persons_scan_is_not_stopped_by_accident(endless: RunningTrap) -> None:
    secret = endless.client.new_token("ben", "operate")["token"]
    request = begin(endless, why="mine")
    with endless.over_tcp(secret) as ben:
        with pytest.raises(Conflict, match="interrupt"):
            ben.set({"endcaps": 121.0}, why="in a hurry")
        with pytest.raises(Conflict, match="interrupt"):
            ben.scan("x")
        ben.set({"endcaps": 121.0}, why="in a hurry", interrupt=True)
    with pytest.raises(Superseded):
        endless.client.wait_finding(request)


def test_a_scan_over_which_the_disk_dies_is_not_waited_for_forever(endless: RunningTrap) -> None:
    def kill_disk(one: JsonEntry) -> None:
        if one["kind"] == "scan_point":
            disk.dead = True

    desk = endless.daemon.controller._desk
    desk.record = disk = DeadDisk(desk.record)
    with pytest.raises(RecordUnwritable, match="its end cannot be written"):
        endless.client.scan("x", progress=kill_disk)
    disk.dead = False


def test_a_daemon_that_goes_away_over_a_scan_is_not_said_to_have_sent_nothing() -> None:
    def lost() -> Iterator[JsonEntry]:
        yield {"seq": 8, "kind": "scan_point", "data": {}}
        raise DaemonUnreachable("no daemon answers at trapd.sock (refused); nothing was sent")

    with pytest.raises(
        DaemonUnreachable, match=r"while request 7 was under way; every output.*\(no daemon answers"
    ) as caught:
        wait_result(lost(), 7, None, dict)
    assert "nothing was sent" not in str(caught.value)


def test_a_scan_that_the_file_does_not_name_is_a_404_with_those_it_does(scanned: RunningTrap) -> None:
    with pytest.raises(NotFound, match="there are: x"):
        scanned.client.scan("y")


def test_with_nobody_home_nothing_is_tickled(tmp_path: Path) -> None:
    with resonant_trap(tmp_path) as trap:
        darken(trap.rack, rate_per_s=100.0)
        before = len(trap.rack.received)
        with pytest.raises(Conflict, match="below the floor of 500"):
            trap.client.scan("x")
        assert not [
            one for one in trap.rack.received_after(before) if "INIT" in one.text and one.instrument == "tickle"
        ]


def test_no_resonance_is_a_finding_and_no_frequency(tmp_path: Path) -> None:
    shallow = SCANNED.replace('mode = "x"', 'mode = "x"\nmin_contrast = "50 %"\npasses = 2')
    with resonant_trap(tmp_path, shallow) as trap:
        darken(trap.rack, contrast=0.0)
        finding = trap.client.scan("x")
        assert finding["state"] == "none"
        assert finding["frequency_hz"] is None
        assert trap.client.frequencies() == []
        assert trap.client.scans()[0]["finding"]["state"] == "none"


def test_what_is_due_is_told_and_what_was(scanned: RunningTrap) -> None:
    due = scanned.client.due()
    assert due["due"] == []
    (upcoming,) = due["upcoming"]
    assert (upcoming["schedule"], upcoming["scan"]) == ("x", "x")
    ahead_s = upcoming["due_us"] / 1e6 - datetime.now(UTC).timestamp()
    assert 0 < ahead_s <= 30 * 60
    assert upcoming["due_us"] % (30 * 60 * 10**6) == 0
    assert scanned.client.status()["upcoming"] == due["upcoming"]


def test_a_trap_without_scans_says_so(trap: RunningTrap) -> None:
    assert trap.client.trap()["scans"] == {}
    assert trap.client.trap()["schedule"] == []
    assert trap.client.scans() == []
    assert trap.client.status()["frequencies"] == []
    assert trap.client.due() == {"due": [], "upcoming": []}
    with pytest.raises(NotFound, match="there is none"):
        trap.client.scan("x")


def test_the_trap_describes_its_scans_and_its_schedule(scanned: RunningTrap) -> None:
    said = scanned.client.trap()
    assert said["scans"]["x"]["width_hz"] == WIDTH_HZ
    assert said["schedule"] == [{"name": "x", "scan": "x", "cron": "*/30 * * * *"}]


@pytest.mark.parametrize(
    "body",
    [
        {},
        {"scan": 1},
        {"scan": ""},
        {"scan": "x", "interrupt": "yes"},
        {"scan": "x", "interrupt": 1},
        {"scan": "x", "interrupt": None},
        {"scan": "x", "why": "a\nb"},
        {"scan": "x", "why": None},
        {"scan": "x", "tickle_v": 1.0},
    ],
)
def test_a_scan_is_asked_for_strictly(local: httpx2.Client, body: dict[str, Any]) -> None:
    assert_shape(local.post("/v1/scans", json=body), 422, "bad_request")


@pytest.mark.parametrize("interrupt", ["true", 1, None])
@pytest.mark.parametrize(
    ("path", "body"),
    [
        ("set", {"values": {"endcaps": 120.0}}),
        ("go", {"point": "work"}),
        ("back", {}),
        ("on", {}),
        ("empty", {}),
        ("ions", {"presence": "none"}),
    ],
)
def test_to_interrupt_is_said_with_a_boolean(
    local: httpx2.Client, path: str, body: dict[str, Any], interrupt: object
) -> None:
    answer = local.post(f"/v1/{path}", json={**body, "why": "a test", "interrupt": interrupt})
    assert "interrupt" in assert_shape(answer, 422, "bad_request")["message"]


@pytest.mark.parametrize(
    "question",
    [
        "scans?limit=0",
        "scans?newest=1",
        "frequencies?mode=w",
        "frequencies?unknown=1",
        "frequencies?since=noon",
        "due?state=done",
        "due?limit=0",
    ],
)
def test_a_question_about_scans_that_makes_no_sense_is_a_422(local: httpx2.Client, question: str) -> None:
    assert_shape(local.get(f"/v1/{question}"), 422, "bad_request")


def test_the_client_refuses_what_cannot_be_asked(scanned: RunningTrap) -> None:
    with Client(scanned.socket_path) as client, pytest.raises(BadRequest):
        client.frequencies(limit=0)
