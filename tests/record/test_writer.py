from __future__ import annotations

import subprocess
import sys
import threading
from pathlib import Path

import pytest

from tests.record.samples import BOOT, StandingClock, intent, note, outcome, plain
from trapd.errors import Bug, ConfigError, Locked, RecordDamaged, RecordUnwritable
from trapd.record import Draft, Entry, Reader, Record, SameCommit, verify
from trapd.record.entry import Head, Stamp, chain
from trapd.record.file import RecordFile
from trapd.record.schema import SCHEMA, migrations


def test_entries_are_numbered_in_the_order_of_the_appends(record: Record) -> None:
    futures = [record.append(*[note(str(number))] * (number % 3 + 1)) for number in range(200)]
    entries = [entry for future in futures for entry in future.result()]
    assert [entry.seq for entry in entries] == list(range(1, 1 + len(entries)))
    assert [entry.data["note"] for entry in entries] == [str(n) for n in range(200) for _ in range(n % 3 + 1)]


def test_an_answered_append_is_seen_by_other_programs_with_its_typed_rows(record: Record, path: Path) -> None:
    other = plain(path)
    (asked,) = record.append(intent(271.5)).result()
    assert other.execute("SELECT value, state FROM setpoints").fetchall() == [(271.5, "unknown")]
    record.append(outcome(asked.seq, readback=271.75)).result()
    assert other.execute("SELECT readback, state FROM setpoints").fetchall() == [(271.75, "confirmed")]


def test_an_append_never_waits_for_the_disk(record: Record, path: Path) -> None:
    other = plain(path)
    other.execute("BEGIN IMMEDIATE")  # holds the writer up
    futures = [record.append(note()) for _ in range(50)]
    assert not any(future.done() for future in futures)
    other.execute("ROLLBACK")
    assert [future.result()[0].seq for future in futures] == list(range(1, 51))


def test_appends_that_wait_share_a_commit_and_listeners_hear_of_each_commit_once(record: Record, path: Path) -> None:
    commits: list[tuple[Entry, ...]] = []
    record.add_listener(commits.append)
    other = plain(path)
    other.execute("BEGIN IMMEDIATE")
    futures = [record.append(note()) for _ in range(50)]
    other.execute("ROLLBACK")
    entries = [entry for future in futures for entry in future.result()]
    record.append(note()).result()
    assert [entry for commit in commits[:-1] for entry in commit] == entries
    assert len(commits) <= 3


def test_one_bad_append_among_many_in_a_commit_fails_alone(record: Record, path: Path) -> None:
    other = plain(path)
    other.execute("BEGIN IMMEDIATE")
    held = record.append(note())  # the writer waits with this one, the others gather behind it
    unplaced = Draft(kind="note", actor="a", data={"of": SameCommit(5)})
    drafts = (note(), outcome(77), unplaced, note())
    futures = [record.append(draft) for draft in drafts]
    other.execute("ROLLBACK")
    assert held.result()[0].seq == 1
    assert [type(future.exception()) for future in futures] == [type(None), Bug, Bug, type(None)]
    assert [futures[0].result()[0].seq, futures[3].result()[0].seq] == [2, 3]


def test_an_entry_well_chained_by_another_program_is_continued_from(record: Record, path: Path) -> None:
    record.append(note()).result()
    ((stored, _, _),) = chain([note("from elsewhere")], Head(1, record.head), Stamp(1, 1, "b"))
    plain(path).execute("INSERT INTO entries VALUES (?, ?, ?, ?, ?, ?, ?, ?)", stored)
    with pytest.raises(RecordUnwritable, match="another program wrote"):
        record.append(note()).result()
    assert record.append(note()).result()[0].seq == 3
    assert verify(path).ok


def test_a_file_put_back_without_what_was_acknowledged_is_not_continued(
    path: Path, clock: StandingClock, monkeypatch: pytest.MonkeyPatch
) -> None:
    Record.open(path, clock=clock, boot_id=BOOT).close()
    backup = path.with_name("backup.sqlite")
    backup.write_bytes(path.read_bytes())
    monkeypatch.setattr("trapd.record.connection._BUSY_TIMEOUT_S", 0.01)
    record = Record.open(path, clock=clock, boot_id=BOOT)
    record.append(note()).result()
    other = plain(path)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(RecordUnwritable, match="locked"):
        record.append(note()).result()  # and so lets go of the file
    other.close()
    kept = path.rename(path.with_name("kept.sqlite"))
    with pytest.raises(RecordUnwritable, match="cannot be opened"):
        record.append(note()).result()
    backup.rename(path)
    with pytest.raises(RecordUnwritable, match="lost entry 1"):
        record.append(note()).result()
    kept.replace(path)
    assert record.append(note()).result()[0].seq == 2
    record.close()


def test_a_listener_that_raises_stops_neither_the_writer_nor_the_others(record: Record) -> None:
    heard: list[int] = []
    record.add_listener(lambda entries: heard.remove(99))
    record.add_listener(lambda entries: heard.extend(entry.seq for entry in entries))
    record.append(note()).result()
    record.append(note()).result()
    record.close()
    assert heard == [1, 2]


def test_an_append_of_nothing_is_nothing(record: Record) -> None:
    assert record.append().result() == ()
    assert record.last_seq == 0


def test_an_answer_cannot_be_cancelled(record: Record) -> None:
    future = record.append(note())
    assert not future.cancel()
    assert future.result()[0].seq == 1


