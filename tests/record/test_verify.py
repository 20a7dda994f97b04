"""Whatever is changed behind the record's back is found, and the entry is named."""

from __future__ import annotations

import hashlib
import json
import sqlite3
from collections.abc import Callable
from pathlib import Path

import pytest

from tests.record.samples import BOOT, StandingClock, intent, note, outcome, plain, write_day
from trapd.errors import NotFound, RecordDamaged
from trapd.record import Record, Report, verify
from trapd.record.entry import Head, Sealed, Stamp, chain


@pytest.fixture
def closed(path: Path, clock: StandingClock) -> Path:
    """Six entries: request, verdict, intent, heartbeat, outcome, intent."""
    record = Record.open(path, clock=clock, boot_id=BOOT)
    write_day(record)
    assert record.close(timeout_s=10)
    return path


def behind_its_back(path: Path, *statements: str) -> Report:
    """Change the file without its triggers and put them back, so that only the rows tell."""
    connection = plain(path)
    triggers = connection.execute("SELECT name, sql FROM sqlite_schema WHERE type = 'trigger'").fetchall()
    for name, _ in triggers:
        connection.execute(f"DROP TRIGGER {name}")
    for statement in statements:
        connection.execute(statement)
    for _, sql in triggers:
        connection.execute(sql)
    connection.close()
    return verify(path)


def named(report: Report) -> list[tuple[int | None, str]]:
    assert report.ok is (report.problem_count == 0)
    return [(problem.seq, problem.table) for problem in report.problems]


def test_an_untouched_record_verifies(closed: Path) -> None:
    report = verify(closed)
    assert (report.ok, report.problems, report.problem_count) == (True, (), 0)
    assert (report.entries, report.first_seq, report.last_seq) == (6, 1, 6)
    assert report.head == plain(closed).execute("SELECT digest FROM entries WHERE seq = 6").fetchone()[0]


def test_an_empty_record_verifies(record: Record, path: Path) -> None:
    report = verify(path)
    assert (report.ok, report.entries, report.first_seq, report.last_seq, report.head) == (True, 0, 0, 0, "0" * 64)
    assert verify(path, head="0" * 64).ok


def test_dropping_the_triggers_and_putting_them_back_alone_changes_nothing(closed: Path) -> None:
    assert behind_its_back(closed).ok


@pytest.mark.parametrize("seq", [1, 3, 6])
@pytest.mark.parametrize(
    "change",
    [
        "time_us = time_us + 1",
        "monotonic_ns = 0",
        "boot_id = 'another'",
        "kind = 'note'",
        "actor = 'bob'",
        "body = replace(body, 'ada', 'bob')",
        "body = body || ' '",
        "body = '[]'",
        "body = '{'",
        "body = '{\"data\":{}}'",
        "digest = replace(digest, substr(digest, 1, 1), 'x')",
        "seq = 100",
    ],
)
def test_a_changed_column_of_an_entry_names_that_entry(closed: Path, seq: int, change: str) -> None:
    report = behind_its_back(closed, f"UPDATE entries SET {change} WHERE seq = {seq}")
    where = 100 if change == "seq = 100" else seq
    assert (where, "entries") in named(report)
    assert not report.ok


@pytest.mark.parametrize(
    ("table", "seq", "change"),
    [
        ("intents", 3, "value = value + 1e-13 * value"),
        ("intents", 6, "who = 'bob'"),
        ("intents", 3, "channel = 1"),
        ("intents", 3, "step = NULL"),
        ("outcomes", 5, "readback = NULL"),
        ("outcomes", 5, "state = 'differs'"),
        ("outcomes", 5, "sent_us = sent_us + 1"),
        ("outcomes", 5, "intent = 6"),
    ],
)
def test_a_changed_typed_row_names_its_entry(closed: Path, table: str, seq: int, change: str) -> None:
    report = behind_its_back(closed, f"UPDATE {table} SET {change} WHERE seq = {seq}")
    assert set(named(report)) == {(seq, table)}


def test_a_typed_row_removed_or_invented_is_named(closed: Path) -> None:
    invented = (
        "INSERT INTO intents SELECT {}, request, verdict, ramp, step, setpoint, value, unit, instrument, channel, "
    )
    invented += "quantity, level, who, why FROM intents WHERE seq = 3"
    report = behind_its_back(
        closed, "DELETE FROM outcomes", invented.format(4), invented.format(40), "DELETE FROM intents WHERE seq = 6"
    )
    expected = [(4, "intents"), (5, "outcomes"), (6, "intents"), (40, "intents")]
    assert named(report) == expected


def test_an_entry_removed_is_named_by_the_one_that_follows(closed: Path) -> None:
    assert named(behind_its_back(closed, "DELETE FROM entries WHERE seq = 4"))[0] == (5, "entries")


