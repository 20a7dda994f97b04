"""Deliberate failures of the rack.

RackError
├── SettingsError    the settings file is wrong
├── RackUseError     a call to the rack (Python or control port) names something it does not have
└── ScpiError        a program message an instrument refuses; goes to its error queue, never to the caller
"""

from __future__ import annotations

# Texts of SCPI-1999 volume 2, 21.8 (the ones this rack can raise).
TEXTS = {
    0: "No error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -111: "Header separator error",
    -112: "Program mnemonic too long",
    -113: "Undefined header",
    -114: "Header suffix out of range",
    -121: "Invalid character in number",
    -123: "Exponent too large",
    -124: "Too many digits",
    -128: "Numeric data not allowed",
    -131: "Invalid suffix",
    -134: "Suffix too long",
    -138: "Suffix not allowed",
    -141: "Invalid character data",
    -144: "Character data too long",
    -148: "Character data not allowed",
    -151: "Invalid string data",
    -158: "String data not allowed",
    -168: "Block data not allowed",
    -171: "Invalid expression",
    -178: "Expression data not allowed",
    -200: "Execution error",
    -213: "Init ignored",
    -221: "Settings conflict",
    -222: "Data out of range",
    -224: "Illegal parameter value",
    -230: "Data corrupt or stale",
    -350: "Queue overflow",
    -363: "Input buffer overrun",
    -440: "Query UNTERMINATED after indefinite response",
}


class RackError(Exception):
    """Anything this package raises on purpose."""


class SettingsError(RackError):
    """The settings are wrong; nothing was started."""


class RackUseError(RackError):
    """The rack was asked for something it does not have; nothing was changed."""


class ScpiError(RackError):
    """``code`` as in SCPI-1999 21.8, ``detail`` the device-dependent text behind the semicolon."""

    def __init__(self, code: int, detail: str = "") -> None:
        super().__init__(f"{code} {TEXTS.get(code, 'Device-specific error')}: {detail}")
        self.code = code
        self.detail = detail
