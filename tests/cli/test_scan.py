"""``trapd scan``, and where its results are shown: a trap with a dip in its counts (tests/resonance.py)."""

from __future__ import annotations

import re
import sys
import threading
import xml.etree.ElementTree as ElementTree
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import Any
from unittest.mock import Mock

import pytest

from tests.cli.test_online import interrupt_once_it_waits
from tests.cli.test_program import in_a_terminal
from tests.cli.typed import Ended
from tests.cli.typed import trapd as typed
from tests.resonance import DIP_HZ, SCANNED, darken, resonant_trap
from tests.running import RunningTrap
from trapd.client import Client
from trapd.errors import NotConfirmed, Superseded, TrapdError

TWO_SCANS = SCANNED + (
    '[scans.shallow]\nmode = "x"\ntickle = "0.5 mV"\nspan = "60 kHz"\ndwell = "5 ms"\ntarget = "100 Hz"\n'
    'min_contrast = "50 %"\npasses = 2\n'
    '[scans.endless]\nmode = "x"\ntickle = "0.5 mV"\nspan = "60 kHz"\ndwell = "20 ms"\ntarget = "0.1 Hz"\npasses = 300\n'
)


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningTrap]:
    """Its scan x was made once."""
    with resonant_trap(tmp_path_factory.mktemp("scan"), TWO_SCANS) as trap:
        trap.client.scan("x", why="the first")
        yield trap


def trapd(running: RunningTrap, line: str) -> Ended:
    return typed(line, TRAPD_AT=str(running.path))


def test_a_scan_is_a_line_for_each_pass_and_one_for_the_result(running: RunningTrap) -> None:
    darken(running.rack, contrast=0.8)
    ended = trapd(running, "scan x --why 'after the bake'")
    darken(running.rack)
    assert ended.code == 0
    *passes, result, flag = ended.out.splitlines()
    assert [line.split(":")[0] for line in passes] == [f"pass {n} of 12" for n in range(1, len(passes) + 1)]
    number = re.match(r"found  (2\.15\d+) MHz ± (\d+) Hz, predicted 2\.155\d* MHz ± [0-9.]+ kHz: \+", result)
    assert number, result
    assert abs(float(number[1]) * 1e6 - DIP_HZ) < 5 * float(number[2])
    request = running.client.entries(kind="request", limit=1)[0]
    assert f"; deep (entry {request['seq']})" in result, "most of the light is more than the half that the flag allows"
    assert flag.startswith("  deep  The dip takes more than half of the counts")
    assert request["data"]["why"] == "after the bake"


def test_json_is_one_document_with_plan_and_finding(running: RunningTrap) -> None:
    answer = trapd(running, "scan x --json").json
    assert (answer["accepted"], answer["state"], answer["error"]) == (True, "done", None)
    assert answer["finding"]["request"] == answer["entry"]
    assert answer["plan"]["scan"] == "x"
    assert abs(answer["finding"]["frequency_hz"] - DIP_HZ) < 5 * answer["finding"]["uncertainty_hz"]


def test_a_scan_without_a_resonance_is_a_result(running: RunningTrap) -> None:
    darken(running.rack, contrast=0.0)
    ended = trapd(running, "scan shallow")
    darken(running.rack)
    assert ended.code == 0
    assert [line for line in ended.out.splitlines() if line.startswith("none  No resonance")]


