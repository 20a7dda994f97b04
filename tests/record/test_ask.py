from __future__ import annotations

import csv
import hashlib
import io
import json
import shutil
import subprocess
from pathlib import Path

import pytest

from tests.record.samples import (
    BOOT,
    NOON_US,
    StandingClock,
    intent,
    note,
    outcome,
    plain,
    refusal,
    request,
    result,
    write_day,
)
from trapd.errors import BadRequest, NotFound
from trapd.record import Draft, Reader, Record, SameCommit, export
from trapd.record.tables import metadata, views

MINUTE_US = 60_000_000


def contents(presence: str) -> Draft:
    return Draft(kind="contents", actor="ada", data={"presence": presence})


@pytest.fixture
def reader(record: Record, path: Path) -> Reader:
    return Reader.open(path)


def test_entries_are_asked_by_kind_actor_time_and_place(record: Record, reader: Reader, clock: StandingClock) -> None:
    write_day(record)
    clock.time_us += MINUTE_US
    record.append(note("late")).result()

    def seqs(**wanted: object) -> list[int]:
        return [entry.seq for entry in reader.entries(**wanted)]  # type: ignore[arg-type]

    assert seqs() == [1, 2, 3, 4, 5, 6, 7]
    assert seqs(after=2, limit=3) == [3, 4, 5]
    assert seqs(limit=2, newest=True) == [6, 7]
    assert seqs(kind="intent") == [3, 6]
    assert seqs(actor="daemon") == [4, 7]
    assert seqs(kind="intent", actor="daemon") == []
    assert seqs(since_us=NOON_US + 1) == [7]
    assert seqs(until_us=NOON_US + MINUTE_US) == [1, 2, 3, 4, 5, 6]


def test_an_entry_reads_as_it_was_answered(record: Record, reader: Reader) -> None:
    answered = record.append(request(), refusal(SameCommit(0)), intent()).result()
    assert tuple(reader.entry(entry.seq) for entry in answered) == answered
    assert reader.entries() == answered
    assert reader.head() == (3, record.head)
    with pytest.raises(NotFound, match="no entry 4"):
        reader.entry(4)


def test_an_empty_record_answers_with_nothing(reader: Reader) -> None:
    assert (reader.entries(), reader.setpoints(), reader.refusals()) == ((), (), ())
    assert (reader.head(), reader.contents_at()) == ((0, "0" * 64), None)
    assert (reader.state_at().seq, reader.state_at().setpoints) == (0, {})


def test_setpoints_tell_what_was_sent_and_read_back(record: Record, reader: Reader) -> None:
    write_day(record)
    first, second = reader.setpoints()
    assert (first.seq, first.outcome, first.value, first.readback, first.difference) == (3, 5, 260.0, 260.25, 0.25)
    assert (first.state, first.who, first.why, first.sent_us) == ("confirmed", "ada", "warm-up", NOON_US + 10)
    assert (second.seq, second.state, second.outcome, second.readback) == (6, "unknown", None, None)
    assert reader.setpoints(state="unknown") == (second,)
    assert reader.setpoints(setpoint="rods") == reader.setpoints(who="bob") == ()
    assert reader.setpoints(limit=1, newest=True) == (second,)


def test_refusals_give_every_rule_that_failed_with_who_asked_and_why(record: Record, reader: Reader) -> None:
    write_day(record)
    window, limit = reader.refusals()
    assert (window.rule, window.found, window.bound, window.nearest) == ("window", 350.0, 331.5, 315.0)
    assert (window.who, window.why, window.request, window.seq) == ("ada", "see how far it goes", 1, 2)
    assert (window.species, window.mode, limit.species) == ("40Ca+", "x", None)
    assert (limit.rule, limit.message) == ("range", "over the limit")
    assert reader.refusals(who="bob") == ()


def test_an_accepted_verdict_is_no_refusal(record: Record, reader: Reader) -> None:
    data = {"request": None, "accepted": True, "reasons": [], "warnings": [{"rule": "depth"}]}
    record.append(Draft(kind="verdict", actor="guard", data=data)).result()
    assert reader.refusals() == ()


