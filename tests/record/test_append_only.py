"""Nobody changes or removes what is in the record, whatever program they use."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.record.samples import StandingClock, intent, note, outcome, plain, write_day, write_scan
from trapd.errors import Bug, RecordDamaged, RecordUnwritable
from trapd.record import Record, verify
from trapd.record.connection import migrating_engine, writing_engine

TABLES = ("entries", "intents", "outcomes", "scan_points", "secular_frequencies", "due_runs")


@pytest.fixture
def other(record: Record, path: Path) -> Iterator[sqlite3.Connection]:
    """A connection of another program, beside the running writer."""
    write_day(record)
    write_scan(record)
    connection = plain(path)
    before = contents(connection)
    yield connection
    assert contents(connection) == before
    assert verify(path).ok
    connection.close()


def contents(connection: sqlite3.Connection) -> list[list[tuple[object, ...]]]:
    return [connection.execute(f"SELECT * FROM {table} ORDER BY seq").fetchall() for table in TABLES]


def attempts(table: str) -> list[str]:
    row = f"SELECT * FROM {table} ORDER BY seq DESC LIMIT 1"
    first = f"SELECT * FROM {table} ORDER BY seq LIMIT 1"
    change = {
        "entries": "actor = 'eve'",
        "intents": "who = 'eve'",
        "outcomes": "state = 'eve'",
        "scan_points": "counts = 0",
        "secular_frequencies": "who = 'eve'",
        "due_runs": "scan = 'eve'",
    }[table]
    return [
        f"UPDATE {table} SET {change}",
        f"UPDATE OR REPLACE {table} SET seq = seq + 1000",
        f"UPDATE OR IGNORE {table} SET {change}",
        f"DELETE FROM {table}",
        f"DELETE FROM {table} WHERE seq = (SELECT max(seq) FROM {table})",
        f"INSERT INTO {table} {row}",
        f"INSERT OR REPLACE INTO {table} {row}",
        f"INSERT OR REPLACE INTO {table} {first}",
        f"INSERT OR IGNORE INTO {table} {row}",
        f"REPLACE INTO {table} {row}",
        f"INSERT INTO {table} {row} ON CONFLICT (seq) DO UPDATE SET {change}",
        f"INSERT INTO {table} {row} ON CONFLICT DO NOTHING",
    ]


@pytest.mark.parametrize("table", TABLES)
@pytest.mark.parametrize("number", range(12))
def test_any_change_from_any_program_raises(other: sqlite3.Connection, table: str, number: int) -> None:
    assert other.execute("PRAGMA recursive_triggers").fetchone() == (0,)
    with pytest.raises(sqlite3.IntegrityError, match="append-only"):
        other.execute(attempts(table)[number])


@pytest.mark.parametrize("seq", [None, 0, -1, 3, 13, 15, 1000])
def test_an_entry_takes_no_place_but_the_next(other: sqlite3.Connection, seq: int | None) -> None:
    assert other.execute("SELECT max(seq) FROM entries").fetchone() == (13,)
    with pytest.raises(sqlite3.IntegrityError):
        other.execute("INSERT OR REPLACE INTO entries VALUES (?, 1, 1, 'b', 'note', 'x', '{}', ?)", (seq, "0" * 64))


def test_no_table_has_a_second_unique_column_that_replace_could_use(other: sqlite3.Connection) -> None:
    for table in TABLES:
        indices = other.execute(f"PRAGMA index_list({table})").fetchall()
        assert [index[1] for index in indices if index[2]] == []


def test_a_typed_row_needs_its_own_new_entry(other: sqlite3.Connection) -> None:
    row = "(?, NULL, NULL, NULL, NULL, 'rods', 1.0, 'V', 'dc', 1, 'voltage_v', 1.0, 'x', '')"
    for seq in (1, 2, 4, 7, 1000):
        with pytest.raises(sqlite3.IntegrityError):
            other.execute(f"INSERT INTO intents VALUES {row}", (seq,))


def test_an_intent_has_one_outcome_and_an_outcome_has_an_intent(record: Record) -> None:
    (asked,) = record.append(intent()).result()
    record.append(outcome(asked.seq)).result()
    head = record.head
    for wrong in (outcome(asked.seq), outcome(2), outcome(99)):
        assert isinstance(record.append(wrong).exception(), Bug)
    assert (record.last_seq, record.head) == (2, head)


@pytest.mark.parametrize(("value", "level"), [("9e999", "1"), ("1", "-9e999"), ("NULL", "1"), ("'much'", "1")])
def test_the_schema_itself_refuses_what_is_no_finite_number(record: Record, path: Path, value: str, level: str) -> None:
    row = "INSERT INTO intents VALUES (1, NULL, NULL, NULL, NULL, 'rods', {}, 'V', 'dc', 1, 'voltage_v', {}, 'x', '')"
    connection = plain(path)
    connection.execute("BEGIN")
    connection.execute("INSERT INTO entries VALUES (1, 1, 1, 'b', 'intent', 'x', '{}', ?)", ("0" * 64,))
    with pytest.raises(sqlite3.IntegrityError):
        connection.execute(row.format(value, level))
    connection.execute(row.format("1.5", "-1.5"))
    connection.close()


@pytest.mark.parametrize(
    "statement",
    [
        "DROP TABLE entries",
        "DROP TRIGGER entries_no_delete",
        "DROP TRIGGER entries_in_order",
        "DROP TABLE outcomes",
        "DROP TABLE secular_frequencies",
        "DROP TRIGGER due_runs_no_update",
    ],
)
def test_our_own_connections_drop_neither_table_nor_trigger(
    other: sqlite3.Connection, path: Path, statement: str
) -> None:
    for engine in (writing_engine(path), migrating_engine(path)):
        with engine.connect() as connection, pytest.raises(Exception, match="not authorized"):
            connection.exec_driver_sql(statement)


@pytest.mark.parametrize("statement", ["DROP VIEW setpoints", "DELETE FROM entries", "UPDATE entries SET seq = 1"])
def test_the_writer_can_append_and_nothing_else(other: sqlite3.Connection, path: Path, statement: str) -> None:
    with writing_engine(path).connect() as connection, pytest.raises(Exception, match="not authorized"):
        connection.exec_driver_sql(statement)


def test_an_entry_appended_by_another_program_is_not_overwritten(path: Path, clock: StandingClock) -> None:
    record = Record.open(path, clock=clock, boot_id="b")
    record.append(note()).result()
    plain(path).execute("INSERT INTO entries VALUES (2, 1, 1, 'b', 'note', 'x', '{}', ?)", ("0" * 64,))
    with pytest.raises(RecordUnwritable, match="another program wrote"):
        record.append(note()).result()
    with pytest.raises(RecordDamaged, match="entry 2"):
        record.append(note()).result()
    assert record.close(timeout_s=10)
    assert verify(path).problems[0].seq == 2