def test_closing_writes_what_waits_and_refuses_what_comes_later(record: Record, path: Path) -> None:
    futures = [record.append(note()) for _ in range(500)]
    assert record.close(timeout_s=10)
    assert futures[-1].result()[0].seq == 500
    with pytest.raises(RecordUnwritable, match="closed"):
        record.append(note()).result()
    assert verify(path).entries == 500


def test_the_chain_goes_on_where_it_ended(path: Path, clock: StandingClock) -> None:
    heads = []
    for _ in range(3):
        record = Record.open(path, clock=clock, boot_id=BOOT)
        heads.append(record.head)
        record.append(note(), intent()).result()
        assert record.close(timeout_s=10)
    report = verify(path, head=heads[1])
    assert (report.ok, report.entries, heads[0]) == (True, 6, "0" * 64)


def test_a_second_writer_is_refused(record: Record, path: Path, clock: StandingClock) -> None:
    link = path.with_name("link.sqlite")
    link.symlink_to(path)
    for name in (path, link):
        with pytest.raises(Locked, match=r"trap\.sqlite"):
            Record.open(name, clock=clock, boot_id=BOOT)
    record.close()
    Record.open(link, clock=clock, boot_id=BOOT).close()


def test_a_damaged_tail_is_not_continued(path: Path, clock: StandingClock) -> None:
    record = Record.open(path, clock=clock, boot_id=BOOT)
    record.append(*[note()] * 150).result()
    record.close()
    other = plain(path)
    other.execute("DROP TRIGGER entries_no_update")
    other.execute("UPDATE entries SET body = replace(body, 'nothing', 'Nothing') WHERE seq = 120")
    other.close()
    with pytest.raises(RecordDamaged, match="entry 120"):
        Record.open(path, clock=clock, boot_id=BOOT)


def test_another_programs_file_is_left_alone(path: Path, clock: StandingClock) -> None:
    other = plain(path)
    other.execute("CREATE TABLE notes (text TEXT)")
    other.close()
    before = path.read_bytes()
    with pytest.raises(ConfigError, match="another program"):
        Record.open(path, clock=clock, boot_id=BOOT)
    with pytest.raises(ConfigError, match="another program"):
        Reader.open(path)
    assert path.read_bytes() == before


def test_a_file_that_is_no_database_is_left_alone(path: Path, clock: StandingClock) -> None:
    path.write_text("a notebook page, long enough to be looked at\n" * 100)
    before = path.read_bytes()
    with pytest.raises(RecordDamaged, match="not a sound SQLite file"):
        Record.open(path, clock=clock, boot_id=BOOT)
    with pytest.raises(RecordDamaged, match="not a sound SQLite file"):
        verify(path)
    assert path.read_bytes() == before


def test_a_newer_schema_is_left_alone(path: Path, clock: StandingClock) -> None:
    Record.open(path, clock=clock, boot_id=BOOT).close()
    other = plain(path)
    other.execute("UPDATE alembic_version SET version_num = '9999'")
    other.close()
    for use in (lambda: Record.open(path, clock=clock, boot_id=BOOT), lambda: Reader.open(path), lambda: verify(path)):
        with pytest.raises(ConfigError, match="newer trapd"):
            use()


def test_readers_do_not_migrate(path: Path, clock: StandingClock) -> None:
    Record.open(path, clock=clock, boot_id=BOOT).close()
    other = plain(path)
    other.execute("UPDATE alembic_version SET version_num = '0000'")
    other.close()
    with pytest.raises(ConfigError, match="older schema 0000"):
        Reader.open(path)


def test_a_folder_that_does_not_exist_is_one_clear_error(tmp_path: Path, clock: StandingClock) -> None:
    with pytest.raises(RecordUnwritable, match=r"cannot be made \(No such file or directory\)"):
        Record.open(tmp_path / "nowhere" / "trap.sqlite", clock=clock, boot_id=BOOT)


def test_the_schema_we_know_is_the_newest_migration() -> None:
    revisions = sorted(file.name[:4] for file in (migrations() / "versions").glob("*.py"))
    assert revisions[-1] == SCHEMA


def test_an_up_to_date_record_opens_without_alembic(record: Record, path: Path) -> None:
    record.close()
    code = (
        "import sys, pathlib; from trapd.record import Record, Reader; from trapd.clock import SystemClock\n"
        f"path = pathlib.Path({str(path)!r})\n"
        "Record.open(path, clock=SystemClock(), boot_id='b').close(); Reader.open(path).entries()\n"
        "sys.exit('alembic' in sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_the_writers_own_bug_fails_the_append_and_not_the_thread(
    record: Record, monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as patch:
        patch.setattr(RecordFile, "ready", lambda file: 1 / 0)
        assert "ZeroDivisionError" in str(record.append(note()).exception())
    assert record.append(note()).result()[0].seq == 1


def test_close_says_when_it_could_not_finish(path: Path, clock: StandingClock) -> None:
    record = Record.open(path, clock=clock, boot_id=BOOT)
    held, release = threading.Event(), threading.Event()

    def hold(entries: tuple[Entry, ...]) -> None:
        held.set()
        release.wait(10)

    record.add_listener(hold)
    record.append(note())
    assert held.wait(10)
    assert not record.close(timeout_s=0)
    release.set()
    assert record.close(timeout_s=10)
