"""``[tickle]``, ``[counter]``, ``[scans.NAME]`` and ``[[schedule]]``: measuring secular frequencies."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from typing import get_args

from trapd.config.cron import wanted_instead
from trapd.config.electrodes import NAME, WANTED_NAME
from trapd.config.quantity import closest
from trapd.config.records import CounterSection, DueSection, ScanMode, ScanSection, TickleSection
from trapd.config.table import Table

_MODES: tuple[ScanMode, ...] = get_args(ScanMode)
_SHORTEST_DWELL_S, _LONGEST_DWELL_S = 1e-3, 10.0
_FEWEST_PASSES, _MOST_PASSES = 2, 1000
_MOST_POINTS = 20_000
"""Of a whole scan: what is reckoned after each pass grows with them."""

_WIDTHS_IN_SPAN = 2.0
"""A search must show the line's two flanks."""


def read_tickle(root: Table) -> TickleSection | None:
    if "tickle" not in root:
        return None
    table = root.optional_table("tickle")
    return TickleSection(
        instrument=table.text("instrument", "the name of an instrument") if "instrument" in table else None,
        level_max_v=table.quantity("level_max", "voltage", above=0.0),
    )


def read_counter(root: Table) -> CounterSection | None:
    if "counter" not in root:
        return None
    table = root.optional_table("counter")
    return CounterSection(
        instrument=table.text("instrument", "the name of an instrument") if "instrument" in table else None,
        floor_per_s=table.quantity("floor", "rate", above=0.0),
    )


def read_scans(root: Table, catalogue: Collection[str], tickle: TickleSection | None) -> dict[str, ScanSection]:
    """The scans by name, in the order of the file; none excites more than ``tickle`` allows."""
    table = root.optional_table("scans")
    for section in ("tickle", "counter"):
        if table.names() and section not in root:
            root.mistakes.note("scans", f": there is no [{section}]; expected one, which every scan needs")
    scans: dict[str, ScanSection] = {}
    for name in table.names():
        path = f"scans.{name}"
        if not NAME.fullmatch(name):
            root.mistakes.note(path, f": expected {WANTED_NAME}")
            continue
        scans[name] = _read_scan(name, table.table(name, "scans.NAME", f"a table [{path}]"), catalogue, tickle)
    return scans


def _read_scan(name: str, table: Table, catalogue: Collection[str], tickle: TickleSection | None) -> ScanSection:
    width_hz = table.quantity("width", "frequency", default=ScanSection.width_hz, above=0.0)
    passes = f"a whole number from {_FEWEST_PASSES} to {_MOST_PASSES}"
    scan = ScanSection(
        name=name,
        mode=table.choice("mode", _MODES) or "x",
        species=_species(table, catalogue),
        tickle_v=_tickle_v(table, tickle),
        span_hz=_span_hz(table, width_hz),
        dwell_s=_dwell_s(table),
        target_hz=table.quantity("target", "frequency", above=0.0),
        width_hz=width_hz,
        passes=table.integer("passes", passes, least=_FEWEST_PASSES, most=_MOST_PASSES, default=ScanSection.passes)
        or ScanSection.passes,
        min_contrast=_share(table, "min_contrast", ScanSection.min_contrast),
        model_uncertainty=_share(table, "model_uncertainty", ScanSection.model_uncertainty),
    )
    return _bounded(scan, table)


def _bounded(scan: ScanSection, table: Table) -> ScanSection:
    points = 2 * scan.span_hz / scan.width_hz * scan.passes if scan.width_hz > 0 else 0.0
    if points > _MOST_POINTS:
        table.wrong("passes", f"fewer: {points:.0f} points, two a width over the whole span; at most {_MOST_POINTS}")
    return scan


def _species(table: Table, catalogue: Collection[str]) -> str | None:
    if "species" not in table:
        return None
    species = table.text("species", 'a species of this file such as "40Ca+"')
    if species and species not in catalogue:
        table.wrong("species", f"a species of this file{closest(species, catalogue)}")
    return species


def _tickle_v(table: Table, tickle: TickleSection | None) -> float:
    tickle_v = table.quantity("tickle", "voltage", above=0.0)
    if tickle and tickle_v > tickle.level_max_v:
        table.wrong("tickle", f"at most {tickle.level_max_v:.12g} V, the level_max of [tickle]")
    return tickle_v


def _span_hz(table: Table, width_hz: float) -> float:
    span_hz = table.quantity("span", "frequency", above=0.0)
    if span_hz <= _WIDTHS_IN_SPAN * width_hz:
        table.wrong("span", f"more than {_WIDTHS_IN_SPAN:g} times the width, {_WIDTHS_IN_SPAN * width_hz:.12g} Hz")
    return span_hz


def _dwell_s(table: Table) -> float:
    dwell_s = table.quantity("dwell", "time", least=_SHORTEST_DWELL_S)
    if dwell_s > _LONGEST_DWELL_S:
        table.wrong("dwell", f"at most {_LONGEST_DWELL_S:g} s")
    return dwell_s


def _share(table: Table, key: str, default: float) -> float:
    share = table.quantity(key, "share", default=default, above=0.0)
    if share >= 1.0:
        table.wrong(key, "less than 100 %")
    return share


def read_schedule(root: Table, scans: Mapping[str, ScanSection]) -> tuple[DueSection, ...]:
    schedule: dict[str, DueSection] = {}
    for table in root.tables("schedule", labels=("name", "scan")) if "schedule" in root else ():
        due = _read_due(table, scans)
        if due.name in schedule:
            remedy = "expected each name once (two times for one scan need a name each)"
            root.mistakes.note(table.path, f": {due.name} is in the schedule twice; {remedy}")
        if due.name:
            schedule[due.name] = due
    return tuple(schedule.values())


def _read_due(table: Table, scans: Mapping[str, ScanSection]) -> DueSection:
    scan = table.text("scan", "the name of a scan")
    if scan and scan not in scans:
        table.wrong("scan", f"the NAME of one of [scans.NAME]{closest(scan, scans)}")
    name = table.text("name", WANTED_NAME, default=scan)
    if "name" in table and name and not NAME.fullmatch(name):
        table.wrong("name", WANTED_NAME)
    cron = table.text("cron", 'five fields in UTC such as "*/30 * * * *"')
    wanted = wanted_instead(cron) if cron else None
    if wanted:
        table.wrong("cron", wanted)
    return DueSection(name=name, scan=scan, cron=cron)
