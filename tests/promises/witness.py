"""Promise 2, seen from the rack: at the moment a command arrives, before it is executed, its intent is on the disk."""

from __future__ import annotations

import re
import sqlite3
from pathlib import Path

from tests.controller.bench import is_query
from trapd_simulated import Received

_WORDS = {"ON": 1.0, "OFF": 0.0}


class Witness:
    """Give it to a rack as ``on_receive``. A read-only connection looks for the intent of each command.

    Free of that, as README says: counting photons, and switching off (off sends first and records after).
    """

    def __init__(self, record: Path) -> None:
        self._record = record
        self.commands = 0
        self.bursts = 0
        self.orphans: list[str] = []
        self.intents: set[int] = set()

    def __call__(self, received: Received) -> None:
        text = received.text
        if is_query(text) or received.instrument == "counter":
            return
        if received.instrument == "tickle" and text.startswith("OUTP OFF"):
            return
        self.commands += 1
        self.bursts += "INIT" in text
        matching = [seq for seq, *row in self._open_intents(received.instrument) if _is_of(text, *row)]
        self.intents.update(matching)
        if not matching:
            self.orphans.append(f"{received.instrument}: {text}")

    def _open_intents(self, instrument: str) -> list[tuple[int, str, float, float]]:
        with sqlite3.connect(f"file:{self._record}?mode=ro", uri=True) as db:
            rows: list[tuple[int, str, float, float]] = db.execute(
                "SELECT i.seq, i.quantity, i.value, i.level FROM intents i LEFT JOIN outcomes o ON o.intent = i.seq "
                "WHERE o.seq IS NULL AND i.instrument = ?",
                (instrument,),
            ).fetchall()
        return rows


def _is_of(text: str, quantity: str, value: float, level: float) -> bool:
    """Whether a command is what such an intent announces. A burst is several: frequency, level, its time, its start."""
    first = text.removeprefix("ABOR;:").split(";")[0]
    told = first.split()[-1].upper()
    if first.startswith("BURS:STAT"):
        return quantity == ("burst" if told == "ON" else "output")
    if quantity == "burst":
        if first.startswith(("FREQ", "VOLT")):
            return abs(float(told) - (value if first.startswith("FREQ") else level)) < 1e-6
        return bool(re.fullmatch(r"OUTP ON;:INIT(;:SYST:ERR\?)?", text))
    return abs((_WORDS[told] if told in _WORDS else float(told)) - level) < 1e-6
