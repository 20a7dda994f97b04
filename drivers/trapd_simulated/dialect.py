"""Numbers between the wire and the terminals: units of the RF level, and how a reply is dressed."""

from __future__ import annotations

import math

from trapd_simulated.settings import Dialect

_PER_PEAK_VOLT = {"VPK": 1.0, "VPP": 2.0, "VRMS": math.sqrt(0.5)}
_LOAD_OHM = 50.0
_HERTZ = {"HZ": 1.0, "KHZ": 1e3, "MHZ": 1e6}
_PER_MBAR = {"MBAR": 1.0, "PA": 100.0, "TORR": 760.0 / 1013.25}
_DISPLAY = {
    **{unit.upper(): unit for unit in ("Hz", "kHz", "MHz", "Vpp", "Vrms", "dBm", "V", "s", "mbar", "Pa", "Torr")},
    "VPK": "V",
}


def level_to_volts(dialect: Dialect, displayed: float) -> float:
    """Real volts zero to peak at the terminals for a level as the instrument displays it."""
    if dialect.amplitude_unit == "DBM":
        return dialect.level_factor * math.sqrt(2.0 * _LOAD_OHM * 1e-3 * 10.0 ** (displayed / 10.0))  # P = V^2 / (2 R)
    return dialect.level_factor * displayed / _PER_PEAK_VOLT[dialect.amplitude_unit]


def volts_to_level(dialect: Dialect, volts: float) -> float:
    """The inverse of `level_to_volts`; ``volts`` above 0 with DBM."""
    volts /= dialect.level_factor
    if dialect.amplitude_unit == "DBM":
        return 10.0 * math.log10(volts**2 / (2.0 * _LOAD_OHM) / 1e-3)
    return volts * _PER_PEAK_VOLT[dialect.amplitude_unit]


def quantise(value: float, resolution: float) -> float:
    """The programmable value nearest to ``value``: a multiple of ``resolution``."""
    return round(value / resolution) * resolution


def least(value: float, resolution: float) -> float:
    """The smallest programmable value that is not below ``value``."""
    return math.ceil(value / resolution - 1e-9) * resolution


def greatest(value: float, resolution: float) -> float:
    """The largest programmable value that is not above ``value``."""
    return math.floor(value / resolution + 1e-9) * resolution


def number_reply(dialect: Dialect, header: str, unit: str, *values: float) -> str:
    """``values`` as the dialect writes them: bare, with their unit behind, or with ``header`` in front."""
    style = f".{dialect.digits}{'E' if dialect.numbers == 'NR3' else 'f'}"
    behind = f" {_DISPLAY[unit]}" if unit and dialect.replies == "unit" else ""
    return _with_header(dialect, header, [f"{value + 0.0:{style}}{behind}" for value in values])


def frequency_reply(dialect: Dialect, header: str, frequency_hz: float) -> str:
    unit = dialect.frequency_unit
    return number_reply(dialect, header, unit, frequency_hz / _HERTZ[unit])


def pressure_reply(dialect: Dialect, header: str, pressure_mbar: float) -> str:
    unit = dialect.pressure_unit
    return number_reply(dialect, header, unit, pressure_mbar * _PER_MBAR[unit])


def integer_reply(dialect: Dialect, header: str, value: int) -> str:
    return _with_header(dialect, header, [str(value)])


def state_reply(dialect: Dialect, header: str, *states: bool) -> str:
    words = ("OFF", "ON") if dialect.output_words else ("0", "1")
    return _with_header(dialect, header, [words[state] for state in states])


def _with_header(dialect: Dialect, header: str, parts: list[str]) -> str:
    text = ",".join(parts)
    return f"{header} {text}" if dialect.replies == "header" else text
