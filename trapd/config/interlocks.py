"""``[interlocks.NAME]``: what a gauge may read, and what becomes of the trap beyond it."""

from __future__ import annotations

from trapd.config.electrodes import NAME, WANTED_NAME
from trapd.config.records import InterlockAction, InterlockSection
from trapd.config.table import Table

_ACTIONS: tuple[InterlockAction, ...] = ("hold", "ramp down", "off")
_LEVELS = ("warn_above", "trip_above", "warn_below", "trip_below")


def read_interlocks(root: Table) -> dict[str, InterlockSection]:
    """By name, in the order of the file. Levels are pressures: the gauges that there are drivers for."""
    table = root.optional_table("interlocks")
    interlocks: dict[str, InterlockSection] = {}
    for name in table.names():
        path = f"interlocks.{name}"
        if not NAME.fullmatch(name):
            root.mistakes.note(path, f": expected {WANTED_NAME}")
            continue
        interlocks[name] = _read(name, table.table(name, "interlocks.NAME", f"a table [{path}]"))
    return interlocks


def _read(name: str, table: Table) -> InterlockSection:
    levels = {key: table.optional_quantity(key, "pressure", above=0.0) for key in _LEVELS}
    if not any(key in table for key in _LEVELS):
        table.wrong("trip_above", "a level: one of " + ", ".join(_LEVELS))
    for warn, trip, sign in (("warn_above", "trip_above", 1), ("warn_below", "trip_below", -1)):
        first, last = levels[warn], levels[trip]
        if first is not None and last is not None and sign * first > sign * last:
            table.wrong(warn, f"a level before {trip}")
    return InterlockSection(
        name=name,
        instrument=table.text("instrument", "the name of a gauge in [instruments]"),
        **levels,
        for_s=table.quantity("for", "time", default=0.0),
        deadband=table.quantity("deadband", "share", default=InterlockSection.deadband),
        unreadable_s=table.quantity("unreadable", "time", default=InterlockSection.unreadable_s, above=0.0),
        action=table.choice("action", _ACTIONS) or "hold",
    )
