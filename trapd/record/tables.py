"""The record's tables and views as SQLAlchemy sees them. The migrations create them; a test compares the two."""

from __future__ import annotations

from sqlalchemy import Column, Float, Integer, MetaData, Table, Text, insert
from sqlalchemy.dialects import sqlite

metadata = MetaData()


def _integers(*names: str) -> list[Column[int]]:
    return [Column(name, Integer) for name in names]


def _reals(*names: str) -> list[Column[float]]:
    return [Column(name, Float) for name in names]


def _texts(*names: str) -> list[Column[str]]:
    return [Column(name, Text) for name in names]


entries = Table(
    "entries",
    metadata,
    Column("seq", Integer, primary_key=True),
    *_integers("time_us", "monotonic_ns"),
    *_texts("boot_id", "kind", "actor", "body", "digest"),
)

intents = Table(
    "intents",
    metadata,
    Column("seq", Integer, primary_key=True),
    *_integers("request", "verdict", "ramp", "step"),
    Column("setpoint", Text),
    Column("value", Float),
    *_texts("unit", "instrument"),
    Column("channel", Integer),
    Column("quantity", Text),
    Column("level", Float),
    *_texts("who", "why"),
)

outcomes = Table(
    "outcomes",
    metadata,
    Column("seq", Integer, primary_key=True),
    Column("intent", Integer),
    Column("state", Text),
    *_integers("sent_us", "acknowledged_us", "verified_us"),
    Column("readback", Float),
    Column("difference", Float),
    Column("error", Text),
)

scan_points = Table(
    "scan_points",
    metadata,
    Column("seq", Integer, primary_key=True),
    *_integers("request", "intent", "pass_number", "point"),
    *_reals("frequency_hz", "level_v", "dwell_s"),
    *_integers("counts", "at_us"),
)

secular_frequencies = Table(
    "secular_frequencies",
    metadata,
    Column("seq", Integer, primary_key=True),
    *_integers("request", "finding"),
    *_texts("scan", "species", "mode"),
    *_reals("frequency_hz", "uncertainty_hz", "low_95_hz", "high_95_hz"),
    Column("at_us", Integer),
    *_reals("predicted_hz", "predicted_uncertainty_hz", "width_hz", "contrast", "likelihood_ratio"),
    *_texts("method", "fit_version"),
    Column("calibration", Integer),
    Column("flags", Text),
    Column("points", Integer),
    *_texts("who", "why"),
)

due_runs = Table(
    "due_runs",
    metadata,
    Column("seq", Integer, primary_key=True),
    *_texts("schedule", "scan"),
    Column("due_us", Integer),
    Column("state", Text),
    Column("late_s", Float),
    Column("request", Integer),
    Column("reason", Text),
)

views = MetaData()

setpoints = Table(
    "setpoints",
    views,
    Column("seq", Integer, primary_key=True),
    *_texts("time", "setpoint"),
    Column("value", Float),
    Column("unit", Text),
    Column("state", Text),
    Column("readback", Float),
    Column("difference", Float),
    *_texts("error", "instrument"),
    Column("channel", Integer),
    Column("quantity", Text),
    Column("level", Float),
    *_texts("who", "why"),
    *_integers("request", "verdict", "ramp", "step", "outcome"),
    *_texts("sent", "acknowledged", "verified"),
    *_integers("time_us", "sent_us", "acknowledged_us", "verified_us"),
)

refusals = Table(
    "refusals",
    views,
    Column("seq", Integer),
    *_texts("time", "who", "why", "rule", "quantity", "unit"),
    Column("found", Float),
    Column("bound", Float),
    Column("nearest", Float),
    *_texts("species", "mode", "message"),
    *_integers("request", "time_us"),
)

requests = Table(
    "requests",
    views,
    Column("seq", Integer, primary_key=True),
    *_texts("time", "who", "kind", "point", "scan", "values", "why"),
    *_integers("verdict", "accepted", "time_us"),
)

scans = Table(
    "scans",
    views,
    Column("seq", Integer, primary_key=True),
    *_texts("time", "scan", "mode", "species", "state"),
    *_reals("frequency_hz", "uncertainty_hz", "predicted_hz", "min_contrast"),
    *_texts("message", "flags", "who", "why"),
    *_integers("finding", "time_us"),
)

frequencies = Table(
    "frequencies",
    views,
    Column("seq", Integer, primary_key=True),
    *_texts("time", "scan", "species", "mode"),
    *_reals("frequency_hz", "uncertainty_hz", "low_95_hz", "high_95_hz", "predicted_hz", "predicted_uncertainty_hz"),
    *_reals("difference_hz", "difference_sigma", "width_hz", "contrast"),
    *_texts("flags", "who", "why"),
    *_integers("request", "finding", "at_us"),
)

due_times = Table(
    "due_times",
    views,
    Column("seq", Integer, primary_key=True),
    *_texts("due", "schedule", "scan", "state"),
    Column("late_s", Float),
    Column("reason", Text),
    Column("request", Integer),
    Column("time", Text),
    *_integers("due_us", "time_us"),
)

INSERTS = {table.name: str(insert(table).compile(dialect=sqlite.dialect())) for table in metadata.tables.values()}
"""One prepared INSERT a table, positional in column order; what is referred to comes first. The writer hands them to
the driver underneath SQLAlchemy, whose own execution costs as much as all the rest of a durable step (measured)."""
