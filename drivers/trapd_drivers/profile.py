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
from trapd_drivers.interfaces import Scale
from trapd_drivers.link import Wire
from trapd_drivers.quantity import DC_UNITS, FREQUENCY_UNITS, LEVEL_UNITS, Quantity, Reading, Unit
from trapd_drivers.table import Table

_SHIPPED = Path(__file__).parent / "profiles"
Key = tuple[str, int]
"""A quantity ("frequency", "level" or "voltage") and its channel, 0 where there are no channels."""


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
class Question:
    """A query that tells yes or no. What is neither is malformed; without ``no`` everything but yes means no."""

    query: Form
    reply: Form
    yes: frozenset[str]
    no: frozenset[str] | None = None


@dataclass(frozen=True, kw_only=True)
class Dialect:
    """One kind of instrument. ``output`` asks whether it is on, ``trip`` whether a protection has latched it off."""

    settle_s: float
    quantities: Mapping[Key, Quantity]
    on: Form
    off: Form
    output: Question | None
    trip: Question | None

    @property
    def channels(self) -> tuple[int, ...]:
        return tuple(dict.fromkeys(channel for _, channel in self.quantities))

    def scales(self) -> dict[Key, Scale]:
        """As far as the profile states them; a limit that only the instrument knows is infinite."""
        return {key: quantity.scale() for key, quantity in self.quantities.items()}


@dataclass(frozen=True, kw_only=True)
class Profile:
    """One dialect of each kind of instrument that the file has a table for: "rf_source", "dc_supply"."""

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
    kinds = {"rf_source": _rf_source, "dc_supply": _dc_supply}
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
        identity=_form(table, "identity", "*IDN?").text,
        events=_form(table, "events").text if "events" in table else None,
        error=_form(table, "error", "SYST:ERR?").text,
        error_reply=_reply(table, "error_reply"),
        error_joined=table.flag("error_joined", True),
        ignored=frozenset(table.integers("ignored", ())),
        power_on=frozenset(table.integers("power_on", (-500,))),
        trip=frozenset(table.integers("trip", ())),
    )


def _rf_source(table: Table) -> Dialect:
    frequency = _quantity(table.table("frequency", required=True), tuple(FREQUENCY_UNITS), set())
    level = _quantity(table.table("level", required=True), tuple(LEVEL_UNITS), set())
    return _dialect(table, {("frequency", 0): frequency, ("level", 0): level}, set())


def _dc_supply(table: Table) -> Dialect:
    channels = table.integers("channels")
    if not channels or len(set(channels)) < len(channels) or min(channels) < 1:
        raise table.error("channels", "different channel numbers from 1")
    names = {"channel"} if len(channels) > 1 else set()
    voltage, changes = table.table("voltage", required=True), table.table("channel")
    for key in changes.names():
        if key not in map(str, channels):
            raise changes.error(key, f"one of the channels {channels}")
    voltages = {
        ("voltage", channel): _quantity(voltage.merged(changes.table(str(channel))), tuple(DC_UNITS), names)
        for channel in channels
    }
    return _dialect(table, voltages, names)


def _dialect(table: Table, quantities: Mapping[Key, Quantity], names: set[str]) -> Dialect:
    output = table.table("output", required=True)
    return Dialect(
        settle_s=table.number("settle_s", 0.0, at_least=0.0),
        quantities=quantities,
        on=_form(output, "on", needs=names),
        off=_form(output, "off", needs=names),
        output=_output(output, names),
        trip=_trip(table.table("trip"), names) if "trip" in table else None,
    )


def _output(table: Table, names: set[str]) -> Question | None:
    reply, yes, no = _reply(table), table.words("on_words", ("1", "ON")), table.words("off_words", ("0", "OFF"))
    if yes & no:
        raise table.error("off_words", "words that do not also mean on")
    if "query" not in table:
        return None
    return Question(query=_form(table, "query", needs=names), reply=reply, yes=yes, no=no)


def _trip(table: Table, names: set[str]) -> Question:
    yes = table.words("words", ("1", "ON"))
    return Question(query=_form(table, "query", needs=names), reply=_reply(table), yes=yes)


def _quantity(table: Table, units: tuple[str, ...], names: set[str]) -> Quantity:
    name = table.choice("unit", units)
    quantity = Quantity(
        unit=_unit(table, name),
        set=_form(table, "set", needs={"value"} | names),
        programmed=_reading(table, table.choice("reply_unit", units, name), names),
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
    return quantity


def _measured(table: Table, units: tuple[str, ...], names: set[str]) -> Reading:
    return _reading(table, table.choice("unit", units), names)


def _reading(table: Table, unit: str, names: set[str]) -> Reading:
    return Reading(query=_form(table, "query", needs=names), reply=_reply(table), unit=_unit(table, unit))


def _unit(table: Table, name: str) -> Unit:
    return Unit(
        name=name,
        load_factor=table.number("load_factor", 1.0, above=0.0),
        impedance_ohm=table.number("impedance_ohm", 50.0, above=0.0),
    )


def _limit(table: Table, key: str, names: set[str]) -> float | Form:
    return _form(table, key, needs=names) if table.is_text(key) else table.number(key)


def _reply(table: Table, key: str = "reply") -> Form:
    return _form(table, key, "{value}", needs={"value"})


def _form(table: Table, key: str, default: str | None = None, *, needs: set[str] | None = None) -> Form:
    text = table.text(key) if default is None else table.text(key, default)
    try:
        form = Form(text)
    except ValueError as error:
        raise table.error(key, str(error)) from error
    if missing := (needs or set()) - form.fields:
        raise table.error(key, f"text with {' and '.join('{' + name + '}' for name in sorted(missing))} in it")
    return form