def test_two_entries_swapped_are_both_named(closed: Path) -> None:
    swap = "UPDATE entries SET seq = {} WHERE seq = {}"
    report = behind_its_back(closed, swap.format(100, 2), swap.format(2, 4), swap.format(4, 100))
    assert {(2, "entries"), (4, "entries")} <= set(named(report))


def test_two_bodies_swapped_with_their_digests_are_both_named(closed: Path) -> None:
    connection = plain(closed)
    rows = {
        seq: connection.execute("SELECT body, digest FROM entries WHERE seq = ?", (seq,)).fetchone() for seq in (2, 4)
    }
    connection.close()
    update = "UPDATE entries SET body = '{}', digest = '{}' WHERE seq = {}"
    report = behind_its_back(closed, update.format(*rows[4], 2), update.format(*rows[2], 4))
    assert {(2, "entries"), (4, "entries")} <= set(named(report))


def test_a_chain_whose_entries_do_not_name_the_digest_before_is_caught(closed: Path) -> None:
    """Everything consistent, columns and digests, but each entry as if it were the first."""
    connection = plain(closed)
    updates = []
    for seq, body in connection.execute("SELECT seq, body FROM entries").fetchall():
        loose = json.dumps(json.loads(body) | {"previous": "0" * 64}, sort_keys=True, separators=(",", ":"))
        digest = hashlib.sha256(b"\x00" + loose.encode()).hexdigest()
        updates.append(f"UPDATE entries SET body = '{loose}', digest = '{digest}' WHERE seq = {seq}")
    connection.close()
    assert named(behind_its_back(closed, *updates)) == [(seq, "entries") for seq in (2, 3, 4, 5, 6)]


def test_a_rewritten_or_shortened_record_is_found_only_by_a_head_noted_elsewhere(closed: Path) -> None:
    noted = verify(closed).head
    assert verify(closed, head=noted).ok
    report = behind_its_back(closed, "DELETE FROM intents WHERE seq = 6", "DELETE FROM entries WHERE seq = 6")
    assert report.ok
    report = verify(closed, head=noted)
    assert [(problem.seq, noted in problem.message) for problem in report.problems] == [(None, True)]


def test_a_head_noted_long_ago_is_still_in_the_record(record: Record, path: Path) -> None:
    record.append(note()).result()
    noted = record.head
    record.append(note()).result()
    assert verify(path, head=noted).ok


def test_one_byte_of_the_file_changed_names_the_entry(closed: Path) -> None:
    checkpointed = closed.read_bytes()
    assert checkpointed.count(b"see how far it goes") == 1
    closed.write_bytes(checkpointed.replace(b"see how far it goes", b"see how far it Goes"))
    assert named(verify(closed)) == [(1, "entries")]


def test_one_byte_changed_to_what_is_no_text_names_the_entry(closed: Path) -> None:
    closed.write_bytes(closed.read_bytes().replace(b"see how far it goes", b"see how far it \xffoes"))
    assert (1, "entries") in named(verify(closed))


def test_a_typed_row_changed_in_the_file_itself_names_the_entry(closed: Path) -> None:
    checkpointed = closed.read_bytes()
    # The row of intent 3 ends with its texts "ada" and "warm-up" side by side; in the JSON they are apart.
    assert checkpointed.count(b"adawarm-up") == 2
    closed.write_bytes(checkpointed.replace(b"adawarm-up", b"bobwarm-up"))
    assert named(verify(closed)) == [(3, "intents"), (6, "intents")]


def test_a_file_whose_pages_are_overwritten_is_reported_and_not_a_traceback(record: Record, path: Path) -> None:
    record.append(*[note("x" * 500)] * 200).result()
    record.close()
    pages = bytearray(path.read_bytes())
    middle = len(pages) // 2 // 4096 * 4096
    pages[middle : middle + 4096] = b"\xaa" * 4096
    path.write_bytes(pages)
    report = verify(path)
    assert not report.ok
    assert {table for _, table in named(report)} & {"file", "entries"}


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ("DROP TRIGGER entries_no_delete", "trigger entries_no_delete is missing"),
        ("DROP VIEW refusals", "view refusals is missing"),
        ("CREATE UNIQUE INDEX door ON entries (digest)", "index door does not belong there"),
        ("CREATE TRIGGER door AFTER INSERT ON entries BEGIN SELECT 1; END", "trigger door does not belong there"),
    ],
)
def test_a_changed_schema_is_found(closed: Path, change: str, said: str) -> None:
    connection = plain(closed)
    connection.execute(change)
    connection.close()
    assert [problem.message for problem in verify(closed).problems] == [said]


