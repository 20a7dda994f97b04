"""What scans leave in the record: typed rows, the views a thesis is written from, and that nobody can bend them."""

from __future__ import annotations

import csv
import io
import json
import math
import sqlite3
from pathlib import Path
from typing import Any

import pytest

from tests.record.samples import (
    BOOT,
    NOON_US,
    StandingClock,
    due_run,
    finding,
    intent,
    note,
    outcome,
    plain,
    plan,
    refusal,
    request,
    result,
    scan_point,
    secular_frequency,
    write_day,
    write_scan,
)
from tests.record.test_ask import sqlite3_program
from tests.record.test_verify import behind_its_back, named
from trapd.errors import BadRequest, Bug, ConfigError
from trapd.record import Draft, Reader, Record, SameCommit, export, verify
from trapd.record.connection import migrating_engine
from trapd.record.entry import KINDS, NO_DIGEST, Head, Stamp, chain
from trapd.record.schema import migrate
from trapd.record.tables import INSERTS

MINUTE_US = 60_000_000
NEW_TABLES = ("scan_points", "secular_frequencies", "due_runs")


@pytest.fixture
def reader(record: Record, path: Path) -> Reader:
    return Reader.open(path)


@pytest.fixture
def closed(path: Path, clock: StandingClock) -> Path:
    """Seven entries: due, request, intent, two points, finding, frequency."""
    record = Record.open(path, clock=clock, boot_id=BOOT)
    assert write_scan(record) == 2
    assert record.close(timeout_s=10)
    return path


@pytest.fixture
def planned(closed: Path) -> Path:
    """The plan of its scan as well, entry 8."""
    record = Record.open(closed, clock=StandingClock(), boot_id=BOOT)
    record.append(plan(2)).result()
    assert record.close(timeout_s=10)
    return closed


def test_the_points_of_a_scan_read_as_they_were_counted(record: Record, reader: Reader) -> None:
    write_day(record)
    asked = write_scan(record)
    record.append(request(), scan_point(SameCommit(0), None)).result()
    off, on = reader.scan_points(asked)
    assert (off.frequency_hz, off.intent, off.point, off.counts, off.dwell_s) == (None, None, 0, 412, 0.02)
    assert (on.frequency_hz, on.intent, on.point, on.level_v) == (2_033_000.0, asked + 1, 1, 0.0005)
    assert (on.pass_number, on.at_us, on.request) == (1, NOON_US + 10_000, asked)
    assert reader.scan_points(1) == ()


def test_frequencies_are_asked_by_scan_species_mode_and_time(record: Record, reader: Reader) -> None:
    asked = write_scan(record)
    later = {"scan": "z", "mode": "z", "species": "88Sr+", "at_us": NOON_US + MINUTE_US, "flags": ""}
    record.append(finding(asked), secular_frequency(asked, SameCommit(0), **later)).result()
    first, second = reader.secular_frequencies()
    assert (first.seq, first.finding, first.request, first.calibration) == (7, 6, 2, None)
    assert (first.frequency_hz, first.uncertainty_hz, first.low_95_hz, first.high_95_hz) == (
        2_033_100.0,
        30.0,
        2_033_041.2,
        2_033_158.8,
    )
    assert (first.flags, first.points, first.who, first.why) == ("wide near_edge", 24, "ada", "daily")
    for wanted in ({"scan": "z"}, {"mode": "z"}, {"species": "88Sr+"}, {"since_us": NOON_US + MINUTE_US}, {"after": 7}):
        assert reader.secular_frequencies(**wanted) == (second,)  # type: ignore[arg-type]
    assert reader.secular_frequencies(limit=1, newest=True) == (second,)
    assert reader.secular_frequencies(until_us=NOON_US + MINUTE_US) == reader.secular_frequencies(limit=1) == (first,)


