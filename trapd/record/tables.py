"""The record's tables and views as SQLAlchemy sees them. The migrations create them; a test compares the two."""

from __future__ import annotations

from sqlalchemy import Column, Float, Integer, MetaData, Table, Text, insert
from sqlalchemy.dialects import sqlite

metadata = MetaData()


def _integers(*names: str) -> list[Column[int]]:
    return [Column(name, Integer) for name in names]


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
    *_texts("time", "who", "kind", "point", "values", "why"),
    *_integers("verdict", "accepted", "time_us"),
)

INSERTS = {table.name: str(insert(table).compile(dialect=sqlite.dialect())) for table in (entries, intents, outcomes)}
"""One prepared INSERT a table, positional in column order; what is referred to comes first. The writer hands them to
the driver underneath SQLAlchemy, whose own execution costs as much as all the rest of a durable step (measured)."""
