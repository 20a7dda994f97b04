"""How the record's file is opened: to write, to migrate, to read. What a connection may do is fixed here.

Every connection carries an authorizer, so that none of our own code, whatever it is handed, drops a table or a trigger.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from pathlib import Path

from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.exc import DBAPIError
from sqlalchemy.pool import NullPool, QueuePool

from trapd.errors import RecordDamaged, RecordFailed, RecordUnwritable

FOREIGN = (DBAPIError, sqlite3.Error, UnicodeDecodeError)
"""What working with a file raises; the last for stored text, or a message of SQLite that quotes the file, not UTF-8."""

_BUSY_TIMEOUT_S = 2.0
_READ = {
    sqlite3.SQLITE_SELECT,
    sqlite3.SQLITE_READ,
    sqlite3.SQLITE_FUNCTION,
    sqlite3.SQLITE_TRANSACTION,
    sqlite3.SQLITE_RECURSIVE,
    sqlite3.SQLITE_PRAGMA,
}
_APPEND = _READ | {sqlite3.SQLITE_INSERT}
_DROP = {
    sqlite3.SQLITE_DROP_TABLE,
    sqlite3.SQLITE_DROP_TRIGGER,
    sqlite3.SQLITE_DROP_TEMP_TABLE,
    sqlite3.SQLITE_DROP_TEMP_TRIGGER,
}


def writing_engine(path: Path) -> Engine:
    """Appends and nothing else. A transaction is BEGIN IMMEDIATE; a commit is on disk when it returns."""

    def connect() -> sqlite3.Connection:
        connection = _connect(f"{path.as_uri()}?mode=rw")
        _write_ahead(connection, path)
        _set_authorizer(connection, lambda action: action in _APPEND)
        return connection

    return _begin_with("BEGIN IMMEDIATE", create_engine("sqlite://", creator=connect, poolclass=NullPool))


def migrating_engine(path: Path) -> Engine:
    """Creates the file and may change its schema, but drops no table and no trigger."""

    def connect() -> sqlite3.Connection:
        connection = _connect(f"{path.as_uri()}?mode=rwc")
        _set_authorizer(connection, lambda action: action not in _DROP)
        return connection

    return _begin_with("BEGIN IMMEDIATE", create_engine("sqlite://", creator=connect, poolclass=NullPool))


def reading_engine(path: Path, text: Callable[[bytes], str]) -> Engine:
    """Reads, beside a running writer or alone. Never writes to the file. ``text`` decodes what is stored as text."""

    def connect() -> sqlite3.Connection:
        try:
            return open_reading("mode=ro")
        except sqlite3.OperationalError:
            # On a read-only medium SQLite cannot make its shared memory; without a write-ahead log none is needed.
            if path.with_name(path.name + "-wal").exists():
                raise
            return open_reading("mode=ro&immutable=1")

    def open_reading(mode: str) -> sqlite3.Connection:
        connection = _connect(f"{path.as_uri()}?{mode}")
        connection.text_factory = text
        connection.execute("PRAGMA query_only = ON")
        connection.execute("SELECT count(*) FROM sqlite_schema").fetchone()
        _set_authorizer(connection, lambda action: action in _READ)
        return connection

    return _begin_with("BEGIN", create_engine("sqlite://", creator=connect, poolclass=QueuePool, pool_size=4))


def failure(
    error: DBAPIError | sqlite3.Error | UnicodeDecodeError,
    path: Path,
    consequence: str,
    kind: type[RecordFailed] = RecordUnwritable,
) -> RecordFailed:
    """One of `FOREIGN` as ours, of ``kind`` unless the file is damaged. ``consequence`` says what did not happen."""
    cause = error.orig if isinstance(error, DBAPIError) else error
    name = str(getattr(cause, "sqlite_errorname", ""))
    if name.startswith(("SQLITE_NOTADB", "SQLITE_CORRUPT")) or isinstance(cause, UnicodeDecodeError):
        return RecordDamaged(f"{path} is not a sound SQLite file ({cause}); {consequence}")
    reasons = {
        "SQLITE_FULL": "the disk is full",
        "SQLITE_READONLY": "the file is read-only",
        "SQLITE_BUSY": "another program holds it locked",
        "SQLITE_CANTOPEN": "it cannot be opened",
        "SQLITE_IOERR": "reading or writing it failed",
    }
    reason = next((text for start, text in reasons.items() if name.startswith(start)), "SQLite refused")
    return kind(f"{path}: {reason} ({cause}); {consequence}", {"cause": name or type(cause).__name__})


def _connect(uri: str) -> sqlite3.Connection:
    return sqlite3.connect(uri, uri=True, isolation_level=None, check_same_thread=False, timeout=_BUSY_TIMEOUT_S)


def _write_ahead(connection: sqlite3.Connection, path: Path) -> None:
    mode = connection.execute("PRAGMA journal_mode = WAL").fetchone()[0]
    if mode != "wal":
        raise RecordUnwritable(f"{path} cannot use a write-ahead log (journal mode {mode}); nothing was written")
    connection.execute("PRAGMA synchronous = FULL")
    connection.execute("PRAGMA foreign_keys = ON")
    connection.execute("PRAGMA recursive_triggers = ON")


def _set_authorizer(connection: sqlite3.Connection, allows: Callable[[int], bool]) -> None:
    connection.set_authorizer(lambda action, *_: sqlite3.SQLITE_OK if allows(action) else sqlite3.SQLITE_DENY)


def _begin_with(statement: str, engine: Engine) -> Engine:
    """The driver is left without a transaction mode of its own (isolation_level None), so SQLAlchemy begins them so."""

    def begin(connection: Connection) -> None:
        connection.exec_driver_sql(statement)

    event.listen(engine, "begin", begin)
    return engine