def test_every_scan_that_began_is_one_row_that_tells_how_it_ended(
    record: Record, reader: Reader, clock: StandingClock
) -> None:
    def begin(why: str) -> int:
        clock.time_us += MINUTE_US
        return record.append(request(kind="scan", scan="y", why=why), plan(SameCommit(0))).result()[0].seq

    found, none, stopped, failed, running = map(begin, ("a", "b", "c", "d", "e"))
    told = record.append(finding(found), result(found, "done", error=None, code=None)).result()[0].seq
    record.append(
        finding(none, "none", frequency_hz=None, uncertainty_hz=None, flags=[], message="No resonance."),
        result(stopped, "stopped", error="stop: enough", code="superseded"),
        result(failed, error="tickle: no answer", code="unreachable"),
        request(kind="scan", scan="y"),
        result(SameCommit(3)),  # refused: it never began
    ).result()
    rows = reader.scans()
    assert [(row.seq, row.state, row.message) for row in rows] == [
        (found, "found", "a resonance"),
        (none, "none", "No resonance."),
        (stopped, "stopped", "stop: enough"),
        (failed, "failed", "tickle: no answer"),
        (running, "unknown", None),
    ]
    first, second, *_ = rows
    assert (first.finding, first.frequency_hz, first.uncertainty_hz) == (told, 2_033_100.0, 30.0)
    assert (first.flags, second.flags, second.frequency_hz) == ("wide near_edge", "", None)
    assert {(row.scan, row.mode, row.species, row.predicted_hz, row.min_contrast, row.who) for row in rows} == {
        ("y", "y", "40Ca+", 2_033_000.0, 0.05, "ada")
    }
    assert ([row.why for row in rows], rows[-1].finding) == (["a", "b", "c", "d", "e"], None)
    assert [row.time_us for row in rows] == [NOON_US + n * MINUTE_US for n in range(1, 6)]
    assert reader.scans(state="none") == reader.scans(after=found, limit=1) == (second,)
    assert reader.scans(limit=1, newest=True) == reader.scans(since_us=NOON_US + 5 * MINUTE_US) == rows[-1:]
    assert reader.scans(scan="x") == reader.scans(who="bob") == ()


def test_a_plan_that_says_little_is_still_a_row(record: Record, reader: Reader) -> None:
    record.append(request(why=None), Draft(kind="plan", actor="scans", data={"request": SameCommit(0)})).result()
    (one,) = reader.scans()
    assert (one.state, one.scan, one.flags, one.why, one.who) == ("unknown", None, "", "", "ada")


def work(path: Path, view: str) -> int:
    """Steps of SQLite's machine, in hundreds, that a page of the view costs."""
    steps = 0

    def count() -> None:
        nonlocal steps
        steps += 1

    connection = plain(path)
    connection.set_progress_handler(count, 100)
    connection.execute(f"SELECT * FROM {view} WHERE seq > 0 ORDER BY seq DESC LIMIT 40").fetchall()
    connection.close()
    return steps


@pytest.mark.parametrize("view", ["scans", "refusals", "requests"])
def test_twice_as_many_entries_are_no_more_than_twice_the_work(record: Record, path: Path, view: str) -> None:
    """A join without an index would be four times."""

    def write() -> int:
        for _ in range(300):
            record.append(request(), plan(SameCommit(0)), finding(SameCommit(0)), result(SameCommit(0), "done"))
            record.append(request(), refusal(SameCommit(0)))
            record.append(request(), result(SameCommit(0)))
        record.append(note()).result()
        return work(path, view)

    once = write()
    assert write() < 2.5 * once


def test_due_runs_are_asked_by_schedule_state_and_time(record: Record, reader: Reader) -> None:
    assert reader.newest_due("nightly") is None
    record.append(
        due_run("missed", NOON_US - 60 * MINUTE_US, late_s=3600.0, reason="the daemon was not running"),
        due_run("skipped", NOON_US - 30 * MINUTE_US, reason="ada has claimed the trap"),
        due_run("late", NOON_US, late_s=90.0),
        due_run("run", NOON_US - 10 * MINUTE_US, schedule="hourly"),
    ).result()
    assert [due.state for due in reader.due_runs()] == ["missed", "skipped", "late", "run"]
    assert [due.seq for due in reader.due_runs(schedule="nightly", newest=True, limit=2)] == [2, 3]
    (missed,) = reader.due_runs(state="missed")
    assert (missed.late_s, missed.reason, missed.request) == (3600.0, "the daemon was not running", None)
    assert [due.seq for due in reader.due_runs(since_us=NOON_US - 10 * MINUTE_US)] == [3, 4]
    assert (reader.newest_due("nightly"), reader.newest_due("hourly")) == (NOON_US, NOON_US - 10 * MINUTE_US)
    assert reader.newest_due("weekly") is None


