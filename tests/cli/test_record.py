"""``trapd record`` and ``trapd verify`` on a file."""

from __future__ import annotations

import csv
import hashlib
import io
import json
import sqlite3
from pathlib import Path

import pytest

from tests.cli.typed import trapd
from tests.record.samples import BOOT, NOON_US, StandingClock, intent, outcome
from trapd.record import Draft, Record, SameCommit

WHY = {"kind": "set", "values": {"endcaps": 950.0}, "point": None, "contents": None, "why": "stiffer"}
REASON = {"rule": "limit", "quantity": "endcaps", "unit": "V", "found": 950.0, "bound": 900.0, "nearest": 900.0}
REFUSED = {
    "accepted": False,
    "values": {"endcaps": 950.0},
    "reasons": [{**REASON, "species": None, "mode": None, "message": "endcaps = 950 V is over max = 900 V"}],
    "warnings": [],
    "species": [],
    "recovering": False,
}


@pytest.fixture
def record(tmp_path: Path) -> Path:
    """At noon ada set the amplitude; an hour later bob was refused."""
    path, clock = tmp_path / "trapd.sqlite", StandingClock()
    writer = Record.open(path, clock=clock, boot_id=BOOT)
    writer.append(intent(), outcome(SameCommit(0), readback=260.01, difference=0.01)).result(10)
    clock.time_us += 3600 * 10**6
    verdict = Draft(kind="verdict", actor="bob", data={"request": SameCommit(0), **REFUSED})
    writer.append(Draft(kind="request", actor="bob", data=WHY), verdict).result(10)
    assert writer.close(10)
    return path


def test_entries_come_in_words_the_newest_last(record: Path) -> None:
    ended = trapd(f"record --file {record}")
    assert ended.code == 0
    heading, *lines = ended.out.splitlines()
    assert heading.split()[:3] == ["entry", "UTC", "2026-03-01"]
    assert [line.split()[0] for line in lines] == ["1", "2", "3", "4"]
    assert "drive.amplitude = 260 V" in lines[0]
    assert "set endcaps 950 V: stiffer" in lines[2]
    assert "refused: limit: endcaps = 950 V is over max = 900 V" in lines[3]


def test_json_is_every_entry_in_full(record: Path) -> None:
    (first, *_) = entries = trapd(f"record --file {record} --json").json["entries"]
    assert len(entries) == 4
    assert first["time"] == "2026-03-01T12:00:00.000000Z"
    assert first["time_us"] == NOON_US
    assert set(first) == {"seq", "time", "time_us", "monotonic_ns", "boot_id", "kind", "actor", "data", "digest"}


@pytest.mark.parametrize(
    ("options", "numbers"),
    [
        ("--limit 1", [4]),
        ("--kind request", [3]),
        ("--who ada", [1, 2]),
        ("--since 2026-03-01T12:30:00Z", [3, 4]),
        ("--since 2026-03-01T14:30:00+02:00 --who bob --limit 1", [4]),
        ("--since 1min", []),
    ],
)
def test_what_is_shown_can_be_narrowed(record: Path, options: str, numbers: list[int]) -> None:
    found = trapd(f"record --file {record} {options} --json").json["entries"]
    assert [one["seq"] for one in found] == numbers


def test_setpoints_show_what_was_sent_and_read_back(record: Path) -> None:
    ended = trapd(f"record --file {record} --setpoints")
    assert ended.out.splitlines()[1].split() == [
        "1", "12:00:00.000", "drive.amplitude", "260", "V", "260.01", "V", "confirmed", "ada:", "warm-up",
    ]  # fmt: skip


def test_refused_shows_what_and_why(record: Path) -> None:
    (row,) = trapd(f"record --file {record} --refused --json").json["refusals"]
    assert (row["who"], row["rule"], row["bound"], row["why"]) == ("bob", "limit", 900, "stiffer")
    assert "asked because: stiffer" in trapd(f"record --file {record} --refused").out


def test_nothing_found_is_said(record: Path) -> None:
    assert trapd(f"record --file {record} --kind heartbeat").out == "nothing in the record matches\n"


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ("--since yesterday", "expected a while such as 1h, or a time"),
        ("--setpoints --refused", "choose one"),
        ("--setpoints --kind intent", "--kind narrows entries"),
        ("--at somewhere", "leave out --at"),
    ],
)
def test_a_mistake_is_one_sentence(record: Path, options: str, said: str) -> None:
    ended = trapd(f"record --file {record} {options}")
    assert ended.code == 2
    assert said in ended.err


def test_a_record_that_is_not_there_is_named(tmp_path: Path) -> None:
    for command in ("record", "verify"):
        ended = trapd(f"{command} --file {tmp_path}/none.sqlite")
        assert ended.code == 2
        assert "there is no record at" in ended.err


def test_csv_goes_to_a_file_that_does_not_exist_yet(record: Path, tmp_path: Path) -> None:
    out = tmp_path / "setpoints.csv"
    assert trapd(f"record --file {record} --export csv {out}").code == 0
    (row,) = csv.DictReader(io.StringIO(out.read_text()))
    assert (row["setpoint"], float(row["readback"])) == ("drive.amplitude", 260.01)
    again = trapd(f"record --file {record} --export csv {out}")
    assert again.code == 2
    assert "exists already; nothing was exported" in again.err


def test_jsonl_on_standard_output_proves_itself(record: Path) -> None:
    """RFC 6962, section 2.1: a leaf's hash is SHA-256 of a zero byte and the leaf."""
    lines = trapd(f"record --file {record} --export jsonl -").out.splitlines()
    assert len(lines) == 4
    for line in lines:
        entry = json.loads(line)
        digest = entry.pop("digest")
        body = json.dumps(entry, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        assert hashlib.sha256(b"\0" + body.encode()).hexdigest() == digest


def test_export_needs_a_file() -> None:
    ended = trapd("record --export csv out.csv")
    assert ended.code == 2
    assert "--file" in ended.err


def test_a_whole_record_verifies_and_shows_its_head(record: Path) -> None:
    ended = trapd(f"verify --file {record}")
    assert ended.code == 0
    assert ended.out.startswith("whole  4 entries, 1 to 4")
    head = ended.out.split()[ended.out.split().index("head") + 1]
    assert trapd(f"verify --file {record} --head {head}").code == 0


def test_a_changed_row_is_found_and_named(record: Path) -> None:
    with sqlite3.connect(record) as connection:
        connection.execute("DROP TRIGGER intents_no_update")
        connection.execute("UPDATE intents SET value = 250.0 WHERE seq = 1")
    ended = trapd(f"verify --file {record} --json")
    assert ended.code == 6
    assert ended.json["ok"] is False
    assert [(one["seq"], one["table"]) for one in ended.json["problems"] if one["table"] != "schema"] == [
        (1, "intents")
    ]
    assert trapd(f"verify --file {record}").out.startswith("not whole")


def test_a_head_that_is_not_in_it_does_not_verify(record: Path) -> None:
    assert trapd(f"verify --file {record} --head {'0' * 63}1").code == 6


def test_a_head_that_is_no_digest_is_a_mistake(record: Path) -> None:
    ended = trapd(f"verify --file {record} --head 12ab")
    assert ended.code == 2
    assert "expected the 64 hexadecimal digits" in ended.err
