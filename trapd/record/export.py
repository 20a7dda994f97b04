"""`export`: copy a record out for other programs."""

from __future__ import annotations

import csv
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TextIO

from sqlalchemy import Connection, Table, select

from trapd.errors import BadRequest
from trapd.record.ask import Reader
from trapd.record.entry import Stored, body_of, canonical
from trapd.record.tables import due_times, entries, frequencies, scan_points, scans, setpoints

_ROWS = 1000
_EXPORTED = {table.name: table for table in (setpoints, scan_points, scans, frequencies, due_times)}
EXPORTED = tuple(_EXPORTED)
"""What a record can be exported of, beside its entries."""


def export(path: Path, out: TextIO, format: str, table: str | None = None) -> int:
    """Write the record at ``path`` to ``out``, as it is at one moment; returns the number of rows.

    "csv": ``table``, one of `EXPORTED`, by default `setpoints`, with a header line; open ``out`` with ``newline=""``.
    "jsonl": each row of ``table`` as a line of JSON, by default every entry: the keys of its body and its ``digest``.
    Leave that key out, write the rest as canonical JSON again, and the digest is SHA-256 of a zero byte and that line:
    the chain can be proved without SQLite.
    """
    if format not in FORMATS:
        raise BadRequest(f"unknown format {format!r}, expected {' or '.join(FORMATS)}; nothing was exported")
    if table is not None and table not in _EXPORTED:
        raise BadRequest(f"unknown table {table!r}, expected {' or '.join(EXPORTED)}; nothing was exported")
    with Reader.open(path) as reader, reader.reading() as connection:
        return FORMATS[format](connection, out, None if table is None else _EXPORTED[table])


def _csv(connection: Connection, out: TextIO, table: Table | None) -> int:
    table = setpoints if table is None else table
    lines = csv.writer(out)
    lines.writerow(table.c.keys())
    return _count(lines.writerow(row) for row in _rows(connection, select(table).order_by(table.c.seq)))


def _jsonl(connection: Connection, out: TextIO, table: Table | None) -> int:
    if table is None:
        stored = (Stored(*row) for row in _rows(connection, select(entries).order_by(entries.c.seq)))
        lines = ({**body_of(one), "digest": one.digest} for one in stored)
    else:
        lines = (dict(row._mapping) for row in _rows(connection, select(table).order_by(table.c.seq)))
    return _count(out.write(canonical(line) + "\n") for line in lines)


def _rows(connection: Connection, query: Any) -> Iterator[Any]:
    return iter(connection.execute(query).yield_per(_ROWS))


def _count(written: Iterator[object]) -> int:
    return sum(1 for _ in written)


FORMATS: dict[str, Callable[[Connection, TextIO, Table | None], int]] = {"csv": _csv, "jsonl": _jsonl}