def test_plain_sql_tells_which_frequencies_were_measured_with_what_uncertainty(closed: Path) -> None:
    query = (
        "SELECT time, species, mode, frequency_hz, uncertainty_hz, predicted_hz, difference_hz, difference_sigma, who "
    )
    (row,) = sqlite3_program(closed, query + "FROM frequencies")
    # 100 Hz off with standard uncertainties of 30 Hz and 40 Hz, which add in quadrature (GUM, JCGM 100:2008, 5.1.2)
    assert row[:3] == ["2026-03-01T12:00:00.020000Z", "40Ca+", "y"]
    assert [float(number) for number in row[3:8]] == [2_033_100.0, 30.0, 2_033_000.0, 100.0, 100.0 / math.hypot(30, 40)]
    assert row[8] == "ada"


def test_plain_sql_tells_which_due_runs_were_late_skipped_or_missed(record: Record, path: Path) -> None:
    record.append(due_run(), due_run("late", NOON_US + 30 * MINUTE_US, late_s=75.0)).result()
    record.append(due_run("missed", NOON_US + 60 * MINUTE_US, late_s=0, reason="the daemon was not running")).result()
    rows = sqlite3_program(path, "SELECT due, scan, state, late_s, reason FROM due_times WHERE state <> 'run'")
    assert rows == [
        ["2026-03-01T12:30:00.000000Z", "y", "late", "75.0", ""],
        ["2026-03-01T13:00:00.000000Z", "y", "missed", "0.0", "the daemon was not running"],
    ]


def test_plain_sql_tells_how_scans_ended_and_what_they_counted(planned: Path) -> None:
    query = (
        "SELECT s.time, s.state, s.flags, count(*), sum(p.counts) FROM scans s JOIN scan_points p ON p.request = s.seq"
    )
    assert sqlite3_program(planned, query) == [["2026-03-01T12:00:00.000000Z", "found", "wide near_edge", "2", "824"]]


@pytest.mark.parametrize(
    "draft",
    [
        scan_point(2, 99),
        scan_point(2, 1),  # no intent
        scan_point(99, 3),
        scan_point(2, None, frequency_hz=2e6),  # sent, and nothing written before
        scan_point(2, 3, counts=-1),
        scan_point(2, 3, counts=4.5),
        scan_point(2, 3, frequency_hz=float("inf")),
        scan_point(2, 3, pass_number=None),
        secular_frequency(2, 5),  # no finding
        secular_frequency(2, 99),
        secular_frequency(2, 6),  # it has one
        secular_frequency(2, None),  # type: ignore[arg-type]
        secular_frequency(2, 8, uncertainty_hz=float("nan")),
        secular_frequency(2, 8, uncertainty_hz=None),
        secular_frequency(2, 8, calibration=99),
        secular_frequency(2, 8, flags=["wide"]),
        secular_frequency(2, 8, scan=""),
        due_run("perhaps"),
        due_run(request=99),
        due_run(late_s=None),
        due_run(schedule=""),
    ],
)
def test_a_row_that_says_too_little_or_refers_to_the_wrong_entry_is_refused(record: Record, draft: Draft) -> None:
    write_scan(record)
    record.append(finding(2)).result()
    head = record.head
    assert isinstance(record.append(draft).exception(), Bug)
    assert (record.last_seq, record.head) == (8, head)


def test_whole_numbers_where_real_ones_belong_are_stored_as_real(record: Record, reader: Reader) -> None:
    asked = write_scan(record)
    record.append(finding(asked), secular_frequency(asked, SameCommit(0), frequency_hz=2_033_100, contrast=1)).result()
    newest = reader.secular_frequencies()[-1]
    assert [type(number) for number in (newest.frequency_hz, newest.contrast)] == [float, float]
    assert verify(reader.path).ok


@pytest.mark.parametrize("table", NEW_TABLES)
def test_a_typed_row_of_another_program_needs_a_new_entry_of_its_kind(record: Record, path: Path, table: str) -> None:
    write_scan(record)
    record.append(note()).result()
    connection = plain(path)
    columns = [column[1] for column in connection.execute(f"PRAGMA table_info({table})")][1:]
    for seq in (1, 2, 4, 5, 6, 7, 8, 9):
        with pytest.raises(sqlite3.IntegrityError):
            connection.execute(
                f"INSERT OR REPLACE INTO {table} SELECT {seq}, {', '.join(columns)} FROM {table} LIMIT 1"
            )
    connection.close()


