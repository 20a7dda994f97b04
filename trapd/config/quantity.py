"""Text with a unit to one number: ``"24.5 MHz"`` is 24500000.0 Hz.

Pint knows units and dimensions, and sees nothing but unit expressions that passed a strict pattern: by itself it reads
"24,5 MHz" as 245 MHz and evaluates sums. Its registry is built from the short list below (7 ms; the one it ships takes
130 ms). The arithmetic is decimal, so the result is the float nearest to what is written.

Two base dimensions are ours, because dimensional analysis alone would mix up what must not be mixed up: a *cycle*, so
that a frequency ("21 MHz") is no rate ("40 /s"), and a *whole*, so that a share ("5 %") is no gain ("38 V/V").
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from decimal import Decimal
from difflib import get_close_matches
from functools import cache
from math import isfinite
from typing import TYPE_CHECKING, Literal

from trapd.errors import BadRequest, ConfigError
from trapd.setpoint import unit_of

if TYPE_CHECKING:
    import pint

Dimension = Literal[
    "length",
    "time",
    "frequency",
    "frequency rate",
    "voltage",
    "voltage rate",
    "mass",
    "charge",
    "rate",
    "share",
    "gain",
    "energy",
    "pressure",
]

_UNIT_AND_EXAMPLE: dict[Dimension, tuple[str, str]] = {
    "length": ("m", "0.50 mm"),
    "time": ("s", "3 ms"),
    "frequency": ("Hz", "21.00 MHz"),
    "frequency rate": ("Hz/s", "20 kHz/s"),
    "voltage": ("V", "300 V"),
    "voltage rate": ("V/s", "40 V/s"),
    "mass": ("kg", "2.1e-14 kg"),
    "charge": ("C", "900 e"),
    "rate": ("/s", "40 /s"),
    "share": ("whole", "5 %"),
    "gain": ("V/V", "38 V/V"),
    "energy": ("J", "0.2 eV"),
    "pressure": ("Pa", "1e-6 mbar"),
}

# e: SI Brochure, 9th edition (2019), exact. dalton: CODATA 2022. bar, min, h: SI Brochure, table 8 and its notes.
_DEFINITIONS = """
femto- = 1e-15 = f-
pico- = 1e-12 = p-
nano- = 1e-9 = n-
micro- = 1e-6 = µ- = μ- = u-
milli- = 1e-3 = m-
centi- = 1e-2 = c-
kilo- = 1e3 = k-
mega- = 1e6 = M-
giga- = 1e9 = G-
meter = [length] = m
second = [time] = s
gram = [mass] = g
ampere = [current] = A
cycle = [cycle]
whole = [share]
percent = 0.01 * whole
ppm = 1e-6 * whole
hertz = cycle / second = Hz
minute = 60 * second = min
hour = 3600 * second = h
coulomb = ampere * second = C
elementary_charge = 1.602176634e-19 * coulomb = e
joule = kilogram * meter ** 2 / second ** 2 = J
volt = joule / coulomb = V
electron_volt = 1.602176634e-19 * joule = eV
dalton = 1.66053906892e-27 * kilogram = Da = u
pascal = joule / meter ** 3 = Pa
bar = 1e5 * pascal = bar
"""

_FACTOR = r"[A-Za-zµμ%]+(?:\^[1-9])?"
_NUMBER = r"[+-]?[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]{1,3})?"
_QUANTITY = re.compile(rf"(?P<number>{_NUMBER}) ?(?P<unit>(?:{_FACTOR}(?:\*{_FACTOR})*)?(?:/{_FACTOR})?)")

_DIAGNOSES: tuple[tuple[re.Pattern[str], str], ...] = (
    (re.compile(r"\s*"), "nothing"),
    (re.compile(r"\s.*|.*\s", re.DOTALL), "space around it"),
    (re.compile(r"[+-]?(nan|inf|infinity)\b.*", re.IGNORECASE | re.DOTALL), "not a finite number"),
    (re.compile(rf"{_NUMBER}"), "a number without a unit"),
    (re.compile(r"[+-]?[0-9]+,[0-9].*", re.DOTALL), "a comma in the number (decimals take a point)"),
    (re.compile(r"[+-]?[0-9.]+[\s_'][0-9].*", re.DOTALL), "a space or mark inside the number"),
    (re.compile(r"[+-]?(\.[0-9]|[0-9]+\.(?![0-9])).*", re.DOTALL), "a point without digits on both sides"),
    (re.compile(r"[+-]?[0-9.]+([eE][+-]?[0-9]+)?[A-Za-zµμ%/ ]*[-+*^(][^A-Za-z]*[0-9].*", re.DOTALL), "arithmetic"),
    (re.compile(r"[A-Za-zµμ%/]+.*", re.DOTALL), "no number in front"),
)


class QuantityError(ValueError):
    """The text is no quantity of the wanted dimension; the message says what was found and what was expected."""


def quantity(text: str, dimension: Dimension, unit: str | None = None) -> float:
    """``text`` in ``unit``, by default the SI unit of ``dimension`` (shares: of one). Raises `QuantityError`."""
    match = _QUANTITY.fullmatch(text)
    if match is None or not match["unit"]:
        raise QuantityError(f"{_diagnosis(text)}; expected {expected(dimension)}")
    value = float(Decimal(match["number"]) * _factor(match["unit"], dimension, unit))
    if not isfinite(value):
        raise QuantityError(f"a number too large to compute with; expected {expected(dimension)}")
    return value


def expected(dimension: Dimension) -> str:
    """``a voltage such as "300 V"``, for messages."""
    return f'a {dimension} such as "{_UNIT_AND_EXAMPLE[dimension][1]}"'.replace("a energy", "an energy")


def parse_quantity(text: str, dimension: Dimension, where: str) -> float:
    """As `quantity`; raises `ConfigError` naming ``where`` the text stands (file and key)."""
    try:
        return quantity(text, dimension)
    except QuantityError as error:
        raise ConfigError(f'{where} = "{text}": {error}') from error


def parse_setpoint_value(setpoint: str, text: str) -> float:
    """The value of a command line's ``120V``, in the setpoint's own unit (Hz or V); raises `BadRequest`."""
    dimension: Dimension = "frequency" if unit_of(setpoint) == "Hz" else "voltage"
    try:
        return quantity(text, dimension)
    except QuantityError as error:
        raise BadRequest(f'{setpoint} = "{text}": {error}') from error


def parse_assignments(words: Iterable[str], known: Iterable[str] | None = None) -> dict[str, float]:
    """``["endcaps=120V", "drive.frequency=21MHz"]`` to values by setpoint, in Hz and V.

    ``known`` are the setpoints of the trap, None when only the daemon knows them. Raises `BadRequest` for a word that
    is no assignment, an unknown or repeated setpoint, and what `parse_setpoint_value` refuses.
    """
    names = None if known is None else list(known)
    values: dict[str, float] = {}
    for word in words:
        name, equals, text = word.partition("=")
        if not (name and equals):
            raise BadRequest(f'"{word}": expected setpoint=value such as "endcaps=120V"')
        if names is not None and name not in names:
            raise BadRequest(f'"{name}" is no setpoint of this trap{closest(name, names)}')
        if name in values:
            raise BadRequest(f'"{name}" is given twice')
        values[name] = parse_setpoint_value(name, text)
    return values


def closest(name: str, known: Iterable[str]) -> str:
    """``; did you mean "endcaps"?`` or the list of what there is, for messages."""
    names = list(known)
    near = get_close_matches(name, names, n=1, cutoff=0.6)
    if near:
        return f'; did you mean "{near[0]}"?'
    return f"; known here: {', '.join(names)}" if names else "; none is known here"


def _diagnosis(text: str) -> str:
    return next((wrong for pattern, wrong in _DIAGNOSES if pattern.fullmatch(text)), "not a number with a unit")


@cache
def _factor(unit: str, dimension: Dimension, target: str | None) -> Decimal:
    """What one ``unit`` is in the target, by default the SI unit of ``dimension``."""
    found, wanted = _units(unit, dimension), _units(target or _UNIT_AND_EXAMPLE[dimension][0], dimension)
    if found.dimensionality != wanted.dimensionality:
        raise QuantityError(f"{_kind_of(found)}; expected {expected(dimension)}")
    registry = _registry()
    ours, theirs = (Decimal(str(registry.get_root_units(units)[0])) for units in (found, wanted))
    return ours / theirs


def _units(unit: str, dimension: Dimension) -> pint.Unit:
    import pint

    expression = unit.replace("%", "percent").replace("^", "**")
    try:
        return _registry().parse_units("1" + expression if expression[0] == "/" else expression)
    except pint.PintError as error:
        raise QuantityError(f"an unknown unit (capitals count); expected {expected(dimension)}") from error


def _kind_of(units: pint.Unit) -> str:
    for dimension, (unit, _) in _UNIT_AND_EXAMPLE.items():
        if _units(unit, dimension).dimensionality == units.dimensionality:
            return f"a {dimension}".replace("a energy", "an energy")
    return "a quantity of another kind"


@cache
def _registry() -> pint.UnitRegistry[Decimal]:
    import pint  # 0.13 s: only when there is a quantity to read

    return pint.UnitRegistry(_DEFINITIONS.strip().splitlines(), non_int_type=Decimal)