def test_a_trigger_made_harmless_is_found(closed: Path) -> None:
    connection = plain(closed)
    connection.execute("PRAGMA writable_schema = ON")
    connection.execute(
        "UPDATE sqlite_schema SET sql = replace(sql, ' BEGIN', ' WHEN 0 BEGIN') WHERE name = 'entries_no_update'"
    )
    connection.close()
    assert [problem.message for problem in verify(closed).problems] == ["trigger entries_no_update was changed"]


def test_a_view_that_people_add_is_theirs(closed: Path) -> None:
    connection = plain(closed)
    connection.execute("CREATE VIEW mine AS SELECT * FROM setpoints")
    connection.close()
    assert verify(closed).ok


def forged(path: Path, make: Callable[[sqlite3.Connection], None]) -> Report:
    connection = plain(path)
    make(connection)
    connection.close()
    return verify(path)


def test_references_to_entries_of_another_kind_are_found(closed: Path) -> None:
    """Appended by another program, well chained, and typed rows in keeping with them: only the references are wrong."""

    def append(connection: sqlite3.Connection) -> None:
        head = Head(*connection.execute("SELECT seq, digest FROM entries WHERE seq = 6").fetchone())
        drafts = [intent(verdict=1, ramp=2), intent(request=77)]
        for stored, entry, _ in chain(drafts, head, Stamp(1, 1, "b")):
            connection.execute("INSERT INTO entries VALUES (?, ?, ?, ?, ?, ?, ?, ?)", stored)
            data = {"request": None, "verdict": None, "ramp": None, "seq": stored.seq, **entry.data}
            connection.execute(
                "INSERT INTO intents VALUES (:seq, :request, :verdict, :ramp, :step, :setpoint, :value, :unit, "
                ":instrument, :channel, :quantity, :level, :who, :why)",
                data,
            )

    report = forged(closed, append)
    assert named(report) == [(7, "intents"), (7, "intents"), (8, "intents")]


def test_a_second_outcome_of_an_intent_is_found(closed: Path) -> None:
    def append(connection: sqlite3.Connection) -> None:
        connection.execute("DROP TRIGGER outcomes_in_order")
        head = Head(*connection.execute("SELECT seq, digest FROM entries WHERE seq = 6").fetchone())
        ((stored, entry, _),) = chain([outcome(3)], head, Stamp(1, 1, "b"))
        connection.execute("INSERT INTO entries VALUES (?, ?, ?, ?, ?, ?, ?, ?)", stored)
        row = "(7, :intent, :state, :sent_us, :acknowledged_us, :verified_us, :readback, :difference, :error)"
        connection.execute(f"INSERT INTO outcomes VALUES {row}", dict(entry.data))

    assert named(forged(closed, append)) == [(None, "schema"), (7, "outcomes")]


def test_an_index_out_of_step_with_its_table_is_found(closed: Path) -> None:
    def append(connection: sqlite3.Connection) -> None:
        connection.execute("PRAGMA writable_schema = ON")
        connection.execute(
            "UPDATE sqlite_schema SET rootpage = (SELECT rootpage FROM sqlite_schema WHERE name = "
            "'outcomes_by_intent') WHERE name = 'entries_by_time'"
        )

    assert (None, "file") in named(forged(closed, append))


@pytest.mark.parametrize("value", ['"much"', "1e999", "12345678901234567890" * 20])
def test_an_entry_that_makes_no_typed_row_is_found(closed: Path, value: str) -> None:
    def append(connection: sqlite3.Connection) -> None:
        head = Head(*connection.execute("SELECT seq, digest FROM entries WHERE seq = 6").fetchone())
        fields = json.dumps(dict(intent().data) | {"value": 1})[1:-1].replace('"value": 1, ', "")
        sealed = Sealed("intent", "x", '"intent"', '"x"', f'{{{fields},"value":{value}}}', {}, None)
        ((stored, _, _),) = chain([sealed], head, Stamp(1, 1, "b"))
        connection.execute("INSERT INTO entries VALUES (?, ?, ?, ?, ?, ?, ?, ?)", stored)

    assert named(forged(closed, append)) == [(7, "entries")]


def test_many_problems_are_counted_and_the_first_are_told(record: Record, path: Path) -> None:
    record.append(*[note()] * 250).result()
    record.close()
    report = behind_its_back(path, "UPDATE entries SET actor = 'bob'")
    assert report.problem_count == 250
    assert [problem.seq for problem in report.problems] == list(range(1, 101))


def test_there_must_be_a_record(path: Path) -> None:
    with pytest.raises(NotFound, match="no record"):
        verify(path)
    path.write_bytes(b"")
    with pytest.raises(Exception, match="is empty"):
        verify(path)
    path.write_bytes(b"x" * 5000)
    with pytest.raises(RecordDamaged):
        verify(path)
