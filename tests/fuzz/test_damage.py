"""Whatever happens to the bytes of a record, `verify` says so as soon as one row reads otherwise than it was written.

What "otherwise" means is not asked of trapd: the damaged copy is read with the standard library's sqlite3, and every
value of every table is compared with what the sound file holds. Bytes that no row comes from (free space, indices,
the file's counters) may be told or not.
"""

from __future__ import annotations

import sqlite3
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from random import Random
from typing import Any

import pytest
from hypothesis import strategies as st

from tests.fuzz.box import fuzz
from tests.record.samples import BOOT, StandingClock, note, outcome, plain, plan, result, write_day, write_scan
from trapd.errors import ConfigError, RecordFailed
from trapd.record import Record, verify

PAGE_BYTES = 4096
LONGEST_S = 10.0
TABLES = ("entries", "intents", "outcomes", "scan_points", "secular_frequencies", "due_runs")
ROOTS: dict[str, int] = {}
"""The first page of each table of `sound`, counted from 1."""


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    """A record of some fifty entries in two dozen pages: moves, refusals, scans, and a body longer than a page."""
    path = tmp_path_factory.mktemp("sound") / "trap.sqlite"
    record = Record.open(path, clock=StandingClock(), boot_id=BOOT)
    for number in range(3):
        write_day(record)
        asked = write_scan(record)
        record.append(plan(asked), outcome(asked + 1), result(asked, "done")).result()
        record.append(note("x" * 5000 * number)).result()
    assert record.close(timeout_s=10)
    assert verify(path).ok
    connection = plain(path)
    ROOTS.update(connection.execute("SELECT name, rootpage FROM sqlite_schema WHERE type = 'table'").fetchall())
    connection.close()
    return path.read_bytes()


def rows_of(path: Path) -> dict[str, str] | None:
    """Every value of every table as sqlite3 reads it, with its type, and what the file says it is; None: unreadable."""
    connection = sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True)
    connection.text_factory = bytes
    try:
        found = {table: repr(connection.execute(f"SELECT * FROM {table} ORDER BY seq").fetchall()) for table in TABLES}
        kind = connection.execute("PRAGMA application_id").fetchall()
        return {**found, "kind": repr((kind, connection.execute("SELECT * FROM alembic_version").fetchall()))}
    except (sqlite3.Error, UnicodeDecodeError):  # the latter of an error message that quotes the file
        return None
    finally:
        connection.close()


def _one_byte(content: bytearray, random: Random) -> None:
    content[random.randrange(len(content))] ^= random.randint(1, 255)


def _one_byte_of_text(content: bytearray, random: Random) -> None:
    """In one of the bodies or near its end, where its digest is."""
    begins = [at for at in range(len(content)) if content.startswith(b'{"actor":', at)]
    content[(random.choice(begins) + random.randrange(400)) % len(content)] ^= random.randint(1, 255)


def _one_byte_of_a_row(content: bytearray, random: Random) -> None:
    """In the cells of a typed table, which are few enough for one page (SQLite file format, 1.6: where they begin)."""
    page = ROOTS[random.choice(TABLES[1:])] * PAGE_BYTES - PAGE_BYTES
    cells = int.from_bytes(content[page + 5 : page + 7], "big")
    content[page + random.randrange(cells, PAGE_BYTES)] ^= random.randint(1, 255)


def _one_bit(content: bytearray, random: Random) -> None:
    content[random.randrange(len(content))] ^= 1 << random.randrange(8)


def _head_of_a_page(content: bytearray, random: Random) -> None:
    """The eight or twelve bytes that say what a page is, and the pointers that follow."""
    page = random.randrange(len(content) // PAGE_BYTES)
    content[page * PAGE_BYTES + random.randrange(100 if page == 0 else 40)] = random.randrange(256)


def _page(content: bytearray, random: Random) -> None:
    here, there = (random.randrange(len(content) // PAGE_BYTES) * PAGE_BYTES for _ in range(2))
    fill = [bytes(PAGE_BYTES), b"\xff" * PAGE_BYTES, random.randbytes(PAGE_BYTES), bytes(content[there:][:PAGE_BYTES])]
    content[here : here + PAGE_BYTES] = random.choice(fill)


def _cut(content: bytearray, random: Random) -> None:
    del content[random.randrange(len(content)) :]


DAMAGES: list[Callable[[bytearray, Random], None]] = [
    *(_one_byte, _one_byte_of_text, _one_byte_of_text, _one_byte_of_a_row, _one_byte_of_a_row),
    *(_one_bit, _head_of_a_page, _page, _cut),
]


@pytest.mark.long
def test_no_damage_that_changes_a_row_verifies_and_none_is_a_traceback(sound: bytes, tmp_path: Path) -> None:
    path = tmp_path / "trap.sqlite"
    path.write_bytes(sound)
    expected = rows_of(path)
    assert expected is not None
    told: Counter[str] = Counter()

    def one(damage: Callable[[bytearray, Random], None], seed: int) -> None:
        content = bytearray(sound)
        damage(content, Random(seed))
        path.write_bytes(content)
        found = rows_of(path)
        outcome = verdict(path, may_be_foreign=found is None or found["kind"] != expected["kind"])
        told[outcome if found == expected else f"{outcome}, changed"] += 1
        if outcome == "ok":
            changed = [at for at in range(len(sound)) if at >= len(content) or content[at] != sound[at]]
            differing = [table for table in expected if found is None or found[table] != expected[table]]
            assert not differing, f"{damage.__name__} at {changed[:5]} changed {differing}"

    count = fuzz(0.25, one, st.sampled_from(DAMAGES), st.integers(0, 2**32), least=30)
    print(f"{count} damaged files: {dict(told)}")
    assert told["reported, changed"] > count / 10


def verdict(path: Path, *, may_be_foreign: bool) -> str:
    """What `verify` makes of the file; anything but a report and the errors of its docstring comes out."""
    began_s = time.monotonic()
    try:
        report: Any = verify(path)
        return "ok" if report.ok else "reported"
    except RecordFailed:
        return "unreadable"
    except ConfigError:
        if not may_be_foreign:
            raise
        return "no record of ours"
    finally:
        assert time.monotonic() - began_s < LONGEST_S
