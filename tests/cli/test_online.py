"""The commands that speak to a daemon, against a whole trap in this process. They share it, so each says where it begins."""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from unittest.mock import Mock

import pytest

from tests import traps
from tests.cli.test_program import in_a_terminal
from tests.cli.typed import Ended
from tests.cli.typed import trapd as typed
from tests.running import RunningTrap, hurried, running_trap
from trapd.client import Client
from trapd.errors import InstrumentUnreachable, NotConfirmed, Superseded, TrapdError
from trapd_simulated import FaultKind


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningTrap]:
    with running_trap(tmp_path_factory.mktemp("trap")) as trap:
        yield trap


@pytest.fixture
def holding(running: RunningTrap) -> RunningTrap:
    """On at the point of the file, holding two ions."""
    situation = running.client.status()["situation"]
    if not situation["outputs"]["drive.output"]:
        running.switch_on()
    if situation["contents"]["presence"] != "held":
        running.client.ions("held", {"40Ca+": 2}, why="a test")
    running.client.go("work", why="a test")
    return running


def trapd(running: RunningTrap, line: str) -> Ended:
    return typed(line, TRAPD_AT=str(running.path))


def test_a_setpoint_that_is_accepted_is_moved_and_the_end_is_told(holding: RunningTrap) -> None:
    ended = trapd(holding, "set endcaps=150V --why 'stiffer'")
    assert ended.code == 0
    assert ended.out.startswith("done  endcaps 150 V (entry ")
    assert holding.client.status()["situation"]["values"]["endcaps"] == pytest.approx(150)
    assert holding.client.entries(kind="request", limit=1)[0]["data"]["why"] == "stiffer"


def test_several_setpoints_move_in_one_request(holding: RunningTrap) -> None:
    answer = trapd(holding, "set endcaps=140V rods=2V --why both --json").json
    assert answer["accepted"] is True
    assert answer["state"] == "done"
    assert answer["to"]["endcaps"] == pytest.approx(140)
    assert answer["to"]["rods"] == pytest.approx(2)
    assert answer["error"] is None


def test_a_refusal_can_be_pasted_back_with_the_nearest_value(holding: RunningTrap) -> None:
    before = len(holding.rack.received)
    ended = trapd(holding, 'set endcaps=950V --why "it\'s worth a try"')
    assert ended.code == 3
    assert ended.out.startswith("refused  nothing was sent (entry ")
    asked = [one.text for one in holding.rack.received_after(before)]
    assert all("?" in text for text in asked), asked
    pasted = ended.out.splitlines()[-1].strip()
    assert pasted.startswith("trapd set endcaps=900V --why ")
    again = trapd(holding, pasted.removeprefix("trapd "))
    assert again.code == 0
    assert holding.client.entries(kind="request", limit=1)[0]["data"]["why"] == "it's worth a try"


def test_a_refusal_in_json_carries_the_verdict(holding: RunningTrap) -> None:
    ended = trapd(holding, "set endcaps=950V --why x --json")
    assert ended.code == 3
    assert ended.json["accepted"] is False
    assert ended.json["verdict"]["reasons"][0]["rule"] == "limit"
    assert holding.client.entry(ended.json["entry"])["kind"] == "request"


def test_no_wait_returns_when_the_move_is_accepted(holding: RunningTrap) -> None:
    ended = trapd(holding, "set endcaps=180V --why x --no-wait --json")
    assert ended.code == 0
    assert ended.json["accepted"] is True
    assert ended.json["state"] is None
    assert trapd(holding, "go work --why 'and back'").code == 0


