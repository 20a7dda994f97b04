"""Durable steps a second: a step is one commit of the outcome of the last intent and the next intent, with typed rows.

Each step is answered before the next one is asked, as in a ramp. The peer is a bare loop over `sqlite3` that writes the
very same rows in the very same commits, synchronous FULL, into the same schema: tables, indices, and the triggers that
keep it append-only. It makes no JSON, hashes nothing, does not look whether the file is still there and waits for no
other thread. For information, two more: the same loop without the triggers, and the same loop behind a thread, because
the record's caller must never wait for the disk, which costs two wake-ups a step before anything is recorded. All take
turns in short blocks, because the disk's and the machine's own speed drift by more than they differ.
"""

from __future__ import annotations

import sqlite3
import statistics
import tempfile
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing
from pathlib import Path
from typing import Any

from trapd.clock import SystemClock
from trapd.record import Draft, Entry, Record
from trapd.record.tables import INSERTS

BLOCKS = 15
STEPS = 200
BARE = "a bare sqlite3 loop, same schema"
UNTRIGGERED = "that loop without triggers"
THREADED = "that loop behind a thread"
PEERS = {BARE: 0.8, UNTRIGGERED: None, THREADED: None}
"""Each peer and the goal against it; None: for information."""

Rows = list[tuple[str, list[tuple[Any, ...]]]]
"""One commit: each table's INSERT and its rows."""


def measure() -> list[dict[str, Any]]:
    with tempfile.TemporaryDirectory() as folder:
        times_s = _take_turns(Path(folder))
    ours_s = times_s.pop("ours")
    return [_row(f"durable steps, against {peer}", ours_s, peer_s, PEERS[peer]) for peer, peer_s in times_s.items()]


def _row(name: str, ours_s: list[float], peer_s: list[float], goal: float | None) -> dict[str, Any]:
    """Medians over the blocks; the ratio is the median of each block's, whose parts met the same disk."""
    ratio = statistics.median(peer / ours for ours, peer in zip(ours_s, peer_s, strict=True))
    return {
        "name": name,
        "value": round(STEPS / statistics.median(ours_s)),
        "unit": "1/s",
        "peer": round(STEPS / statistics.median(peer_s)),
        "ratio": round(ratio, 3),
        "goal": goal,
        "met": None if goal is None else ratio >= goal,
    }


def _take_turns(folder: Path) -> dict[str, list[float]]:
    """Seconds a block of steps takes each of us, block by block."""
    commits: list[tuple[Entry, ...]] = []
    record = Record.open(folder / "record.sqlite", clock=SystemClock(), boot_id="bench")
    record.append(_intent(0)).result()
    with ThreadPoolExecutor(max_workers=1) as thread:
        bare = _peer(folder / "bare.sqlite", record.path)
        untriggered = _peer(folder / "untriggered.sqlite", record.path, but="trigger")
        threaded = _peer(folder / "threaded.sqlite", record.path)
        peers: dict[str, Callable[[Rows], None]] = {
            BARE: lambda commit: _commit(bare, commit),
            UNTRIGGERED: lambda commit: _commit(untriggered, commit),
            THREADED: lambda commit: thread.submit(_commit, threaded, commit).result(),
        }
        record.add_listener(commits.append)
        times_s: dict[str, list[float]] = {"ours": [], **{name: [] for name in peers}}
        for _ in range(BLOCKS):
            times_s["ours"].append(_write_steps(record))
            rows = _rows(record.path, commits)
            commits.clear()
            for name, commit in peers.items():
                times_s[name].append(_write_rows(commit, rows))
    for file in (record, bare, untriggered, threaded):
        file.close()
    return times_s


def _write_steps(record: Record) -> float:
    last_intent = record.last_seq
    start = time.perf_counter()
    for step in range(STEPS):
        _, intent = record.append(_outcome(last_intent), _intent(step)).result()
        last_intent = intent.seq
    return time.perf_counter() - start


def _write_rows(commit: Callable[[Rows], None], commits: list[Rows]) -> float:
    start = time.perf_counter()
    for rows in commits:
        commit(rows)
    return time.perf_counter() - start


def _commit(peer: sqlite3.Connection, rows: Rows) -> None:
    peer.execute("BEGIN IMMEDIATE")
    for insert, values in rows:
        peer.executemany(insert, values)
    peer.execute("COMMIT")


def _rows(path: Path, commits: list[tuple[Entry, ...]]) -> list[Rows]:
    with closing(sqlite3.connect(path)) as reader:
        return [
            [
                (insert, reader.execute(f"SELECT * FROM {table} WHERE seq BETWEEN ? AND ?", _span(commit)).fetchall())
                for table, insert in INSERTS.items()
            ]
            for commit in commits
        ]


def _span(commit: tuple[Entry, ...]) -> tuple[int, int]:
    return commit[0].seq, commit[-1].seq


def _peer(path: Path, like: Path, but: str = "") -> sqlite3.Connection:
    """A record's schema and its first rows, ``but`` without objects of that type."""
    with closing(sqlite3.connect(like)) as source:
        objects = "SELECT sql FROM sqlite_schema WHERE sql IS NOT NULL AND type <> ? ORDER BY rowid"
        statements = [sql for (sql,) in source.execute(objects, (but,))]
        first = [(insert, source.execute(f"SELECT * FROM {table}").fetchall()) for table, insert in INSERTS.items()]
    peer = sqlite3.connect(path, isolation_level=None, check_same_thread=False)
    peer.execute("PRAGMA journal_mode = WAL")
    peer.execute("PRAGMA synchronous = FULL")
    for statement in statements:
        peer.execute(statement)
    _commit(peer, first)
    return peer


def _intent(step: int) -> Draft:
    data: dict[str, Any] = {"request": 1, "verdict": None, "ramp": None, "step": step, "setpoint": "drive.amplitude"}
    data |= {"value": 200.0 + step / 7, "unit": "V", "instrument": "rf", "channel": None}
    data |= {"quantity": "level_v", "level": (200.0 + step / 7) / 38, "who": "ada", "why": "bench"}
    return Draft(kind="intent", actor="ada", data=data)


def _outcome(intent: int) -> Draft:
    data: dict[str, Any] = {"intent": intent, "state": "confirmed", "sent_us": 1_700_000_000_000_000}
    data |= {"acknowledged_us": 1_700_000_000_000_400, "verified_us": 1_700_000_000_000_800}
    data |= {"readback": 200.01, "difference": 0.01, "error": None}
    return Draft(kind="outcome", actor="ada", data=data)


if __name__ == "__main__":
    for row in measure():
        print(row)
