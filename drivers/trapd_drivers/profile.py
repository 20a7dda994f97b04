"""Dialect profiles: what one make of instrument does differently, in a TOML file. `profiles/plain.toml` has every key.

A profile's name is that of a shipped file or the path of a TOML file. Reading is strict: an unknown key, a wrong type
or a form that cannot work is one `ProfileError`, before anything is opened.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from trapd_drivers.errors import ProfileError
from trapd_drivers.form import Form
from trapd_drivers.link import Wire
from trapd_drivers.quantity import DC_UNITS, FREQUENCY_UNITS, LEVEL_UNITS, Quantity, Reading, Unit
from trapd_drivers.table import Table

_SHIPPED = Path(__file__).parent / "profiles"


@dataclass(frozen=True, kw_only=True)
class StatusDialect:
    """How the instrument says who it is, what happened to it, and what it refused."""

    identity: str
    events: str | None
    error: str
    error_reply: Form
    error_joined: bool
    ignored: frozenset[int]
    power_on: frozenset[int]
    trip: frozenset[int]


@dataclass(frozen=True, kw_only=True)
class OutputDialect:
    """Switching an output. Without a query its state is what it was last told, and on before that."""

    on: Form
    off: Form
    query: Form | None
    reply: Form
    on_words: frozenset[str]
    off_words: frozenset[str]


@dataclass(frozen=True, kw_only=True)
class TripDialect:
    """Asking whether a protection has latched an output off; ``words`` are the replies that mean yes."""

    query: Form
    reply: Form
    words: frozenset[str]


@dataclass(frozen=True, kw_only=True)
class RfSourceDialect:
    settle_s: float
    frequency: Quantity
    level: Quantity
    output: OutputDialect
    trip: TripDialect | None


@dataclass(frozen=True, kw_only=True)
class DcSupplyDialect:
    settle_s: float
    voltages: Mapping[int, Quantity]
    output: OutputDialect
    trip: TripDialect | None


@dataclass(frozen=True, kw_only=True)
class Profile:
    """One dialect. A part that the file leaves out is None: the profile then does not serve that kind of instrument."""

    name: str
    wire: Wire
    timeout_s: float
    status: StatusDialect
    rf_source: RfSourceDialect | None
    dc_supply: DcSupplyDialect | None

    def require_rf_source(self) -> RfSourceDialect:
        if self.rf_source is None:
            raise ProfileError(f"profile {self.name}: has no [rf_source]; nothing was opened")
        return self.rf_source

    def require_dc_supply(self) -> DcSupplyDialect:
        if self.dc_supply is None:
            raise ProfileError(f"profile {self.name}: has no [dc_supply]; nothing was opened")
        return self.dc_supply


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
    wire = table.table("wire")
    profile = Profile(
        name=name,
        timeout_s=wire.number("timeout_s", 0.0, at_least=0.0),
        wire=_wire(wire),
        status=_status(table.table("status")),
        rf_source=_rf_source(table.table("rf_source")) if "rf_source" in table else None,
        dc_supply=_dc_supply(table.table("dc_supply")) if "dc_supply" in table else None,
    )
    table.finish()
    return profile


def _wire(table: Table) -> Wire:
    wire = Wire(
        write_end=_end(table, "write_end"),
        read_end=_end(table, "read_end"),
        longest_reply_bytes=int(table.number("longest_reply_bytes", 4096, at_least=64)),
        spacing_s=table.number("spacing_s", 0.0, at_least=0.0),
    )
    table.finish()
    return wire


def _end(table: Table, key: str) -> str:
    return table.choice(key, ("\n", "\r\n", "\r"), "\n")


def _status(table: Table) -> StatusDialect:
    status = StatusDialect(
        identity=_form(table, "identity", "*IDN?").text,
        events=_form(table, "events").text if "events" in table else None,
        error=_form(table, "error", "SYST:ERR?").text,
        error_reply=_form(table, "error_reply", "{value}", needs={"value"}),
        error_joined=table.flag("error_joined", True),
        ignored=frozenset(table.integers("ignored", ())),
        power_on=frozenset(table.integers("power_on", (-500,))),
        trip=frozenset(table.integers("trip", ())),
    )
    table.finish()
    return status


def _rf_source(table: Table) -> RfSourceDialect:
    dialect = RfSourceDialect(
        settle_s=table.number("settle_s", 0.0, at_least=0.0),
        frequency=_quantity(table.table("frequency", required=True), tuple(FREQUENCY_UNITS), set()),
        level=_quantity(table.table("level", required=True), tuple(LEVEL_UNITS), set()),
        output=_output(table.table("output", required=True), set()),
        trip=_trip(table.table("trip"), set()) if "trip" in table else None,
    )
    table.finish()
    return dialect


def _dc_supply(table: Table) -> DcSupplyDialect:
    channels = table.integers("channels")
    if not channels or len(set(channels)) < len(channels) or min(channels) < 1:
        raise table.error("channels", "different channel numbers from 1")
    names: set[str] = {"channel"} if len(channels) > 1 else set()
    voltage, changes = table.table("voltage", required=True), table.table("channel")
    for key in changes.names():
        if key not in map(str, channels):
            raise changes.error(key, f"one of the channels {channels}")
    dialect = DcSupplyDialect(
        settle_s=table.number("settle_s", 0.0, at_least=0.0),
        voltages={
            channel: _quantity(voltage.merged(changes.table(str(channel))), tuple(DC_UNITS), names)
            for channel in channels
        },
        output=_output(table.table("output", required=True), names),
        trip=_trip(table.table("trip"), names) if "trip" in table else None,
    )
    table.finish()
    return dialect


def _quantity(table: Table, units: tuple[str, ...], names: set[str]) -> Quantity:
    unit = _unit(table, "unit", table.choice("unit", units))
    reply_unit = _unit(table, "reply_unit", table.choice("reply_unit", units, unit.name))
    quantity = Quantity(
        unit=unit,
        set=_form(table, "set", needs={"value"} | names),
        programmed=Reading(
            query=_form(table, "query", needs=names),
            reply=_form(table, "reply", "{value}", needs={"value"}),
            unit=reply_unit,
        ),
        measured=_measured(table.table("measure"), units, names) if "measure" in table else None,
        low=_limit(table, "low", names),
        high=_limit(table, "high", names),
        resolution=table.number("resolution", above=0.0),
        accuracy_absolute=table.number("accuracy_absolute", at_least=0.0),
        accuracy_relative=table.number("accuracy_relative", at_least=0.0),
        boundaries=table.numbers("boundaries", ()),
    )
    if isinstance(quantity.low, float) and isinstance(quantity.high, float) and quantity.low >= quantity.high:
        raise table.error("high", f"a number above low = {quantity.low:g}")
    table.finish()
    return quantity


def _unit(table: Table, key: str, name: str) -> Unit:
    return Unit(
        name=name,
        load_factor=table.number("load_factor", 1.0, above=0.0),
        impedance_ohm=table.number("impedance_ohm", 50.0, above=0.0),
    )


def _measured(table: Table, units: tuple[str, ...], names: set[str]) -> Reading:
    reading = Reading(
        query=_form(table, "query", needs=names),
        reply=_form(table, "reply", "{value}", needs={"value"}),
        unit=_unit(table, "unit", table.choice("unit", units)),
    )
    table.finish()
    return reading


def _limit(table: Table, key: str, names: set[str]) -> float | Form:
    return _form(table, key, needs=names) if table.is_text(key) else table.number(key)


def _output(table: Table, names: set[str]) -> OutputDialect:
    output = OutputDialect(
        on=_form(table, "on", needs=names),
        off=_form(table, "off", needs=names),
        query=_form(table, "query", needs=names) if "query" in table else None,
        reply=_form(table, "reply", "{value}", needs={"value"}),
        on_words=_words(table, "on_words", ("1", "ON")),
        off_words=_words(table, "off_words", ("0", "OFF")),
    )
    if output.on_words & output.off_words:
        raise table.error("off_words", "words that do not also mean on")
    table.finish()
    return output


def _trip(table: Table, names: set[str]) -> TripDialect:
    trip = TripDialect(
        query=_form(table, "query", needs=names),
        reply=_form(table, "reply", "{value}", needs={"value"}),
        words=_words(table, "words", ("1", "ON")),
    )
    table.finish()
    return trip


def _words(table: Table, key: str, default: tuple[str, ...]) -> frozenset[str]:
    return frozenset(word.upper() for word in table.texts(key, default))


def _form(table: Table, key: str, default: str | None = None, *, needs: set[str] | None = None) -> Form:
    text = table.text(key) if default is None else table.text(key, default)
    try:
        form = Form(text)
    except ValueError as error:
        raise table.error(key, str(error)) from error
    if missing := (needs or set()) - form.fields:
        raise table.error(key, f"text with {' and '.join('{' + name + '}' for name in sorted(missing))} in it")
    return form
