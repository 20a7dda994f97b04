"""Dialect profiles: what one make of instrument does differently, in a TOML file. `profiles/plain.toml` has every key.

A profile's name is that of a shipped file or the path of a TOML file. Reading is strict: an unknown key, a wrong type
or a form that cannot work is one `ProfileError`, before anything is opened.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path

from trapd_drivers import entries
from trapd_drivers.dialect import Dialect, Key, StatusDialect
from trapd_drivers.errors import ProfileError
from trapd_drivers.link import Wire
from trapd_drivers.quantity import COUNTS, DC_UNITS, FREQUENCY_UNITS, GAUGE_UNITS, LEVEL_UNITS, TIME_UNITS, Quantity
from trapd_drivers.table import Table

_SHIPPED = Path(__file__).parent / "profiles"


@dataclass(frozen=True, kw_only=True)
class Profile:
    """One dialect of each kind of instrument that the file has a table for."""

    name: str
    wire: Wire
    timeout_s: float
    status: StatusDialect
    kinds: Mapping[str, Dialect]

    def dialect(self, kind: str) -> Dialect:
        if kind not in self.kinds:
            raise ProfileError(f"profile {self.name}: has no [{kind}]; nothing was opened")
        return self.kinds[kind]


def shipped_profiles() -> tuple[str, ...]:
    return tuple(sorted(file.stem for file in _SHIPPED.glob("*.toml")))


def load_profile(name: str) -> Profile:
    """The profile of that shipped name, or of that file when it ends in ``.toml``."""
    if not name.endswith(".toml") and name not in shipped_profiles():
        raise ProfileError(
            f"profile {name!r}: unknown; expected one of {', '.join(shipped_profiles())}, or the path of a .toml file; "
            "nothing was opened"
        )
    table = Table.read(Path(name) if name.endswith(".toml") else _SHIPPED / f"{name}.toml")
    kinds = {"rf_source": _rf_source, "dc_supply": _dc_supply, "photon_counter": _photon_counter, "gauge": _gauge}
    wire = table.table("wire")
    profile = Profile(
        name=name,
        timeout_s=wire.number("timeout_s", 0.0, at_least=0.0),
        wire=_wire(wire),
        status=_status(table.table("status")),
        kinds={kind: read(table.table(kind)) for kind, read in kinds.items() if kind in table},
    )
    table.finish()
    return profile


def _wire(table: Table) -> Wire:
    ends = ("\n", "\r\n", "\r")
    return Wire(
        write_end=table.choice("write_end", ends, "\n"),
        read_end=table.choice("read_end", ends, "\n"),
        longest_reply_bytes=int(table.number("longest_reply_bytes", 4096, at_least=64)),
        spacing_s=table.number("spacing_s", 0.0, at_least=0.0),
    )


def _status(table: Table) -> StatusDialect:
    return StatusDialect(
        identity=entries.form(table, "identity", default="*IDN?").text,
        events=entries.form(table, "events").text if "events" in table else None,
        error=entries.form(table, "error", default="SYST:ERR?").text,
        error_reply=entries.reply(table, "error_reply"),
        error_joined=table.flag("error_joined", True),
        ignored=frozenset(table.integers("ignored", ())),
        power_on=frozenset(table.integers("power_on", (-500,))),
        trip=frozenset(table.integers("trip", ())),
    )


def _rf_source(table: Table) -> Dialect:
    quantities = {
        ("frequency", 0): entries.quantity(table.table("frequency", required=True), tuple(FREQUENCY_UNITS)),
        ("level", 0): entries.quantity(table.table("level", required=True), tuple(LEVEL_UNITS)),
    }
    if "burst" not in table:
        return _dialect(table, quantities)
    burst = table.table("burst")
    quantities["burst", 0] = entries.quantity(burst, tuple(TIME_UNITS))
    return replace(_dialect(table, quantities), course=entries.course(burst))


def _dc_supply(table: Table) -> Dialect:
    channels = table.integers("channels")
    if not channels or len(set(channels)) < len(channels) or min(channels) < 1:
        raise table.error("channels", "different channel numbers from 1")
    names = frozenset({"channel"} if len(channels) > 1 else ())
    voltage, changes = table.table("voltage", required=True), table.table("channel")
    for key in changes.names():
        if key not in map(str, channels):
            raise changes.error(key, f"one of the channels {channels}")
    voltages = {
        ("voltage", channel): entries.quantity(voltage.merged(changes.table(str(channel))), tuple(DC_UNITS), names)
        for channel in channels
    }
    return _dialect(table, voltages, names)


def _photon_counter(table: Table) -> Dialect:
    gate = table.table("gate", required=True)
    return Dialect(
        quantities={("gate", 0): entries.quantity(gate, tuple(TIME_UNITS))},
        course=entries.course(gate),
        reading=entries.reading(table.table("count", required=True), COUNTS),
    )


def _gauge(table: Table) -> Dialect:
    return Dialect(reading=entries.reading(table, table.choice("unit", tuple(GAUGE_UNITS))))


def _dialect(table: Table, quantities: Mapping[Key, Quantity], names: frozenset[str] = entries.NO_CHANNEL) -> Dialect:
    return Dialect(
        settle_s=table.number("settle_s", 0.0, at_least=0.0),
        quantities=quantities,
        output=entries.output(table.table("output", required=True), names),
        trip=entries.trip(table.table("trip"), names) if "trip" in table else None,
    )
