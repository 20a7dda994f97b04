"""``trapd scan``, and where its results are shown: a trap with a dip in its counts (tests/resonance.py)."""

from __future__ import annotations

import re
import sys
import threading
import xml.etree.ElementTree as ElementTree
from collections.abc import Iterator
from pathlib import Path
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
    ended = trapd(running, "scan x --why 'after the bake'")
    assert ended.code == 0
    *passes, result, flag = ended.out.splitlines()
    assert [line.split(":")[0] for line in passes] == [f"pass {n} of 12" for n in range(1, len(passes) + 1)]
    number = re.match(r"found  (2\.15\d+) MHz ± (\d+) Hz, predicted 2\.155\d* MHz ± [0-9.]+ kHz: \+", result)
    assert number, result
    assert abs(float(number[1]) * 1e6 - DIP_HZ) < 5 * float(number[2])
    assert "; deep (entry " in result, "half of the light is more than the fifth that the flag allows"
    assert flag.startswith("  deep  The dip takes more than 20 percent of the counts")
    assert running.client.entries(kind="request", limit=1)[0]["data"]["why"] == "after the bake"


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
        ("scan y", '"y" is no scan of this trap; there are: x, shallow; nothing was sent'),
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
    ended = trapd(running, "scan x")
    assert ended.code == 130
    assert ended.err.strip() == "the scan was stopped, its tickle goes off; every output holds"
    assert running.client.status()["situation"]["scanning"] is None
    assert running.client.entries(kind="result", limit=1)[0]["data"]["state"] == "stopped"


def test_ctrl_c_after_its_end_stops_nothing(running: RunningTrap, monkeypatch: pytest.MonkeyPatch) -> None:
    wait = Client.wait_finding

    def late(client: Client, *asked: object) -> None:
        wait(client, *asked)  # type: ignore[arg-type]
        raise KeyboardInterrupt

    monkeypatch.setattr(Client, "wait_finding", late)
    last = running.client.status()["record"]["last_seq"]
    ended = trapd(running, "scan x")
    assert ended.code == 130
    assert "the scan had ended already" in ended.err
    assert running.client.entries(kind="halt", after=last) == []


def test_ctrl_c_before_its_turn_withdraws_a_scan_and_says_so(tmp_path: Path) -> None:
    slow = SCANNED.replace('slew = "500 V/s", step = "5 V"', 'slew = "2.5 V/s", step = "0.25 V"')
    assert slow != SCANNED
    with resonant_trap(tmp_path, slow) as trap:
        trap.client.set({"shim_x": 5.0}, why="a long way", wait=False)
        threading.Thread(target=interrupt_once_it_waits, args=(trap,), daemon=True).start()
        ended = trapd(trap, "scan x")
        assert ended.code == 130
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
    trapd(running, "scan x --why 'to be seen'")
    found = trapd(running, "record --scans --limit 1").out.splitlines()[1]
    measured = trapd(running, "record --frequencies --limit 1").out.splitlines()[1]
    for line in (found, measured):
        assert re.search(r"x +x of 40Ca\+ .*2\.15\d+ MHz ± \d+ Hz", line), line
        assert "to be seen" in line
        assert "(deep)" in line


def test_the_entries_of_a_scan_are_sentences(running: RunningTrap) -> None:
    trapd(running, "scan x")
    out = trapd(running, "record --limit 1000").out
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