def test_ctrl_c_says_that_the_ramp_goes_on_and_how_to_end_it(
    holding: RunningTrap, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(Client, "wait", Mock(side_effect=KeyboardInterrupt))
    ended = trapd(holding, "set endcaps=170V --why x")
    assert ended.code == 130
    for words in ("the ramp continues in the daemon", "`trapd stop` holds it", "`trapd off` ends it"):
        assert words in ended.err


def test_ctrl_c_before_its_turn_withdraws_a_request_and_says_so(tmp_path: Path) -> None:
    with running_trap(tmp_path, hurried(traps.NORTH_BENCH, faster=10)) as trap:
        trap.switch_on()
        first = trap.client.set({"endcaps": 800.0}, why="a long way", wait=False)["entry"]
        threading.Thread(target=interrupt_once_it_waits, args=(trap,), daemon=True).start()
        ended = trapd(trap, "set endcaps=0V --why 'not so far'")
        assert ended.code == 130
        assert "withdrawn: whoever asked went away before its turn; nothing was sent" in ended.err
        assert trap.client.wait(first)["data"]["to"]["endcaps"] == pytest.approx(800)


def interrupt_once_it_waits(trap: RunningTrap) -> None:
    while not trap.daemon.controller._waiting:
        time.sleep(0.01)
    os.kill(os.getpid(), signal.SIGINT)


def test_an_instrument_that_ignores_a_command_is_told(tmp_path: Path) -> None:
    with running_trap(tmp_path) as trap:
        trap.switch_on()
        trap.rack.inject("dc", FaultKind.IGNORE_COMMANDS)
        ended = trapd(trap, "set endcaps=200V --why x")
        assert ended.code == 4
        assert ended.out.startswith("failed  ")
        assert "the move stopped there, the outputs hold" in ended.out


@pytest.mark.parametrize("kind", [Superseded, NotConfirmed, InstrumentUnreachable])
def test_a_move_leaves_with_how_it_ended(
    holding: RunningTrap, monkeypatch: pytest.MonkeyPatch, kind: type[TrapdError]
) -> None:
    end = {"entry": 9, "state": "failed", "from": {}, "to": {}}
    monkeypatch.setattr(Client, "wait", Mock(side_effect=kind("why it ended", end)))
    ended = trapd(holding, "go work --why x --json")
    assert ended.code == kind.exit_code
    assert (ended.json["code"], ended.json["error"], ended.json["result_entry"]) == (kind.code, "why it ended", 9)


def test_back_and_go_name_where_they_led(holding: RunningTrap) -> None:
    trapd(holding, "set endcaps=160V --why there")
    assert "endcaps 120 V" in trapd(holding, "back --why 'that was worse'").out
    assert "nothing had to move" in trapd(holding, "go work --why 'is it?'").out


@pytest.mark.parametrize(
    ("line", "code", "said"),
    [
        ("set endcap=3V --why x", 2, 'did you mean "endcaps"?; nothing was sent'),
        ("set endcaps=3A --why x", 2, 'expected a voltage such as "300 V"'),
        ("set endcaps --why x", 2, 'expected setpoint=value such as "endcaps=120V"'),
        ("set endcaps=3V", 2, "Missing option '--why'"),
        ("set endcaps=3V --why ' '", 2, "why"),
        ("go nowhere --why x", 2, "no point 'nowhere' in the trap file; there are: work"),
        ("ions 41Ca+ --why x", 2, "'41Ca+' is not in the trap file's [[species]]"),
        ("ions loading --why x", 2, '"loading" is followed by the species'),
        ("ions none 40Ca+ --why x", 2, '"none" stands alone'),
        ("on --why x", 3, "only from an empty trap"),
        ("empty work --stay-off --why x", 2, "--stay-off goes nowhere"),
        ("token revoke nobody", 2, "there is no token named 'nobody'"),
        ("record --since soon", 2, "expected a while such as 1h"),
    ],
)
def test_a_mistake_is_a_sentence_and_sends_nothing(holding: RunningTrap, line: str, code: int, said: str) -> None:
    before = len(holding.rack.received)
    ended = trapd(holding, line)
    assert ended.code == code
    assert said in ended.err
    assert ended.out == ""
    assert all("?" in one.text for one in holding.rack.received_after(before))


@pytest.mark.parametrize("line", ["status", "set drive.amplitude=250V --why x", "record --limit 20"])
def test_in_a_narrow_terminal_nothing_is_cut_off(holding: RunningTrap, line: str) -> None:
    shown = in_a_terminal([sys.executable, "-m", "trapd.cli", *line.split()], 60, TRAPD_AT=str(holding.path))
    assert "drive.amplitude" in shown
    assert "…" not in shown


def test_status_begins_with_a_sentence(holding: RunningTrap) -> None:
    ended = trapd(holding, "status")
    assert ended.code == 0
    assert ended.out.startswith("Holding 2 40Ca+.  north bench (simulated)")
    for words in ("drive.amplitude", "0 V to 420 V", "to 411.7", "825.", "head "):
        assert words in ended.out
    assert holding.client.status()["record"]["head"] in ended.out


def test_status_in_json_is_what_the_daemon_says(holding: RunningTrap) -> None:
    answer = trapd(holding, "status --json").json
    assert answer["simulated"] is True
    assert answer["situation"]["contents"]["ions"] == {"40Ca+": 2}


def test_contents_are_noted_and_shown(holding: RunningTrap) -> None:
    assert "88Sr+" not in trapd(holding, "status").out
    noted = trapd(holding, "ions loading 40Ca+ --why 'oven on'")
    assert noted.code == 0
    assert "loading: 2 40Ca+, 40Ca+ coming in" in noted.out
    assert trapd(holding, "status").out.startswith("Loading: 2 40Ca+, 40Ca+ coming in.")
    assert "held: 3 40Ca+" in trapd(holding, "ions 40Ca+=3 --why counted").out
    assert trapd(holding, "ions unknown --why 'light on' --json").json["contents"]["presence"] == "unknown"
    assert trapd(holding, "status").out.startswith("On; what is in the trap is unknown, 3 40Ca+ guarded.")
    assert trapd(holding, "ions 40Ca+=2 --why again").code == 0


def test_stop_says_that_nothing_moved(holding: RunningTrap) -> None:
    ended = trapd(holding, "stop")
    assert ended.code == 0
    assert ended.out.startswith("nothing was moving; every output holds")
    assert trapd(holding, "stop --json").json["stopped"] is False


def test_the_daemon_s_record_is_shown_like_a_file(holding: RunningTrap) -> None:
    trapd(holding, "set endcaps=130V --why 'for the record'")
    online = trapd(holding, "record --kind request --limit 3 --json").json["entries"]
    offline = trapd(holding, f"record --file {holding.record_path} --kind request --limit 3 --json").json["entries"]
    assert online == offline
    assert "endcaps 120 V to 130 V" in trapd(holding, "record --kind ramp --limit 1").out
    sent = trapd(holding, "record --setpoints --limit 1")
    assert sent.out.splitlines()[1].split()[2:5] == ["endcaps", "130", "V"]
    assert "confirmed" in sent.out


def test_refusals_are_found_online_too(holding: RunningTrap) -> None:
    trapd(holding, "set endcaps=951V --why 'too much'")
    newest = trapd(holding, "record --refused --limit 1 --json").json["refusals"][-1]
    assert newest["message"] == "endcaps = 951 V is over max = 900 V"
    assert newest["why"] == "too much"


def test_verify_asks_the_daemon(holding: RunningTrap) -> None:
    assert trapd(holding, "verify").out.startswith("whole")
    head = holding.client.status()["record"]["head"]
    assert trapd(holding, f"verify --head {head} --json").json["ok"] is True
    assert trapd(holding, f"verify --head {'0' * 64 if head[0] != '0' else '1' * 64}").code in (0, 6)


def test_a_token_is_shown_once_and_works_until_it_is_revoked(holding: RunningTrap) -> None:
    made = trapd(holding, "token new viewer --role read")
    assert made.code == 0
    secret = made.out.strip()
    over_tcp = {"TRAPD_AT": holding.url, "TRAPD_TOKEN": secret}
    assert typed("status --json", **over_tcp).code == 0
    refused = typed("set endcaps=125V --why x", **over_tcp)
    assert refused.code == 3
    assert "viewer" in trapd(holding, "token list").out
    assert secret not in trapd(holding, "token list --json").out
    assert trapd(holding, "token revoke viewer").code == 0
    assert typed("status", **over_tcp).code == 3


def test_off_names_every_instrument_and_a_hung_one(tmp_path: Path) -> None:
    with running_trap(tmp_path) as trap:
        trap.switch_on()
        trap.rack.inject("dc", FaultKind.HANG)
        ended = trapd(trap, "off --why 'a drill'")
        assert ended.code == 4
        assert "rf  off  confirmed after" in ended.out
        assert "dc  NOT CONFIRMED  after" in ended.out
        assert "take its output for live" in ended.out
        assert trapd(trap, "status").out.startswith("Off was asked for and is not confirmed by dc.")
        trap.rack.clear("dc")


def test_off_confirmed_by_all_leaves_with_0(tmp_path: Path) -> None:
    with running_trap(tmp_path) as trap:
        ended = trapd(trap, "off --json")
        assert ended.code == 0
        assert ended.json["off"] is True
        assert set(ended.json["instruments"]) == {"rf", "dc"}


def test_nobody_at_the_address_is_said(tmp_path: Path) -> None:
    ended = typed("status", TRAPD_AT=str(tmp_path / "nobody.sock"))
    assert ended.code == 5
    assert ended.err.startswith("unreachable: no daemon answers at")
    assert ended.err.count("\n") == 1


def test_no_daemon_at_all_says_where_it_looked_and_how_to_name_one(tmp_path: Path) -> None:
    ended = typed("status --json", TRAPD_AT="", XDG_RUNTIME_DIR=str(tmp_path))
    assert ended.code == 5
    assert ended.json["code"] == "daemon_unreachable"
    assert str(tmp_path) in ended.json["message"]
    assert "TRAPD_AT" in ended.json["message"]
