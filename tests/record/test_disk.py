"""What the disk does to the record: full, read-only, gone, and a process killed in the middle."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from tests.record.samples import BOOT, StandingClock, intent, note, plain
from trapd.errors import RecordFailed, RecordUnwritable
from trapd.record import Entry, Reader, Record, verify
from trapd.record.connection import reading_engine, writing_engine

root_only = pytest.mark.skipif(os.geteuid() != 0, reason="needs root: mounts a small file system or sets a file flag")


@contextmanager
def mounted(folder: Path, size: str) -> Iterator[Path]:
    folder.mkdir()
    mount = subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={size}", "trapd-test", folder], capture_output=True)
    if mount.returncode:
        pytest.skip(f"this machine mounts no tmpfs: {mount.stderr.decode().strip()}")
    try:
        yield folder
    finally:
        subprocess.run(["umount", "-l", folder], check=True)


@root_only
def test_a_full_disk_refuses_loses_nothing_acknowledged_and_writes_again_when_there_is_room(
    tmp_path: Path, clock: StandingClock
) -> None:
    with mounted(tmp_path / "small", "2m") as folder:
        ballast = folder / "ballast"
        ballast.write_bytes(b"\0" * 1_000_000)
        record = Record.open(folder / "trap.sqlite", clock=clock, boot_id=BOOT)
        kept: list[Entry] = []
        while (future := record.append(note("x" * 4000), intent())).exception() is None:
            kept += future.result()
        with pytest.raises(RecordUnwritable, match="disk is full"):
            future.result()
        assert kept
        for _ in range(3):
            with pytest.raises(RecordUnwritable):
                record.append(note("x" * 400_000)).result()
        ballast.unlink()
        (after,) = record.append(note()).result()
        assert after.seq == kept[-1].seq + 1
        assert record.close(timeout_s=10)
        with Reader.open(folder / "trap.sqlite") as reader:
            assert reader.entries(limit=10_000) == (*kept, after)
        assert verify(folder / "trap.sqlite").ok


@root_only
def test_a_file_made_read_only_fails_appends_until_it_is_writable(
    record: Record, path: Path, clock: StandingClock
) -> None:
    if shutil.which("chattr") is None or subprocess.run(["chattr", "+i", path], capture_output=True).returncode:
        pytest.skip("this file system has no immutable flag")
    try:
        with pytest.raises(RecordUnwritable, match="read-only"):
            record.append(note()).result()
        record.close()
        with pytest.raises(RecordUnwritable, match="read-only"):
            Record.open(path, clock=clock, boot_id=BOOT)
    finally:
        subprocess.run(["chattr", "-i", path], check=True)
    again = Record.open(path, clock=clock, boot_id=BOOT)
    assert again.append(note()).result()[0].seq == 1
    again.close()


@root_only
def test_a_record_on_a_read_only_medium_is_read_and_verified(record: Record, tmp_path: Path) -> None:
    record.append(note(), intent()).result()
    record.close()
    with mounted(tmp_path / "medium", "4m") as folder:
        copy = shutil.copy(record.path, folder)
        subprocess.run(["mount", "-o", "remount,ro", folder], check=True)
        assert verify(Path(copy)).ok
        with Reader.open(Path(copy)) as reader:
            assert len(reader.entries()) == 2


_APPEND_FOR_EVER = """
import pathlib, sys
from tests.record.samples import intent, note, outcome
from trapd.clock import SystemClock
from trapd.record import Record, SameCommit
record = Record.open(pathlib.Path(sys.argv[1]), clock=SystemClock(), boot_id="b")
while True:
    futures = [record.append(intent(), outcome(SameCommit(0)), note("x" * 3000)) for _ in range(7)]
    for future in futures:
        print(future.result()[-1].seq, future.result()[-1].digest, flush=True)
