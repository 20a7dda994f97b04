"""`export`: copy a record out for other programs."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TextIO

from sqlalchemy import Connection, select

from trapd.errors import BadRequest
from trapd.record.ask import Reader
from trapd.record.entry import canonical
from trapd.record.tables import entries, setpoints

_ROWS = 1000


def export(path: Path, out: TextIO, format: str) -> int:
    """Write the record at ``path`` to ``out``, as it is at one moment; returns the number of rows.

    "csv": the view `setpoints` with a header line; open ``out`` with ``newline=""``. "jsonl": every entry as a line
    of canonical JSON, the keys of its body and its ``digest``. Leave that key out, write the rest as canonical JSON
    again, and the digest is SHA-256 of a zero byte and that line: the chain can be proved without SQLite.
    """
    if format not in FORMATS:
        raise BadRequest(f"unknown format {format!r}, expected {' or '.join(FORMATS)}; nothing was exported")
    with Reader.open(path) as reader, reader.reading() as connection:
        return FORMATS[format](connection, out)


def _csv(connection: Connection, out: TextIO) -> int:
    lines = csv.writer(out)
    lines.writerow(setpoints.c.keys())
    return _count(lines.writerow(row) for row in _rows(connection, select(setpoints).order_by(setpoints.c.seq)))


def _jsonl(connection: Connection, out: TextIO) -> int:
    query = select(entries.c.body, entries.c.digest).order_by(entries.c.seq)
    return _count(
        out.write(canonical({**json.loads(body), "digest": digest}) + "\n") for body, digest in _rows(connection, query)
    )


def _rows(connection: Connection, query: Any) -> Iterator[Any]:
    return iter(connection.execute(query).yield_per(_ROWS))


def _count(written: Iterator[object]) -> int:
    return sum(1 for _ in written)


FORMATS: dict[str, Callable[[Connection, TextIO], int]] = {"csv": _csv, "jsonl": _jsonl}