def test_what_was_refused_before_it_came_to_a_verdict_is_a_refusal_too(record: Record, reader: Reader) -> None:
    accepted = {"accepted": True, "reasons": [], "warnings": []}
    record.append(request(why="try"), result(SameCommit(0), error="set: ada claims the trap")).result()
    record.append(request(), Draft(kind="verdict", actor="ada", data={"request": SameCommit(0), **accepted})).result()
    record.append(result(3, error="the scan ends here")).result()  # it was accepted
    record.append(request(), result(SameCommit(0), "stopped", code="superseded")).result()
    record.append(request(), result(SameCommit(0), code="not_confirmed")).result()
    record.append(request(), refusal(SameCommit(0))).result()
    claimed, *guarded = reader.refusals()
    assert (claimed.seq, claimed.request, claimed.who, claimed.why) == (2, 1, "ada", "try")
    assert (claimed.rule, claimed.message) == ("conflict", "set: ada claims the trap")
    assert [claimed.quantity, claimed.unit, claimed.found, claimed.bound, claimed.nearest] == [None] * 5
    assert [one.rule for one in guarded] == ["window", "range"]
    assert [one.seq for one in reader.refusals(limit=1, newest=True)] == [11]


def test_requests_name_the_scan_that_was_asked_for(record: Record, path: Path) -> None:
    record.append(request(kind="scan", scan="radial"), request()).result()
    rows = plain(path).execute("SELECT kind, scan, point FROM requests").fetchall()
    assert rows == [("scan", "radial", None), ("set", None, None)]


def test_the_state_at_a_moment_is_the_last_command_of_each_setpoint_by_then(
    record: Record, reader: Reader, clock: StandingClock
) -> None:
    rods = {"setpoint": "rods", "instrument": "dc", "channel": 2, "quantity": "voltage_v"}
    on = {"setpoint": "drive.amplitude", "quantity": "output", "unit": ""}
    record.append(contents("none"), intent(100.0), intent(1.0, **rods), intent(1.0, **on)).result()
    clock.time_us += MINUTE_US
    record.append(contents("held"), intent(200.0)).result()
    clock.time_us += MINUTE_US
    record.append(intent(0.0, **on)).result()

    then = reader.state_at(time_us=NOON_US + MINUTE_US - 1)
    assert {name: command.value for name, command in then.setpoints.items()} == {"drive.amplitude": 100.0, "rods": 1.0}
    assert {name: command.value for name, command in then.outputs.items()} == {"drive.amplitude": 1.0}
    assert then.contents is not None
    assert (then.seq, then.contents.data) == (4, {"presence": "none"})

    assert reader.state_at(seq=5).setpoints["drive.amplitude"].value == 100.0
    now = reader.last_commanded()
    assert now == reader.state_at(seq=7) == reader.state_at(time_us=NOON_US + 9 * MINUTE_US)
    assert {name: command.value for name, command in now.setpoints.items()} == {"drive.amplitude": 200.0, "rods": 1.0}
    assert now.outputs["drive.amplitude"].value == 0.0
    assert reader.contents_at() == reader.entry(5) == now.contents
    assert reader.contents_at(seq=4) == reader.entry(1)
    assert reader.state_at(time_us=NOON_US - 1).setpoints == {}


def test_what_was_certainly_not_sent_was_not_commanded(record: Record, reader: Reader) -> None:
    record.append(intent(100.0), intent(200.0)).result()
    record.append(outcome(2, state="not sent", sent_us=None, readback=None, difference=None)).result()
    assert reader.last_commanded().setpoints["drive.amplitude"].value == 100.0
    assert reader.state_at(seq=2).setpoints["drive.amplitude"].value == 200.0, "nobody knew yet"


def test_after_the_clock_was_set_back_a_moment_means_its_later_pass(
    record: Record, reader: Reader, clock: StandingClock
) -> None:
    for value, minutes in ((1.0, 0), (2.0, 30), (3.0, -15), (4.0, 20)):
        clock.time_us = NOON_US + minutes * MINUTE_US
        record.append(intent(value)).result()
    assert reader.state_at(time_us=NOON_US - 10 * MINUTE_US).setpoints["drive.amplitude"].value == 3.0
    assert reader.state_at(time_us=NOON_US + 25 * MINUTE_US).setpoints["drive.amplitude"].value == 4.0


def sqlite3_program(path: Path, query: str) -> list[list[str]]:
    """Another process: the `sqlite3` program where there is one, else a bare interpreter."""
    program = shutil.which("sqlite3")
    if program is not None:
        command = [program, "-readonly", "-csv", str(path), query]
    else:
        code = "import csv, sqlite3, sys; csv.writer(sys.stdout).writerows(sqlite3.connect(sys.argv[1]).execute(sys.argv[2]))"
        command = ["python3", "-c", code, str(path), query]
    answer = subprocess.run(command, check=True, capture_output=True, text=True)
    return list(csv.reader(io.StringIO(answer.stdout)))


