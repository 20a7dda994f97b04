"""The entries of a profile's tables that several kinds of instrument have: forms, questions, readings, quantities."""

from __future__ import annotations

from trapd_drivers.dialect import Course, Output, Question
from trapd_drivers.form import Form
from trapd_drivers.quantity import Quantity, Reading, Unit
from trapd_drivers.table import Table

NO_CHANNEL: frozenset[str] = frozenset()
"""The names that a form of an instrument without channels needs."""


def output(table: Table, names: frozenset[str]) -> Output:
    dressed, yes, no = _words(table)
    asked = "query" in table
    state = Question(query=form(table, "query", names), reply=dressed, yes=yes, no=no) if asked else None
    return Output(on=form(table, "on", names), off=form(table, "off", names), state=state)


def trip(table: Table, names: frozenset[str]) -> Question:
    yes = table.words("words", ("1", "ON"))
    return Question(query=form(table, "query", names), reply=reply(table), yes=yes)


def course(table: Table) -> Course:
    end = form(table, "end") if "end" in table else None
    return Course(start=form(table, "start"), running=_running(table.table("running", required=True)), end=end)


def quantity(table: Table, units: tuple[str, ...], names: frozenset[str] = NO_CHANNEL) -> Quantity:
    name = table.choice("unit", units)
    found = Quantity(
        unit=_unit(table, name),
        set=form(table, "set", names | {"value"}),
        programmed=_reading(table, table.choice("reply_unit", units, name), names),
        measured=_measured(table.table("measure"), units, names) if "measure" in table else None,
        low=_limit(table, "low", names),
        high=_limit(table, "high", names),
        resolution=table.number("resolution", above=0.0),
        accuracy_absolute=table.number("accuracy_absolute", at_least=0.0),
        accuracy_relative=table.number("accuracy_relative", at_least=0.0),
        boundaries=table.numbers("boundaries", ()),
    )
    if isinstance(found.low, float) and isinstance(found.high, float) and found.low >= found.high:
        raise table.error("high", f"a number above low = {found.low:g}")
    _demand_computable(table, found)
    return found


def reading(table: Table, unit: str) -> Reading:
    """One number of an instrument without channels, in ``unit``."""
    return Reading(query=form(table, "query"), reply=reply(table), unit=Unit(name=unit))


def reply(table: Table, key: str = "reply") -> Form:
    return form(table, key, frozenset({"value"}), "{value}")


def form(table: Table, key: str, needs: frozenset[str] = NO_CHANNEL, default: str | None = None) -> Form:
    text = table.text(key) if default is None else table.text(key, default)
    try:
        found = Form(text)
    except ValueError as error:
        raise table.error(key, str(error)) from error
    if missing := needs - found.fields:
        raise table.error(key, f"text with {' and '.join('{' + name + '}' for name in sorted(missing))} in it")
    return found


def _words(table: Table) -> tuple[Form, frozenset[str], frozenset[str]]:
    """How a state is answered: the reply's form, the words for yes and those for no."""
    yes, no = table.words("on_words", ("1", "ON")), table.words("off_words", ("0", "OFF"))
    if yes & no:
        raise table.error("off_words", "words that do not also mean on")
    return reply(table), yes, no


def _running(table: Table) -> Question:
    query = form(table, "query")
    if "bits" not in table:
        dressed, yes, no = _words(table)
        return Question(query=query, reply=dressed, yes=yes, no=no)
    bits = table.integers("bits")
    if not bits or min(bits) < 0:
        raise table.error("bits", "bit numbers from 0")
    mask = sum(1 << bit for bit in set(bits))
    return Question(query=query, reply=reply(table), yes=frozenset(), bits=mask)


def _measured(table: Table, units: tuple[str, ...], names: frozenset[str]) -> Reading:
    return _reading(table, table.choice("unit", units), names)


def _reading(table: Table, unit: str, names: frozenset[str]) -> Reading:
    return Reading(query=form(table, "query", names), reply=reply(table), unit=_unit(table, unit))


def _unit(table: Table, name: str) -> Unit:
    return Unit(
        name=name,
        load_factor=table.number("load_factor", 1.0, above=0.0),
        impedance_ohm=table.number("impedance_ohm", 50.0, above=0.0),
    )


def _demand_computable(table: Table, found: Quantity) -> None:
    for key in ("low", "high", "resolution", "accuracy_absolute", "boundaries"):
        said = getattr(found, key)
        for number in said if isinstance(said, tuple) else (said,):
            try:
                if not isinstance(number, Form):
                    found.unit.to_si(number)
            except ValueError as error:
                raise table.error(key, "what can be computed with") from error


def _limit(table: Table, key: str, names: frozenset[str]) -> float | Form:
    return form(table, key, names) if table.is_text(key) else table.number(key)
