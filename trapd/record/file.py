"""The record's file in the hands of its one writer: lock, place on the disk, head of the chain, commit."""

from __future__ import annotations

import fcntl
import os
import sqlite3
from collections.abc import Mapping, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Any, cast

from sqlalchemy import Connection, select

from trapd.errors import Locked, RecordDamaged, RecordFailed, RecordUnwritable
from trapd.record.connection import FOREIGN, failure, migrating_engine, writing_engine
from trapd.record.entry import NO_DIGEST, Head, Stored, faults_of
from trapd.record.schema import SCHEMA, migrate, schema_of
from trapd.record.tables import INSERTS, entries

_TAIL = 100
_OUT_OF_TURN = "seq must be the next one"  # what the schema says when an entry is not the next
_Place = tuple[int, int] | None
"""Device and inode: which file this is, whatever it is called. None if there is none."""

_DESCRIPTORS = "/proc/self/fd"
NOTHING = "nothing was written"


class RecordFile:
    """Holds the lock from construction to `close`. Not thread-safe: one thread at a time.

    A file that was renamed away keeps taking writes through an open connection, and nobody would ever find them. So
    before each commit the path must still lead to the very files that were opened, and they must be writable.
    """

    def __init__(self, path: Path) -> None:
        self.path = path.resolve()
        self._names = (str(self.path), f"{self.path}-wal")
        self.head = Head(0, NO_DIGEST)
        self._connection: Connection | None = None
        self._driver: sqlite3.Connection | None = None
        self._places: tuple[_Place, _Place] = (None, None)
        self._log: int | None = None
        self._lock = _lock(self.path)

    def prepare(self) -> None:
        """Create or migrate the file, open it and check the tail of its chain."""
        if self.path.exists() and not os.access(self.path, os.W_OK):
            raise RecordUnwritable(f"{self.path}: the file is read-only; {NOTHING}")
        try:
            engine = migrating_engine(self.path)
            with engine.connect() as connection:
                current = schema_of(connection, self.path)
                connection.rollback()
                if current != SCHEMA:
                    migrate(connection)
        except FOREIGN as error:
            raise failure(error, self.path, NOTHING) from error
        self.connect()

    def connect(self) -> None:
        """Open the file for appending: what was acknowledged must still be there; ``head`` is what is there now."""
        try:
            self._connection = writing_engine(self.path).connect()
            self._driver = cast(sqlite3.Connection, self._connection.connection.driver_connection)
            self.head = read_head(self._connection, self.head)
            self._connection.rollback()
        except FOREIGN as error:
            self.disconnect()
            raise failure(error, self.path, NOTHING) from error
        except RecordFailed:
            self.disconnect()
            raise
        self._places = (_place(self._names[0]), _place(self._names[1]))
        with suppress(OSError):  # without it the log is looked at in the dearer way
            self._log = os.open(self._names[1], os.O_PATH | os.O_CLOEXEC)

    def ready(self) -> Head:
        """The head to continue from, once it is sure that a commit would reach the file. Raises `RecordUnwritable`."""
        if self._driver is None:
            self.connect()
        self._demand_place()
        return self.head

    def commit(self, rows: Mapping[str, Sequence[Sequence[Any]]], head: Head) -> None:
        """Write ``rows`` of each table durably in one transaction, or nothing, after `ready`.

        Raises `RecordUnwritable`, or `sqlite3.IntegrityError` where the schema refuses a row.
        """
        driver = self._driver
        assert driver is not None, "ready() comes first"
        try:
            driver.execute("BEGIN IMMEDIATE")
            for table, insert in INSERTS.items():
                if table in rows:
                    driver.executemany(insert, rows[table])
            driver.execute("COMMIT")
        except sqlite3.IntegrityError as error:
            self.disconnect()
            if _OUT_OF_TURN in str(error):
                raise RecordUnwritable(f"{self.path}: another program wrote to it; {NOTHING}") from error
            raise
        except FOREIGN as error:
            self.disconnect()
            raise failure(error, self.path, NOTHING) from error
        self.head = head

    def disconnect(self) -> None:
        """Roll back and close; the next commit opens the file anew."""
        connection, self._connection, self._driver = self._connection, None, None
        if connection is not None:
            with suppress(sqlite3.Error):  # a transaction that cannot be rolled back goes with its connection
                connection.connection.rollback()
            connection.close()
        log, self._log = self._log, None
        if log is not None:
            os.close(log)

    def close(self) -> None:
        self.disconnect()
        os.close(self._lock)

    def _demand_place(self) -> None:
        name, log = self._names
        if _place(name) == self._places[0] and self._log_in_place() and os.access(name, os.W_OK):
            return
        if _place(name) != self._places[0]:
            raise RecordUnwritable(f"{self.path} was moved away, deleted or replaced while in use; {NOTHING}")
        if _place(log) != self._places[1]:
            self._save_log()
            raise RecordUnwritable(f"{log} was removed while in use: restart the daemon; {NOTHING}")
        raise RecordUnwritable(f"{name}: the file is read-only; {NOTHING}")

    def _log_in_place(self) -> bool:
        """Whether the log still has its name, asked without reading its times where the system can say so.

        Linux from 6.13 on gives a file a time of its own for the first write after each look at its times, and must
        store it: a `stat` of the log before each commit made each sync a third to a half slower (measured).
        """
        try:
            if os.readlink(f"{_DESCRIPTORS}/{self._log}") == self._names[1]:  # "... (deleted)" if it has none
                return True
        except OSError:
            pass
        return _place(self._names[1]) == self._places[1]

    def _save_log(self) -> None:
        """Copy what only the removed log holds into the file, through the log that is still open."""
        assert self._driver is not None
        with suppress(sqlite3.Error):  # tried again with the next commit
            self._driver.execute("PRAGMA wal_checkpoint").fetchall()


def read_head(connection: Connection, known: Head) -> Head:
    """The newest entry, after checking the chain over the last entries and that ``known`` is still among them all."""
    newest = connection.execute(select(entries).order_by(entries.c.seq.desc()).limit(_TAIL + 1)).all()
    tail = [Stored(*row) for row in reversed(newest)]
    before = Head(0, NO_DIGEST)
    if len(tail) > _TAIL:
        before = Head(tail[0].seq, tail.pop(0).digest)
    for stored in tail:
        faults, _ = faults_of(stored, before)
        if faults:
            raise RecordDamaged(f"the record is damaged at entry {stored.seq}: {'; '.join(faults)}; {NOTHING}")
        before = Head(stored.seq, stored.digest)
    if known.seq:
        kept = connection.execute(select(entries.c.digest).where(entries.c.seq == known.seq)).scalar_one_or_none()
        if kept != known.digest:
            raise RecordUnwritable(f"the record lost entry {known.seq}, which was written before; {NOTHING}")
    return before


def _place(path: str) -> _Place:
    try:
        status = os.stat(path)
    except OSError:
        return None
    return status.st_dev, status.st_ino


def _lock(path: Path) -> int:
    """Lock a file beside the record. Not the record itself: closing any descriptor of it would drop SQLite's locks."""
    lock = path.with_name(path.name + ".lock")
    try:
        descriptor = os.open(lock, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    except OSError as error:
        raise RecordUnwritable(f"{lock} cannot be made ({error.strerror}); {NOTHING}") from error
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        os.close(descriptor)
        raise Locked(f"{path} is being written by another process, which holds {lock.name}; {NOTHING}") from error
    return descriptor