def vanish(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every scan of these tests ends as one that lost its counts."""
    wait = Client.wait_finding

    def lost(client: Client, *asked: Any) -> dict[str, Any]:
        data = {"state": "vanished", "flags": ["counts_vanished"], "message": "They stayed under 500 /s.", "seq": 1}
        return {**wait(client, *asked), **data, "frequency_hz": None, "uncertainty_hz": None}

    monkeypatch.setattr(Client, "wait_finding", lost)


def test_counts_that_vanish_are_no_success_and_no_number(running: RunningTrap, monkeypatch: pytest.MonkeyPatch) -> None:
    vanish(monkeypatch)
    ended = trapd(running, "scan x")
    assert ended.code == NotConfirmed.exit_code == 4
    (line,) = [line for line in ended.out.splitlines() if line.startswith("vanished")]
    assert re.fullmatch(r"vanished  They stayed under 500 /s; counts_vanished \(entry \d+\)", line)
    answer = trapd(running, "scan x --json")
    assert (answer.code, answer.json["finding"]["state"]) == (4, "vanished")


def test_a_figure_that_fails_does_not_take_the_finding_with_it(
    running: RunningTrap, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = tmp_path / "x.svg"
    scan_at = Client.scan_at

    def too_late(client: Client, request: int) -> Any:
        out.touch()  # somebody else was faster
        return scan_at(client, request)

    monkeypatch.setattr(Client, "scan_at", too_late)
    ended = trapd(running, f"scan x -o {out}")
    assert ended.code == 2
    assert ended.out.splitlines()[-1].startswith(("found  ", "  "))
    assert "found  2.15" in ended.out
    assert "no figure was drawn" in ended.err
    out.unlink()
    answer = trapd(running, f"scan x -o {out} --json")
    assert (answer.code, answer.json["finding"]["state"], answer.json["figure"]) == (2, "found", None)
    assert "no figure was drawn" in answer.json["error"]


def test_a_folder_that_cannot_be_written_is_told_before_the_scan(
    running: RunningTrap, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("trapd.cli.scan.TemporaryFile", Mock(side_effect=PermissionError(13, "Permission denied")))
    last = running.client.status()["record"]["last_seq"]
    ended = trapd(running, f"scan x -o {tmp_path}/x.svg")
    assert ended.code == 2
    assert "cannot be written: Permission denied; nothing was sent" in ended.err
    assert running.client.entries(kind="request", after=last) == []


def test_a_figure_goes_into_a_new_file(running: RunningTrap, tmp_path: Path) -> None:
    out = tmp_path / "x.svg"
    ended = trapd(running, f"scan x -o {out}")
    assert ended.out.splitlines()[-1] == f"drawn into {out}"
    drawn = " ".join("".join(one.itertext()) for one in ElementTree.parse(out).getroot().iter())
    assert "north bench, scan x (x of 40Ca+)" in drawn
    assert "count rate (1/s)" in drawn


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ("scan y", '"y" is no scan of this trap; there are: x, shallow, endless; nothing was sent'),
        ("scan x -o x.png", "expected a name that ends in .svg; nothing was sent"),
        ("scan x -o {}/there.svg", "exists already; nothing was sent"),
        ("scan x -o {}/nowhere/x.svg", "is in no folder that exists; nothing was sent"),
        ("scan", "Missing argument 'NAME'"),
        ("record --scans --frequencies", "choose one"),
        ("record --due --who ada", "--who narrows other tables"),
        ("record --frequencies --kind finding", "--kind narrows entries"),
    ],
)
def test_a_mistake_is_a_sentence_and_nothing_is_tickled(
    running: RunningTrap, tmp_path: Path, line: str, said: str
) -> None:
    (tmp_path / "there.svg").touch()
    last = running.client.status()["record"]["last_seq"]
    ended = trapd(running, line.format(tmp_path))
    assert ended.code == 2
    assert said in ended.err
    assert not [one for one in running.client.entries(after=last) if one["kind"] == "request"]


def test_a_trap_file_without_scans_is_said(running: RunningTrap, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Client, "trap", Mock(return_value={"scans": {}}))
    assert "its trap file has no [scans]" in trapd(running, "scan x").err


def test_ctrl_c_stops_the_scan_and_says_so(running: RunningTrap, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Client, "wait_finding", Mock(side_effect=KeyboardInterrupt))
    ended = trapd(running, "scan endless --json")
    assert ended.code == 130
    assert ended.err.strip() == "the scan was stopped, its tickle goes off; every output holds"
    assert (ended.json["state"], ended.json["finding"], ended.json["error"]) == ("stopped", None, ended.err.strip())
    assert running.client.entry(ended.json["entry"])["data"]["kind"] == "scan"
    assert running.client.status()["situation"]["scanning"] is None
    assert running.client.entries(kind="result", limit=1)[0]["data"]["state"] == "stopped"


def test_ctrl_c_after_its_end_stops_nothing(running: RunningTrap, monkeypatch: pytest.MonkeyPatch) -> None:
    wait = Client.wait_finding

    def late(client: Client, *asked: object) -> None:
        wait(client, *asked)  # type: ignore[arg-type]
        raise KeyboardInterrupt

    monkeypatch.setattr(Client, "wait_finding", late)
    last = running.client.status()["record"]["last_seq"]
    ended = trapd(running, "scan x --json")
    assert ended.code == 130
    assert "the scan had ended already" in ended.err
    assert (ended.json["state"], ended.json["finding"]["state"]) == ("done", "found")
    assert running.client.entries(kind="halt", after=last) == []


def test_ctrl_c_before_its_turn_withdraws_a_scan_and_says_so(tmp_path: Path) -> None:
    slow = SCANNED.replace('slew = "500 V/s", step = "5 V"', 'slew = "2.5 V/s", step = "0.25 V"')
    assert slow != SCANNED
    with resonant_trap(tmp_path, slow) as trap:
        trap.client.set({"shim_x": 5.0}, why="a long way", wait=False)
        threading.Thread(target=interrupt_once_it_waits, args=(trap,), daemon=True).start()
        ended = trapd(trap, "scan x --json")
        assert ended.code == 130
        assert (ended.json["state"], ended.json["entry"]) == ("stopped", None)
        assert "withdrawn: whoever asked went away before its turn; nothing was sent" in ended.err
        assert trap.client.scans()[0]["finding"] is None


@pytest.mark.parametrize("kind", [Superseded, NotConfirmed])
def test_a_scan_that_ends_before_its_time_leaves_with_how(
    running: RunningTrap, monkeypatch: pytest.MonkeyPatch, kind: type[TrapdError]
) -> None:
    monkeypatch.setattr(Client, "wait_finding", Mock(side_effect=kind("why it ended", {"state": "stopped"})))
    ended = trapd(running, "scan x --json")
    running.client.stop()
    assert ended.code == kind.exit_code
    assert (ended.json["state"], ended.json["code"], ended.json["finding"]) == ("stopped", kind.code, None)


def test_nobody_home_is_a_refusal(running: RunningTrap) -> None:
    darken(running.rack, rate_per_s=100.0)
    ended = trapd(running, "scan x")
    darken(running.rack)
    assert ended.code == 3
    assert "below the floor of 500" in ended.err


def test_in_a_terminal_the_scan_is_drawn_and_nothing_runs_over_its_edge(running: RunningTrap) -> None:
    command = [sys.executable, "-m", "trapd.cli", "scan", "x"]
    shown = in_a_terminal(command, 80, TRAPD_AT=str(running.path))
    plain = re.sub(r"\x1b\[[0-9;?]*[a-zA-Z]", "", shown)
    assert "scan x: x of 40Ca+, tickle 0.5 mV, 5 ms a point" in plain
    assert "█" in plain
    assert re.search(r"f = 2\.15\d+ MHz ± \d+ Hz, \+", plain)
    assert max(map(len, plain.splitlines())) <= 80


@pytest.mark.parametrize(
    "line",
    [
        "status",
        "record --limit 30",
        "record --setpoints",
        "record --scans",
        "record --frequencies",
        "record --refused",
        "scan x",
    ],
)
def test_in_a_narrow_terminal_nothing_is_cut_off(running: RunningTrap, line: str) -> None:
    command = [sys.executable, "-m", "trapd.cli", *line.split()]
    shown = in_a_terminal(command, 60, TRAPD_AT=str(running.path))
    plain = re.sub(r"\x1b\[[0-9;?]*[a-zA-Z]", "", shown).replace("\r\n", "\n")
    assert plain.strip()
    assert "…" not in plain
    assert max(map(len, plain.splitlines())) <= 60
    whole = " ".join(plain.split())
    if line in ("status", "record --scans", "record --frequencies", "scan x"):
        assert re.search(r"2\.15\d+ MHz ± \d+ Hz", whole), plain
    if line == "status":
        assert len(re.findall(r"\n\nsetpoint +\S+\noutput +on\nvalue ", plain)) > 3, "a line a cell, one between rows"


def test_status_shows_measured_beside_predicted_and_what_is_due(running: RunningTrap) -> None:
    trapd(running, "scan x")
    out = trapd(running, "status").out
    assert re.search(r"^x: x of 40Ca\+ +2\.155\d* MHz ± [0-9.]+ kHz +2\.15\d+ MHz ± \d+ Hz +\+", out, re.MULTILINE)
    assert re.search(r"^shallow: x of 40Ca\+ .* never$", out, re.MULTILINE)
    assert "at other setpoints" not in out
    assert re.search(r"^next due: x 20\d\d-\d\d-\d\d \d\d:[03]0:00 UTC$", out, re.MULTILINE)
    trapd(running, "set endcaps=125V --why elsewhere")
    out = trapd(running, "status").out
    trapd(running, "go work --why back")
    assert "* at other setpoints; the difference is to what was predicted there" in out


@pytest.mark.parametrize("view", ["scans", "frequencies", "due"])
def test_what_scans_left_is_shown_alike_from_the_daemon_and_from_the_file(running: RunningTrap, view: str) -> None:
    online = trapd(running, f"record --{view} --limit 3 --json").json[view]
    offline = trapd(running, f"record --file {running.record_path} --{view} --limit 3 --json").json[view]
    assert online == offline
    assert online or view == "due"
    assert trapd(running, f"record --{view} --limit 3").code == 0


def test_the_record_shows_scans_and_frequencies_with_their_uncertainty(running: RunningTrap) -> None:
    darken(running.rack, contrast=0.8)
    trapd(running, "scan x --why 'to be seen'")
    darken(running.rack)
    entry = str(running.client.entries(kind="request", limit=1)[0]["seq"])
    found = trapd(running, "record --scans --limit 1").out.splitlines()[1]
    measured = trapd(running, "record --frequencies --limit 1").out.splitlines()[1]
    for line in (found, measured):
        assert line.split()[0] == entry
        assert re.search(r"x +x of 40Ca\+ .*2\.15\d+ MHz ± \d+ Hz", line), line
        assert "to be seen" in line
        assert "(deep)" in line


def test_a_scan_that_ended_before_its_time_stands_among_the_scans(running: RunningTrap) -> None:
    begun = running.client.scan("x", wait=False)["entry"]
    running.client.stop("enough")
    with suppress(Superseded):
        running.client.wait(begun)
    (row,) = running.client.scans_made(limit=1)
    assert (row["seq"], row["finding"], row["frequency_hz"]) == (begun, None, None)
    assert (row["state"], row["message"]) == ("stopped", running.client.scan_at(begun)["result"]["error"])
    assert re.search(rf"^ *{begun} .* stopped +\w", trapd(running, "record --scans --limit 1").out, re.MULTILINE)


def test_what_belongs_to_single_points_is_left_out_unless_it_is_asked_for(running: RunningTrap) -> None:
    trapd(running, "scan x")
    request = running.client.entries(kind="request", limit=1)[0]["seq"]
    everything = running.client.entries(after=request - 1, limit=1000)
    bursts = {one["seq"] for one in everything if one["data"].get("quantity") == "burst"}
    expected = [
        one["seq"]
        for one in everything
        if one["kind"] not in ("scan_point", "estimate")
        and one["seq"] not in bursts
        and one["data"].get("intent") not in bursts
    ]
    assert len(bursts) > 20
    number = len(expected)
    for where in ("", f"--file {running.record_path}"):
        answer = trapd(running, f"record {where} --limit {number} --json").json
        assert [one["seq"] for one in answer["entries"]] == expected
        assert answer["left_out"] == len(everything) - number
        all_of_it = trapd(running, f"record {where} --limit {number} --points --json").json["entries"]
        assert [one["seq"] for one in all_of_it] == [one["seq"] for one in everything[-number:]]
        sent = trapd(running, f"record {where} --setpoints --limit 3 --json").json["setpoints"]
        assert "burst" not in {one["quantity"] for one in sent}
    said = trapd(running, f"record --limit {number}").out
    assert f"{len(everything) - number} rows of single points of scans are left out; --points shows them" in said
    assert "scan_point" in trapd(running, "record --kind scan_point").out


def test_rows_are_sought_further_back_when_points_crowd_them_out(
    running: RunningTrap, monkeypatch: pytest.MonkeyPatch
) -> None:
    trapd(running, "scan x")
    line = "record --limit 12 --json"
    whole = trapd(running, line).json
    monkeypatch.setattr("trapd.cli.rows._MOST", 7)
    assert trapd(running, line).json == whole == trapd(running, f"{line} --file {running.record_path}").json


def test_what_was_refused_before_it_was_judged_is_shown_alike(running: RunningTrap) -> None:
    darken(running.rack, rate_per_s=100.0)
    trapd(running, "scan x --why 'is it there'")
    darken(running.rack)
    trapd(running, "set endcaps=950V --why 'too much'")
    online = trapd(running, "record --refused --limit 2 --json").json["refusals"]
    assert online == trapd(running, f"record --file {running.record_path} --refused --limit 2 --json").json["refusals"]
    assert [(one["rule"], one["why"]) for one in online] == [("conflict", "is it there"), ("limit", "too much")]
    assert "below the floor of 500" in online[0]["message"]


def test_the_entries_of_a_scan_are_sentences(running: RunningTrap) -> None:
    trapd(running, "scan x")
    out = trapd(running, "record --limit 1000 --points").out
    assert re.search(r"plan +x: x of 40Ca\+, 2\.1\d+ MHz to 2\.1\d+ MHz, 0\.5 mV, \d+ points of 5 ms a pass", out)
    assert re.search(r"scan_point +pass 1: \d+ counts in 5 ms, tickle off", out)
    assert re.search(r"intent +tickle 2\.1\d+ MHz, 0\.5 mV \(tickle\)", out)
    assert re.search(r"estimate +pass 1: 2\.15\d+ MHz ± \d+ Hz", out)
    assert re.search(r"secular_frequency +x of 40Ca\+: 2\.15\d+ MHz ± \d+ Hz", out)
    assert '{"' not in out


def test_measured_frequencies_are_copied_out(running: RunningTrap, tmp_path: Path) -> None:
    out = tmp_path / "f.csv"
    assert trapd(running, f"record --file {running.record_path} --frequencies --export csv {out}").code == 0
    heading, *rows = out.read_text().splitlines()
    assert "frequency_hz" in heading.split(",")
    assert len(rows) == len(running.client.frequencies(limit=1000))
    ended = trapd(running, f"record --file {running.record_path} --refused --export csv -")
    assert ended.code == 2
    assert "has no export" in ended.err


def test_claims_and_pauses_are_made_shown_and_ended(running: RunningTrap) -> None:
    claimed = trapd(running, "claim --why aligning --until 2100-01-01T00:00Z")
    assert claimed.code == 0
    assert re.match(r"claimed  by \S+ until 2100-01-01 00:00:00 UTC: aligning \(entry \d+\)", claimed.out)
    assert trapd(running, "pause --until 2h --why visitors").out.startswith("paused  the schedule, by ")
    out = trapd(running, "status").out
    assert re.search(r"^claimed  by \S+ until 2100-01-01 00:00:00 UTC: aligning$", out, re.MULTILINE)
    assert re.search(r"^paused  the schedule, by \S+ until 20.* UTC: visitors$", out, re.MULTILINE)
    assert trapd(running, "release").out.startswith("released  ")
    assert trapd(running, "resume --json").json["pause"] is None
    assert "claimed" not in trapd(running, "status").out
    assert trapd(running, "release").code == 3


@pytest.mark.parametrize("line", ["claim --why x --until soon", "pause --why x --until 2020-01-01T00:00Z"])
def test_an_end_that_makes_no_sense_changes_nothing(running: RunningTrap, line: str) -> None:
    ended = trapd(running, line)
    assert ended.code == 2
    assert running.client.status()["situation"]["claim"] is running.client.status()["situation"]["pause"] is None


def test_another_persons_claim_is_gone_over_only_with_interrupt(running: RunningTrap) -> None:
    with running.over_tcp(running.client.new_token("ben", "operate")["token"]) as ben:
        ben.claim("mine")
    try:
        refused = trapd(running, "set endcaps=121V --why x")
        assert refused.code == 3
        assert "--interrupt" in refused.err
        for line in ("set endcaps=121V", "go work", "back", "ions 40Ca+=1"):
            assert trapd(running, f"{line} --why x --interrupt").code == 0
        assert trapd(running, "go work --why x --interrupt").code == 0
        assert trapd(running, "scan x --interrupt").code == 0
    finally:
        assert trapd(running, "release --interrupt").code == 0


@pytest.mark.parametrize(
    ("option", "sent"), [("--interrupt", {"why": "mine", "interrupt": True}), ("", {"why": "mine"})]
)
def test_a_claim_over_a_claim_is_asked_for_with_interrupt(
    running: RunningTrap, monkeypatch: pytest.MonkeyPatch, option: str, sent: dict[str, Any]
) -> None:
    post = Mock(return_value={"entry": 5, "claim": {"who": "ada", "why": "mine", "until_us": None}})
    monkeypatch.setattr(Client, "_post", post)
    assert trapd(running, f"claim --why mine {option}").out == "claimed  by ada: mine (entry 5)\n"
    post.assert_called_once_with("/v1/claim", sent)
