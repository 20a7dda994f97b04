"""Reading what a SCPI instrument answers: numbers, identities, error queue entries. Pure text in, values out.

Formats: IEEE 488.2-1992 8.7.2 to 8.7.4 (NR1, NR2, NR3), 10.14 (``*IDN?``: four fields); SCPI-1999 volume 1, 7.2.1
(9.9E37 is infinity, 9.91E37 not a number), volume 2, 21.8 (``SYSTem:ERRor?``: number from -32768 to 32767, "text").
[mem]
"""

from __future__ import annotations

import re

from trapd_drivers.errors import Malformed
from trapd_drivers.interfaces import Identity

_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([Ee][+-]?\d+)?", re.ASCII)
_ERROR = re.compile(r'([+-]?\d{1,9})\s*,\s*"(.*)"', re.ASCII)
_LARGEST = 9.9e37
_SIMULATED = "TRAPD SIMULATED"


def number(text: str) -> float:
    """An NR1, NR2 or NR3 number. SCPI's infinity and not-a-number are no numbers here."""
    if not _NUMBER.fullmatch(text):
        raise Malformed(f"{text[:40]!r} is not a number")
    value = float(text)
    if is_no_number(text):
        raise Malformed(f"{text!r} is SCPI's way of saying that there is no number")
    return value


def is_no_number(text: str) -> bool:
    """Whether it is how SCPI writes an infinity or not-a-number."""
    return _NUMBER.fullmatch(text) is not None and abs(float(text)) >= _LARGEST


def whole_number(text: str) -> int:
    """A count or a register: a number that is whole and not negative, in whichever of the three formats."""
    value = number(text)
    if value < 0.0 or not value.is_integer():
        raise Malformed(f"{text[:40]!r} is not a whole number from 0")
    return int(value)


def identity(text: str) -> Identity:
    """Manufacturer, model, serial, firmware; simulated when the manufacturer says so itself."""
    fields = [field.strip() for field in text.split(",", 3)]
    if len(fields) != 4 or not fields[0]:
        raise Malformed(f"{text[:80]!r} is not an identity of four fields")
    manufacturer, model, serial, firmware = fields
    simulated = manufacturer.upper().startswith(_SIMULATED)
    return Identity(manufacturer=manufacturer, model=model, serial=serial, firmware=firmware, simulated=simulated)


def error_entry(text: str) -> tuple[int, str] | None:
    """One entry of the error queue, None when the queue says it is empty (0)."""
    match = _ERROR.fullmatch(text)
    if match is None:
        raise Malformed(f"{text[:80]!r} is not an error queue entry")
    code = int(match[1])
    return (code, match[2]) if code != 0 else None