def test_plain_sql_from_another_process_answers_the_three_questions(path: Path) -> None:
    now_us = int(plain(Path(":memory:")).execute("SELECT strftime('%s', 'now')").fetchone()[0]) * 1_000_000
    clock = StandingClock(now_us - 90_000_000)
    record = Record.open(path, clock=clock, boot_id=BOOT)
    (old,) = record.append(intent(100.0)).result()
    record.append(outcome(old.seq, sent_us=now_us - 90_000_000)).result()
    clock.time_us = now_us - 5_000_000
    (new,) = record.append(intent(200.0)).result()
    record.append(
        outcome(new.seq, sent_us=now_us - 5_000_000, readback=200.5), request(), refusal(SameCommit(1))
    ).result()

    a_minute_ago = "strftime('%Y-%m-%dT%H:%M:%SZ', 'now', '-1 minute')"
    sent = sqlite3_program(path, f"SELECT setpoint, value, unit, readback FROM setpoints WHERE sent > {a_minute_ago}")
    assert sent == [["drive.amplitude", "200.0", "V", "200.5"]]
    refused = sqlite3_program(path, f"SELECT who, why, rule, found, bound FROM refusals WHERE time > {a_minute_ago}")
    assert refused[0] == ["ada", "see how far it goes", "window", "350.0", "331.5"]
    asked = sqlite3_program(
        path, 'SELECT who, kind, accepted, json_extract("values", \'$."drive.amplitude"\') FROM requests'
    )
    assert asked == [["ada", "set", "0", "350.0"]]
    record.close()


def test_times_in_the_views_are_rfc_3339(record: Record, path: Path, clock: StandingClock) -> None:
    clock.time_us = 482_196_050_520_000  # 1985-04-12T23:20:50.52Z, RFC 3339 section 5.8
    record.append(intent()).result()
    record.append(outcome(1, sent_us=482_196_050_520_007, verified_us=None)).result()
    times = plain(path).execute("SELECT time, sent, verified FROM setpoints").fetchone()
    assert times == ("1985-04-12T23:20:50.520000Z", "1985-04-12T23:20:50.520007Z", None)


def test_a_reader_cannot_write(record: Record, reader: Reader, path: Path) -> None:
    with reader.reading() as connection:
        for statement in (
            "INSERT INTO entries VALUES (1,1,1,'b','k','a','{}','')",
            "CREATE TABLE x (y)",
            "DROP VIEW setpoints",
        ):
            with pytest.raises(Exception, match="not authorized"):
                connection.exec_driver_sql(statement)
    assert record.last_seq == 0


def test_the_setpoints_export_as_csv(record: Record, path: Path) -> None:
    write_day(record)
    out = io.StringIO(newline="")
    assert export(path, out, "csv") == 2
    first, second = csv.DictReader(io.StringIO(out.getvalue()))
    assert (first["setpoint"], float(first["value"]), first["unit"], float(first["readback"])) == (
        "drive.amplitude",
        260.0,
        "V",
        260.25,
    )
    assert (second["state"], second["readback"], second["time"]) == ("unknown", "", "2026-03-01T12:00:00.000000Z")


def test_the_entries_export_as_lines_that_prove_the_chain_by_themselves(record: Record, path: Path) -> None:
    write_day(record)
    out = io.StringIO()
    assert export(path, out, "jsonl") == 6
    previous = "0" * 64
    for line in out.getvalue().splitlines():
        entry = json.loads(line)
        digest = entry.pop("digest")
        body = json.dumps(entry, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        assert entry["previous"] == previous
        assert hashlib.sha256(b"\x00" + body.encode()).hexdigest() == digest
        previous = digest
    assert previous == record.head


def test_an_unknown_format_is_refused(record: Record, path: Path) -> None:
    with pytest.raises(BadRequest, match="expected csv or jsonl"):
        export(path, io.StringIO(), "xlsx")


def test_the_tables_and_views_are_as_the_migrations_make_them(record: Record, path: Path) -> None:
    connection = plain(path)
    for table in (*metadata.tables.values(), *views.tables.values()):
        columns = connection.execute(f"PRAGMA table_info({table.name})").fetchall()
        assert [column[1] for column in columns] == table.c.keys(), table.name
    strict = connection.execute("PRAGMA table_list").fetchall()
    assert {row[1]: row[5] for row in strict if row[1] in metadata.tables} == dict.fromkeys(metadata.tables, 1)
