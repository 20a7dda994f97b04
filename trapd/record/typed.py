"""Typed rows: what an entry says in plain SI columns. Pure; used when writing and again by `verify`."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import suppress
from math import isfinite
from typing import Any, NamedTuple

from trapd.errors import Bug


class TypedRow(NamedTuple):
    """A row for ``table``; ``values`` in its column order, but for the seq, which comes first."""

    table: str
    values: tuple[Any, ...]


def typed_row(kind: str, actor: str, data: Mapping[str, Any]) -> TypedRow | None:
    """The typed row of an entry, or None for kinds without a table. Raises `Bug` where a field is missing or wrong.

    ``who`` is the entry's actor and ``why`` is empty where the data do not say.
    """
    if kind not in _TABLES:
        return None
    table, columns = _TABLES[kind]
    data = {"who": actor, "why": "", **data}
    values = []
    for column, expected in columns:
        value: Any = data.get(column)
        found = type(value)
        if found not in expected.types:
            value = _converted(column, value, expected)
        elif (found is float and not isfinite(value)) or (found is int and not -(2**63) <= value < 2**63):
            raise _wrong(column, value, expected)
        values.append(value)
    return TypedRow(table, tuple(values))


class _Expected(NamedTuple):
    """What a column holds."""

    what: str
    types: frozenset[type]


_REAL = _Expected("a finite number", frozenset((float,)))
_INTEGER = _Expected("an integer", frozenset((int,)))
_TEXT = _Expected("text", frozenset((str,)))


def _or_none(expected: _Expected) -> _Expected:
    return expected._replace(types=expected.types | {type(None)})


def _converted(column: str, value: object, expected: _Expected) -> float:
    """Integers are welcome where a real number is expected, as JSON makes no difference between them."""
    if type(value) is int and float in expected.types:
        with suppress(OverflowError):
            return float(value)
    raise _wrong(column, value, expected)


def _wrong(column: str, value: object, expected: _Expected) -> Bug:
    return Bug(f"{column} is {value!r}, expected {expected.what}; nothing was written")


_INTENTS = (
    ("request", _or_none(_INTEGER)),
    ("verdict", _or_none(_INTEGER)),
    ("ramp", _or_none(_INTEGER)),
    ("step", _or_none(_INTEGER)),
    ("setpoint", _TEXT),
    ("value", _REAL),
    ("unit", _TEXT),
    ("instrument", _TEXT),
    ("channel", _or_none(_INTEGER)),
    ("quantity", _TEXT),
    ("level", _REAL),
    ("who", _TEXT),
    ("why", _TEXT),
)
_OUTCOMES = (
    ("intent", _INTEGER),
    ("state", _TEXT),
    ("sent_us", _or_none(_INTEGER)),
    ("acknowledged_us", _or_none(_INTEGER)),
    ("verified_us", _or_none(_INTEGER)),
    ("readback", _or_none(_REAL)),
    ("difference", _or_none(_REAL)),
    ("error", _or_none(_TEXT)),
)
_SCAN_POINTS = (
    ("request", _INTEGER),
    ("intent", _or_none(_INTEGER)),
    ("pass_number", _INTEGER),
    ("point", _INTEGER),
    ("frequency_hz", _or_none(_REAL)),
    ("level_v", _REAL),
    ("dwell_s", _REAL),
    ("counts", _INTEGER),
    ("at_us", _INTEGER),
)
_SECULAR_FREQUENCIES = (
    ("request", _INTEGER),
    ("finding", _INTEGER),
    ("scan", _TEXT),
    ("species", _TEXT),
    ("mode", _TEXT),
    ("frequency_hz", _REAL),
    ("uncertainty_hz", _REAL),
    ("low_95_hz", _REAL),
    ("high_95_hz", _REAL),
    ("at_us", _INTEGER),
    ("predicted_hz", _REAL),
    ("predicted_uncertainty_hz", _REAL),
    ("width_hz", _REAL),
    ("contrast", _REAL),
    ("likelihood_ratio", _REAL),
    ("method", _TEXT),
    ("fit_version", _TEXT),
    ("calibration", _or_none(_INTEGER)),
    ("flags", _TEXT),
    ("points", _INTEGER),
    ("who", _TEXT),
    ("why", _TEXT),
)
_DUE_RUNS = (
    ("schedule", _TEXT),
    ("scan", _TEXT),
    ("due_us", _INTEGER),
    ("state", _TEXT),
    ("late_s", _REAL),
    ("request", _or_none(_INTEGER)),
    ("reason", _TEXT),
)
_TABLES = {
    "intent": ("intents", _INTENTS),
    "outcome": ("outcomes", _OUTCOMES),
    "scan_point": ("scan_points", _SCAN_POINTS),
    "secular_frequency": ("secular_frequencies", _SECULAR_FREQUENCIES),
    "due_run": ("due_runs", _DUE_RUNS),
}
TYPED_TABLES = tuple(table for table, _ in _TABLES.values())