"""


@pytest.mark.parametrize("lines", [1, 10, 101])
def test_a_process_killed_in_mid_append_leaves_a_whole_chain_with_all_it_acknowledged(path: Path, lines: int) -> None:
    process = subprocess.Popen([sys.executable, "-c", _APPEND_FOR_EVER, path], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    acknowledged = [process.stdout.readline() for _ in range(lines)]
    process.send_signal(signal.SIGKILL)
    acknowledged += process.stdout.readlines()
    assert process.wait() == -signal.SIGKILL
    whole = [line for line in acknowledged if line.endswith("\n")]
    seq, digest = whole[-1].split()
    report = verify(path, head=digest)
    assert report.problems == ()
    assert report.last_seq >= int(seq)
    assert report.entries % 3 == 0
    record = Record.open(path, clock=StandingClock(), boot_id=BOOT)
    assert record.append(note()).result()[0].seq == report.last_seq + 1
    record.close()


@pytest.mark.skipif(shutil.which("strace") is None, reason="needs strace")
def test_the_disk_is_told_to_sync_before_an_append_is_answered(path: Path, tmp_path: Path) -> None:
    code = (
        "import pathlib, sys, os\n"
        "from tests.record.samples import note\n"
        "from trapd.clock import SystemClock\n"
        "from trapd.record import Record\n"
        "record = Record.open(pathlib.Path(sys.argv[1]), clock=SystemClock(), boot_id='b')\n"
        "record.append(note('before')).result()\n"
        "for _ in range(3):\n"
        "    os.write(2, b'ask\\n'); record.append(note()).result(); os.write(2, b'answer\\n')\n"
    )
    trace = tmp_path / "trace"
    command = ["strace", "-f", "-y", "-e", "trace=write,pwrite64,fdatasync,fsync", "-o", str(trace)]
    command += [sys.executable, "-c", code, str(path)]
    subprocess.run(command, check=True, stderr=subprocess.DEVNULL)
    events = []
    for line in trace.read_text().splitlines():
        for name, mark in (
            ("ask", '"ask\\n"'),
            ("write", "pwrite64("),
            ("sync", "fdatasync("),
            ("answer", '"answer\\n"'),
        ):
            if mark in line and (name in ("ask", "answer") or "-wal" in line):
                events.append(name)
    asked = events[events.index("ask") :]
    for _ in range(3):
        until = asked.index("answer")
        step, asked = asked[:until], asked[until + 1 :]
        assert step[0] == "ask"
        assert "write" in step
        assert step[-1] == "sync"


def test_readers_see_whole_commits_while_the_writer_writes(record: Record, path: Path) -> None:
    futures = [record.append(intent(), note()) for _ in range(300)]
    with Reader.open(path) as reader:
        while not futures[-1].done():
            entries = reader.entries(limit=10_000)
            assert len(entries) % 2 == 0
            assert [entry.seq for entry in entries] == list(range(1, len(entries) + 1))
            assert verify(path).ok
        assert reader.head() == (600, record.head)


def test_another_program_that_holds_the_file_locked_is_named_as_the_cause(
    path: Path, clock: StandingClock, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("trapd.record.connection._BUSY_TIMEOUT_S", 0.01)
    record = Record.open(path, clock=clock, boot_id=BOOT)
    other = plain(path)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(RecordUnwritable, match="another program holds it locked"):
        record.append(note()).result()
    other.execute("ROLLBACK")
    assert record.append(note()).result()[0].seq == 1
    assert record.close(timeout_s=10)


def test_a_file_that_went_away_is_one_clear_error_for_readers(record: Record, path: Path) -> None:
    record.append(note()).result()
    reader = Reader(path, reading_engine(path, bytes.decode))
    path.rename(path.with_name("away.sqlite"))
    with pytest.raises(RecordFailed, match=r"cannot be opened .* nothing more was read"):
        reader.entries()


def test_a_file_that_takes_no_write_ahead_log_is_refused(monkeypatch: pytest.MonkeyPatch, path: Path) -> None:
    # A database in memory stands for a file system on which SQLite cannot share memory between processes.
    monkeypatch.setattr("trapd.record.connection._connect", lambda uri: plain(Path(":memory:")))
    with pytest.raises(RecordUnwritable, match="journal mode memory"):
        writing_engine(path).connect()
