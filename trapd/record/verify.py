"""`verify`: prove a record from its bodies alone. Streams the file once, in one snapshot, beside a running writer too.

Checked: SQLite's own integrity; that every table, trigger and view is as the migrations make it; the chain; every
column against the hashed body; every typed row against its entry, both ways; that what a row refers to (an outcome's
intent, a frequency's finding) is what it should be. Not provable from the file: that nobody rewrote all of it, or cut
off its end. That is found only by a chain head noted elsewhere, given as ``head``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NamedTuple

from sqlalchemy import Connection, create_engine, false, func, or_, select

from trapd.errors import Bug, RecordFailed
from trapd.record.ask import Reader
from trapd.record.entry import NO_DIGEST, Head, Stored, faults_of, same
from trapd.record.schema import migrate
from trapd.record.tables import entries, metadata, outcomes, secular_frequencies
from trapd.record.typed import TYPED_TABLES, TypedRow, typed_row

_START = Head(0, NO_DIGEST)
_MOST_PROBLEMS = 100
_ROWS = 1000
_REFERENCES: tuple[tuple[str, str, tuple[str, ...]], ...] = (
    ("intents", "request", ()),
    ("intents", "verdict", ("verdict",)),
    ("intents", "ramp", ("ramp", "plan")),
    ("outcomes", "intent", ("intent",)),
    ("scan_points", "request", ()),
    ("scan_points", "intent", ("intent",)),
    ("secular_frequencies", "request", ()),
    ("secular_frequencies", "finding", ("finding",)),
    ("secular_frequencies", "calibration", ()),
    ("due_runs", "request", ()),
)
"""Table, column, and the kinds of which the entry it names must be (empty: any)."""


class Problem(NamedTuple):
    """What is wrong, in which table, with the row of which entry (None: not one row's)."""

    seq: int | None
    table: str
    message: str


@dataclass(frozen=True, kw_only=True)
class Report:
    """``problems`` are in order of their seq, the first hundred of ``problem_count``; ``head`` is the last digest."""

    ok: bool
    entries: int
    first_seq: int
    last_seq: int
    head: str
    problems: tuple[Problem, ...]
    problem_count: int


@dataclass
class _Findings:
    head: Head = _START
    entries: int = 0
    first_seq: int = 0
    problems: list[Problem] = field(default_factory=list)
    problem_count: int = 0

    def add(self, seq: int | None, table: str, message: str) -> None:
        self.problem_count += 1
        if len(self.problems) < _MOST_PROBLEMS:
            self.problems.append(Problem(seq, table, message))


def verify(path: Path, *, head: str | None = None) -> Report:
    """Check the record at ``path``; ``head`` is the digest of an entry, noted elsewhere, that must be in it.

    Raises `NotFound` and `ConfigError` where there is no record to check, `RecordDamaged` where SQLite cannot even
    open it. Whatever is wrong inside is in the report.
    """
    found = _Findings()
    with Reader.open(path, text=lambda raw: raw.decode("utf-8", "surrogateescape")) as reader:
        try:
            with reader.reading() as connection:
                _check_file(connection, found)
                _check_schema(connection, found)
                _check_references(connection, found)
                _check_entries(connection, found, head)
        except RecordFailed as error:
            found.add(found.head.seq + 1, "entries", f"cannot be read from here on: {error.message}")
    return Report(
        ok=not found.problem_count,
        entries=found.entries,
        first_seq=found.first_seq,
        last_seq=found.head.seq,
        head=found.head.digest,
        problems=tuple(sorted(found.problems, key=lambda problem: problem.seq or 0)),
        problem_count=found.problem_count,
    )


def _check_file(connection: Connection, found: _Findings) -> None:
    for (message,) in connection.exec_driver_sql("PRAGMA integrity_check"):
        if message != "ok":
            found.add(None, "file", message)


def _check_schema(connection: Connection, found: _Findings) -> None:
    """Every object of the migrations unchanged; beyond them only tables and views that people may have added."""
    with create_engine("sqlite://").connect() as fresh:
        migrate(fresh)
        expected = _objects(fresh)
    present = _objects(connection)
    for (kind, name), sql in expected.items():
        if (kind, name) not in present:
            found.add(None, "schema", f"{kind} {name} is missing")
        elif present[kind, name] != sql:
            found.add(None, "schema", f"{kind} {name} was changed")
    for kind, name in present.keys() - expected.keys():
        if kind in ("trigger", "index"):
            found.add(None, "schema", f"{kind} {name} does not belong there")


def _objects(connection: Connection) -> dict[tuple[str, str], str | None]:
    rows = connection.exec_driver_sql("SELECT type, name, sql FROM sqlite_schema WHERE name NOT GLOB 'sqlite_*'")
    return {(kind, name): sql for kind, name, sql in rows}


def _check_references(connection: Connection, found: _Findings) -> None:
    for table, column, kinds in _REFERENCES:
        to = metadata.tables[table].c[column]
        seq = metadata.tables[table].c.seq
        wrong = or_(entries.c.seq.is_(None), entries.c.seq >= seq, entries.c.kind.not_in(kinds) if kinds else false())
        query = select(seq, to).outerjoin(entries, entries.c.seq == to).where(to.is_not(None), wrong)
        for row in connection.execute(query):
            found.add(row[0], table, f"{column} is {row[1]}, which is no {' or '.join(kinds) or 'entry'} before it")
    for of in (outcomes.c.intent, secular_frequencies.c.finding):
        twice = select(func.max(of.table.c.seq), of).group_by(of).having(func.count() > 1)
        for seq, earlier in connection.execute(twice):
            found.add(seq, of.table.name, f"{of.name} {earlier} has a row already")


def _check_entries(connection: Connection, found: _Findings, head: str | None) -> None:
    typed = [_TypedTable(connection, table) for table in TYPED_TABLES]
    noted = head in (None, NO_DIGEST)
    for row in connection.execute(select(entries).order_by(entries.c.seq)).yield_per(_ROWS):
        stored = Stored(*row)
        faults, body = faults_of(stored, found.head)
        for fault in faults:
            found.add(stored.seq, "entries", fault)
        expected = _expected(stored, body, found)
        for table in typed:
            table.check(stored.seq, expected, found)
        noted = noted or stored.digest == head
        found.head = Head(stored.seq, stored.digest)
        found.first_seq = found.first_seq or stored.seq
        found.entries += 1
    for table in typed:
        table.check(None, None, found)
    if not noted:
        found.add(None, "entries", f"no entry has the noted digest {head}: the record was rewritten or cut short")


def _expected(stored: Stored, body: Mapping[str, Any], found: _Findings) -> TypedRow | None:
    if not body:
        return None
    try:
        return typed_row(str(body.get("kind")), str(body.get("actor")), body["data"])
    except Bug as error:
        found.add(stored.seq, "entries", f"its data do not make a row: {error.message}")
        return None


class _TypedTable:
    """A typed table, read in step with the entries."""

    def __init__(self, connection: Connection, name: str) -> None:
        table = metadata.tables[name]
        self.name = name
        self._columns = table.c.keys()
        self._rows = iter(connection.execute(select(table).order_by(table.c.seq)).yield_per(_ROWS))
        self._row = next(self._rows, None)

    def check(self, seq: int | None, expected: TypedRow | None, found: _Findings) -> None:
        """Compare the row of entry ``seq`` with ``expected``; None: there are no more entries."""
        while self._row is not None and (seq is None or self._row[0] < seq):
            found.add(self._take()[0], self.name, "a row without an entry")
        row = self._take() if self._row is not None and self._row[0] == seq else None
        if expected is not None and expected.table == self.name:
            if row is None:
                found.add(seq, self.name, "the row of this entry is missing")
            else:
                self._compare(row, expected.values, found)
        elif row is not None:
            found.add(seq, self.name, "a row that its entry does not make")

    def _take(self) -> Sequence[Any]:
        row, self._row = self._row, next(self._rows, None)
        assert row is not None
        return row

    def _compare(self, row: Sequence[Any], expected: Sequence[Any], found: _Findings) -> None:
        for column, has, says in zip(self._columns[1:], row[1:], expected, strict=True):
            if not same(has, says):
                found.add(row[0], self.name, f"{column} is {has!r}, its entry says {says!r}")