@pytest.mark.parametrize(
    ("table", "kind"),
    [("scan_points", "scan_point"), ("secular_frequencies", "secular_frequency"), ("due_runs", "due_run")],
)
def test_the_schema_itself_refuses_what_is_no_finite_number(record: Record, path: Path, table: str, kind: str) -> None:
    write_scan(record)
    record.append(finding(2)).result()
    connection = plain(path)
    connection.execute("BEGIN")
    connection.execute("INSERT INTO entries VALUES (9, 1, 1, 'b', ?, 'x', '{}', ?)", (kind, "0" * 64))
    columns = {column[1]: column[2] for column in connection.execute(f"PRAGMA table_info({table})")}
    right = {name: {"seq": "9", "finding": "8"}.get(name, name) for name in columns}
    insert = f"INSERT INTO {table} SELECT {{}} FROM {table} ORDER BY seq DESC LIMIT 1"
    for real in (name for name, kind in columns.items() if kind == "REAL"):
        for wrong in ("9e999", "-9e999", "'much'"):
            with pytest.raises(sqlite3.IntegrityError, match=r"CHECK|cannot store"):
                connection.execute(insert.format(", ".join({**right, real: wrong}.values())))
    connection.execute(insert.format(", ".join(right.values())))
    connection.close()


@pytest.mark.parametrize(
    ("table", "seq", "change"),
    [
        ("scan_points", 5, "counts = counts + 1"),
        ("scan_points", 5, "frequency_hz = frequency_hz + 1e-9 * frequency_hz"),
        ("scan_points", 4, "level_v = 0.0"),
        ("scan_points", 4, "pass_number = 2"),
        ("secular_frequencies", 7, "uncertainty_hz = 3.0"),
        ("secular_frequencies", 7, "flags = ''"),
        ("secular_frequencies", 7, "who = 'bob'"),
        ("secular_frequencies", 7, "calibration = 1"),
        ("due_runs", 1, "state = 'late'"),
        ("due_runs", 1, "late_s = 0.25"),
        ("due_runs", 1, "reason = 'none'"),
    ],
)
def test_a_changed_row_names_its_entry(closed: Path, table: str, seq: int, change: str) -> None:
    assert set(named(behind_its_back(closed, f"UPDATE {table} SET {change} WHERE seq = {seq}"))) == {(seq, table)}


def test_rows_removed_or_invented_are_named(closed: Path) -> None:
    invented = (
        "INSERT INTO scan_points SELECT {}, request, intent, pass_number, point, frequency_hz, level_v, dwell_s, "
    )
    invented += "counts, at_us FROM scan_points WHERE seq = 5"
    report = behind_its_back(
        closed,
        "DELETE FROM secular_frequencies",
        "DELETE FROM due_runs",
        "DELETE FROM scan_points WHERE seq = 4",
        invented.format(6),
        invented.format(60),
    )
    expected = [
        (1, "due_runs"),
        (4, "scan_points"),
        (6, "scan_points"),
        (7, "secular_frequencies"),
        (60, "scan_points"),
    ]
    assert named(report) == expected


def test_an_entry_taken_from_under_its_row_is_named(closed: Path) -> None:
    report = behind_its_back(closed, "DELETE FROM entries WHERE seq = 7")
    assert named(report) == [(7, "secular_frequencies")]


def test_references_to_entries_of_another_kind_are_found(closed: Path) -> None:
    """Appended by another program, well chained, and rows in keeping with them: only the references are wrong."""
    connection = plain(closed)
    for (name,) in connection.execute("SELECT name FROM sqlite_schema WHERE name GLOB '*_in_order'").fetchall():
        connection.execute(f"DROP TRIGGER {name}")
    head = Head(*connection.execute("SELECT seq, digest FROM entries WHERE seq = 7").fetchone())
    drafts = [scan_point(77, 2), secular_frequency(2, 3), secular_frequency(2, 6, calibration=50), due_run(request=20)]
    for stored, _, typed in chain(drafts, head, Stamp(1, 1, "b")):
        assert typed is not None
        connection.execute(INSERTS["entries"], stored)
        connection.execute(INSERTS[typed.table], (stored.seq, *typed.values))
    connection.close()
    rows = [(8, "scan_points"), (9, "secular_frequencies"), (10, "secular_frequencies"), (11, "due_runs")]
    report = verify(closed)
    assert [row for row in dict.fromkeys(named(report)) if row[0]] == rows
    said = " ".join(problem.message for problem in report.problems)
    assert "finding is 3, which is no finding before it" in said
    assert "finding 6 has a row already" in said


