"""`Reader`: the questions people ask of a record, answered read-only beside a running daemon or from a file alone."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, Select, Table, and_, or_, select, tuple_
from sqlalchemy.exc import DBAPIError

from trapd.errors import NotFound, RecordFailed
from trapd.record.connection import failure, reading_engine
from trapd.record.entry import NO_DIGEST, Entry, Head, Stored, entry_of
from trapd.record.schema import demand_current
from trapd.record.tables import entries, intents, refusals, setpoints

_MANY = 1000


@dataclass(frozen=True, kw_only=True)
class Commanded:
    """An intent with what came of it: a row of the view `setpoints`.

    ``value``, ``readback`` and ``difference`` are in ``unit``; ``level`` is what the instrument was told, of the
    ``quantity`` named. ``state`` is "unknown" and ``outcome`` None while nothing is known of it.
    """

    seq: int
    time_us: int
    setpoint: str
    value: float
    unit: str
    state: str
    readback: float | None
    difference: float | None
    error: str | None
    instrument: str
    channel: int | None
    quantity: str
    level: float
    who: str
    why: str
    request: int | None
    verdict: int | None
    ramp: int | None
    step: int | None
    outcome: int | None
    sent_us: int | None
    acknowledged_us: int | None
    verified_us: int | None


@dataclass(frozen=True, kw_only=True)
class Refusal:
    """One rule that failed in a verdict that was not accepted: a row of the view `refusals`."""

    seq: int
    time_us: int
    request: int | None
    who: str
    why: str
    rule: str
    quantity: str
    unit: str
    found: float | None
    bound: float | None
    nearest: float | None
    species: str | None
    mode: str | None
    message: str


@dataclass(frozen=True, kw_only=True)
class State:
    """What had been commanded at the end of entry ``seq``, newest command of each setpoint and of each output.

    ``setpoints`` and ``outputs`` (quantity "output": 1 on, 0 off) are keyed by the setpoint's name. Intents that were
    certainly not sent do not count; unknown ones do. ``contents`` is the newest entry that says what is in the trap.
    """

    seq: int
    setpoints: Mapping[str, Commanded]
    outputs: Mapping[str, Commanded]
    contents: Entry | None


class Reader:
    """Read-only. Safe to use from several threads; each call sees the record at one moment."""

    def __init__(self, path: Path, engine: Engine) -> None:
        """Use `open`."""
        self.path = path
        self._engine = engine

    @classmethod
    def open(cls, path: Path, *, text: Callable[[bytes], str] = bytes.decode) -> Reader:
        """Raises `NotFound`, `ConfigError` (not a record, or of another schema), `RecordFailed`.

        ``text`` decodes what is stored as text.
        """
        path = path.resolve()
        if not path.exists():
            raise NotFound(f"there is no record at {path}")
        reader = cls(path, reading_engine(path, text))
        try:
            with reader.reading() as connection:
                demand_current(connection, path)
        except BaseException:
            reader.close()
            raise
        return reader

    def close(self) -> None:
        self._engine.dispose()

    def __enter__(self) -> Reader:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def head(self) -> Head:
        """Seq and digest of the newest entry."""
        with self.reading() as connection:
            newest = select(entries.c.seq, entries.c.digest).order_by(entries.c.seq.desc()).limit(1)
            return Head(*(connection.execute(newest).one_or_none() or (0, NO_DIGEST)))

    def entry(self, seq: int) -> Entry:
        """Raises `NotFound`."""
        with self.reading() as connection:
            row = connection.execute(select(entries).where(entries.c.seq == seq)).one_or_none()
        if row is None:
            raise NotFound(f"there is no entry {seq} in {self.path}")
        return entry_of(Stored(*row))

    def entries(
        self,
        *,
        after: int = 0,
        limit: int = _MANY,
        kind: str | None = None,
        actor: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[Entry, ...]:
        """At most ``limit`` entries beyond seq ``after``, in order: the first ones, or with ``newest`` the last."""
        query = select(entries).where(entries.c.seq > after)
        query = _matching(query, entries, kind=kind, actor=actor)
        query = _between(query, entries, since_us, until_us)
        return tuple(entry_of(Stored(*row)) for row in self._page(query, entries, limit, newest))

    def setpoints(
        self,
        *,
        after: int = 0,
        limit: int = _MANY,
        setpoint: str | None = None,
        state: str | None = None,
        who: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[Commanded, ...]:
        """Intents and what came of them, in order of seq; times are those of the intents."""
        query = _commanded().where(setpoints.c.seq > after)
        query = _matching(query, setpoints, setpoint=setpoint, state=state, who=who)
        query = _between(query, setpoints, since_us, until_us)
        return tuple(Commanded(**row._mapping) for row in self._page(query, setpoints, limit, newest))

    def refusals(
        self,
        *,
        after: int = 0,
        limit: int = _MANY,
        who: str | None = None,
        since_us: int | None = None,
        until_us: int | None = None,
        newest: bool = False,
    ) -> tuple[Refusal, ...]:
        """One for each rule that failed, in order of the verdicts' seq."""
        query = select(*(refusals.c[name] for name in Refusal.__dataclass_fields__)).where(refusals.c.seq > after)
        query = _between(_matching(query, refusals, who=who), refusals, since_us, until_us)
        return tuple(Refusal(**row._mapping) for row in self._page(query, refusals, limit, newest))

    def state_at(self, *, seq: int | None = None, time_us: int | None = None) -> State:
        """What had been commanded by entry ``seq``, by ``time_us``, or by now."""
        with self.reading() as connection:
            until = _last_seq(connection, seq, time_us)
            commanded = [
                newest
                for setpoint, quantity in _commanded_quantities(connection)
                if (newest := _newest(connection, setpoint, quantity, until)) is not None
            ]
            contents = _contents(connection, until)
        in_order = sorted(commanded, key=lambda command: command.seq)
        return State(
            seq=until,
            setpoints={command.setpoint: command for command in in_order if command.quantity != "output"},
            outputs={command.setpoint: command for command in in_order if command.quantity == "output"},
            contents=contents,
        )

    def last_commanded(self) -> State:
        """What had been commanded by now."""
        return self.state_at()

    def contents_at(self, *, seq: int | None = None, time_us: int | None = None) -> Entry | None:
        """The newest entry of kind "contents" by entry ``seq``, by ``time_us``, or by now."""
        with self.reading() as connection:
            return _contents(connection, _last_seq(connection, seq, time_us))

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A connection on which every query sees the record at one moment. For this package."""
        try:
            with self._engine.connect() as connection:
                yield connection
        except (DBAPIError, sqlite3.Error) as error:
            raise failure(error, self.path, "nothing more was read", RecordFailed) from error

    def _page(self, query: Select[Any], table: Table, limit: int, newest: bool) -> list[Any]:
        order = table.c.seq.desc() if newest else table.c.seq
        with self.reading() as connection:
            rows = list(connection.execute(query.order_by(order).limit(limit)))
        return rows[::-1] if newest else rows


def _matching(query: Select[Any], table: Table, **wanted: str | None) -> Select[Any]:
    return query.where(*(table.c[column] == value for column, value in wanted.items() if value is not None))


def _between(query: Select[Any], table: Table, since_us: int | None, until_us: int | None) -> Select[Any]:
    """From ``since_us`` on, before ``until_us``."""
    if since_us is not None:
        query = query.where(table.c.time_us >= since_us)
    if until_us is not None:
        query = query.where(table.c.time_us < until_us)
    return query


def _commanded() -> Select[Any]:
    return select(*(setpoints.c[name] for name in Commanded.__dataclass_fields__))


def _last_seq(connection: Connection, seq: int | None, time_us: int | None) -> int:
    """The newest entry by ``seq`` or by ``time_us``. Where the clock was set back, the later pass counts."""
    query = select(entries.c.seq)
    if time_us is not None:
        query = query.where(entries.c.time_us <= time_us).order_by(entries.c.time_us.desc())
    if seq is not None:
        query = query.where(entries.c.seq <= seq)
    return connection.execute(query.order_by(entries.c.seq.desc()).limit(1)).scalar() or 0


def _commanded_quantities(connection: Connection) -> Iterator[tuple[str, str]]:
    """Every (setpoint, quantity) ever commanded, by hops through the index: few, among millions of intents."""
    key = tuple_(intents.c.setpoint, intents.c.quantity)
    hop = select(intents.c.setpoint, intents.c.quantity).order_by(intents.c.setpoint, intents.c.quantity).limit(1)
    found = connection.execute(hop).one_or_none()
    while found is not None:
        yield found.setpoint, found.quantity
        found = connection.execute(hop.where(key > tuple_(*found))).one_or_none()


def _newest(connection: Connection, setpoint: str, quantity: str, until: int) -> Commanded | None:
    was_sent = and_(
        setpoints.c.setpoint == setpoint,
        setpoints.c.quantity == quantity,
        setpoints.c.seq <= until,
        or_(setpoints.c.state != "not sent", setpoints.c.outcome > until),
    )
    row = connection.execute(_commanded().where(was_sent).order_by(setpoints.c.seq.desc()).limit(1)).one_or_none()
    return None if row is None else Commanded(**row._mapping)


def _contents(connection: Connection, until: int) -> Entry | None:
    query = select(entries).where(entries.c.kind == "contents", entries.c.seq <= until)
    row = connection.execute(query.order_by(entries.c.seq.desc()).limit(1)).one_or_none()
    return None if row is None else entry_of(Stored(*row))
