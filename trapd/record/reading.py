"""A record opened to read, and how a question becomes a page of rows."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Self

from sqlalchemy import Column, Connection, Engine, Select, Table

from trapd.errors import NotFound, RecordFailed
from trapd.record.connection import FOREIGN, failure, reading_engine
from trapd.record.schema import demand_current

MANY = 1000


class OpenRecord:
    """Read-only. Safe to use from several threads; each call sees the record at one moment."""

    def __init__(self, path: Path, engine: Engine) -> None:
        """Use `open`."""
        self.path = path
        self._engine = engine

    @classmethod
    def open(cls, path: Path, *, text: Callable[[bytes], str] = bytes.decode) -> Self:
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

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A connection on which every query sees the record at one moment. For this package."""
        try:
            with self._engine.connect() as connection:
                yield connection
        except FOREIGN as error:
            raise failure(error, self.path, "nothing more was read", RecordFailed) from error

    def page(self, query: Select[Any], table: Table, limit: int, newest: bool) -> list[Any]:
        """The first ``limit`` rows by seq, or with ``newest`` the last, in order. For this package."""
        order = table.c.seq.desc() if newest else table.c.seq
        with self.reading() as connection:
            rows = list(connection.execute(query.order_by(order).limit(limit)))
        return rows[::-1] if newest else rows


def matching(query: Select[Any], table: Table, **wanted: str | None) -> Select[Any]:
    return query.where(*(table.c[column] == value for column, value in wanted.items() if value is not None))


def between(query: Select[Any], time_us: Column[Any], since_us: int | None, until_us: int | None) -> Select[Any]:
    """From ``since_us`` on, before ``until_us``."""
    if since_us is not None:
        query = query.where(time_us >= since_us)
    if until_us is not None:
        query = query.where(time_us < until_us)
    return query