def old_record(path: Path) -> tuple[list[tuple[Any, ...]], str]:
    """A record as the first schema left it: its entries, and its head."""
    connection = plain(path)
    connection.close()
    with migrating_engine(path).connect() as migrating:
        migrate(migrating, "0001")
    connection = plain(path)
    assert not connection.execute("SELECT 1 FROM sqlite_schema WHERE name = 'scan_points'").fetchall()
    for stored, _, typed in chain([request(), intent(), note(), outcome(2)], Head(0, NO_DIGEST), Stamp(1, 1, BOOT)):
        connection.execute(INSERTS["entries"], stored)
        if typed is not None:
            connection.execute(INSERTS[typed.table], (stored.seq, *typed.values))
    rows = connection.execute("SELECT * FROM entries ORDER BY seq").fetchall()
    connection.close()
    return rows, rows[-1][-1]


def test_a_record_of_the_first_schema_is_brought_to_this_one_and_still_verifies(
    path: Path, clock: StandingClock
) -> None:
    rows, head = old_record(path)
    with pytest.raises(ConfigError, match="older schema 0001, expected 0002: start the daemon"):
        Reader.open(path)
    record = Record.open(path, clock=clock, boot_id=BOOT)
    assert (record.last_seq, record.head) == (4, head)
    assert plain(path).execute("SELECT * FROM entries ORDER BY seq").fetchall() == rows
    assert verify(path, head=head).ok
    asked = write_scan(record)
    assert record.close(timeout_s=10)
    report = verify(path, head=head)
    assert (report.ok, report.entries) == (True, 11)
    with Reader.open(path) as reader:
        assert [command.readback for command in reader.setpoints()] == [260.25, None]
        assert len(reader.scan_points(asked)) == 2


def test_an_upgrade_that_is_broken_off_leaves_the_first_schema(
    path: Path, clock: StandingClock, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows, head = old_record(path)
    connection = plain(path)
    connection.execute("CREATE VIEW frequencies AS SELECT 1")  # somebody's own, in the way of ours
    with pytest.raises(Exception, match="frequencies already exists"):
        Record.open(path, clock=clock, boot_id=BOOT)
    names = {name for (name,) in connection.execute("SELECT name FROM sqlite_schema")}
    assert "entries" in names
    assert not names & {*NEW_TABLES, "scans"}
    assert connection.execute("SELECT version_num FROM alembic_version").fetchall() == [("0001",)]
    assert connection.execute("SELECT * FROM entries ORDER BY seq").fetchall() == rows
    connection.execute("DROP VIEW frequencies")
    connection.close()
    Record.open(path, clock=clock, boot_id=BOOT).close()
    assert verify(path, head=head).ok


@pytest.mark.parametrize(
    ("table", "count", "column", "value"),
    [
        ("setpoints", 1, "setpoint", "tickle.frequency"),
        ("scan_points", 2, "counts", 412),
        ("scans", 1, "flags", "wide near_edge"),
        ("frequencies", 1, "difference_sigma", 2.0),
        ("due_times", 1, "due", "2026-03-01T12:00:00.000000Z"),
    ],
)
def test_every_table_for_people_exports_as_csv_and_as_lines_of_json(
    planned: Path, table: str, count: int, column: str, value: Any
) -> None:
    out = io.StringIO(newline="")
    assert export(planned, out, "csv", table) == count
    rows = list(csv.DictReader(io.StringIO(out.getvalue())))
    assert type(value)(rows[-1][column]) == value
    out = io.StringIO()
    assert export(planned, out, "jsonl", table) == count
    lines = [json.loads(line) for line in out.getvalue().splitlines()]
    assert lines[-1][column] == value
    assert [list(line) for line in lines] == [sorted(rows[0])] * count


def test_an_export_of_no_table_is_refused(closed: Path) -> None:
    with pytest.raises(BadRequest, match="unknown table 'entries', expected setpoints or scan_points or scans or"):
        export(closed, io.StringIO(), "csv", "entries")


def test_the_new_kinds_are_known() -> None:
    new = {"scan_point", "estimate", "finding", "secular_frequency", "due_run", "claim", "pause"}
    assert new <= set(KINDS)
    assert len(set(KINDS)) == len(KINDS)
