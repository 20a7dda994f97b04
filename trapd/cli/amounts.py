"""Numbers for people: the unit beside them, few digits, and values that can be pasted back."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from trapd.setpoint import AMPLITUDE, FREQUENCY, unit_of

_PASTED_DIGITS = 9
_HZ = ((1e9, "GHz"), (1e6, "MHz"), (1e3, "kHz"))


def amount(value: float | None, unit: str, digits: int = 6) -> str:
    """``2.1551 MHz``, ``260 V``, ``8.18 eV``; ``-`` for None."""
    if value is None:
        return "-"
    if unit == "Hz":
        for scale, name in _HZ:
            if abs(value) >= scale:
                return f"{number(value / scale, digits)} {name}"
    return f"{number(value, digits)} {unit}".removesuffix(" 1")


def number(value: float, digits: int = 6) -> str:
    """``digits`` significant digits, and never a minus sign before zero."""
    return f"{value + 0.0:.{digits}g}"


def with_uncertainty(value_hz: float, uncertainty_hz: float) -> str:
    """``2.155021 MHz ± 48 Hz``: the uncertainty with two digits, the value as far as that says something."""
    if not uncertainty_hz > 0:
        return amount(value_hz, "Hz", 9)
    place = math.floor(math.log10(float(f"{uncertainty_hz:.1e}"))) - 1
    scale, unit = _scale_of(value_hz)
    decimals = max(0, round(math.log10(scale)) - place)
    return f"{value_hz / scale:.{decimals}f} {unit} ± {hertz(uncertainty_hz, 2)}"


def hertz(value_hz: float, digits: int = 3, *, signed: bool = False) -> str:
    """``48 Hz``, ``-1.23 kHz``, signed ``+21 Hz``; never with an exponent."""
    short = float(f"{value_hz:.{digits}g}")
    scale, unit = _scale_of(short)
    decimals = max(0, digits - 1 - math.floor(math.log10(abs(short) / scale))) if short else 0
    text = f"{short / scale + 0.0:{'+' if signed else ''}.{decimals}f}"
    return f"{text.rstrip('0').rstrip('.') if '.' in text else text} {unit}"


def millivolts(volts: float) -> str:
    """``0.5 mV``: levels of a tickle."""
    return amount(volts * 1e3, "mV", 4)


def rate(value_per_s: float) -> str:
    """``12 345 /s``."""
    return f"{value_per_s:,.0f} /s".replace(",", " ")


def _scale_of(value_hz: float) -> tuple[float, str]:
    return next(((scale, name) for scale, name in _HZ if abs(value_hz) >= scale), (1.0, "Hz"))


def value_of(setpoint: str, value: float | None) -> str:
    """A value of a setpoint; the drive frequency shows every Hz."""
    unit = unit_of(setpoint)
    return amount(value, unit, _digits_of(unit))


def ends_of(setpoint: str, interval: Mapping[str, Any]) -> tuple[str, str]:
    """Low and high end of an interval, shortened inwards, so that what is read can be asked for."""
    unit = unit_of(setpoint)
    digits = _digits_of(unit)
    low, high = (_shortened(interval[end], digits, up=end == "low") for end in ("low", "high"))
    return amount(low, unit, digits), amount(high, unit, digits)


def assignment(setpoint: str, value: float, asked: float | None = None) -> str:
    """``endcaps=120V``, to paste on a command line. Shortened away from ``asked``, which lay outside."""
    short = value if asked is None or asked == value else _shortened(value, _PASTED_DIGITS, up=asked < value)
    unit = unit_of(setpoint)
    if unit == "Hz":
        for scale, name in _HZ[1:]:
            if abs(short) >= scale:
                return f"{setpoint}={number(short / scale, 12)}{name}"
    return f"{setpoint}={number(short, 12)}{unit}"


def in_order(values: Mapping[str, float]) -> dict[str, float]:
    """The drive first, then the electrodes as they come."""
    drive = {name: values[name] for name in (FREQUENCY, AMPLITUDE) if name in values}
    return {**drive, **values}


def duration(seconds: float) -> str:
    """``3 ms``, ``0.8 s``, ``42 s``, ``3 min 20 s``."""
    if 0 < seconds < 0.1:
        return f"{seconds * 1e3:.3g} ms"
    if seconds < 60:
        return f"{seconds:.2g} s" if seconds < 10 else f"{seconds:.0f} s"
    minutes, rest = divmod(round(seconds), 60)
    return f"{minutes} min {rest} s" if rest else f"{minutes} min"


def _digits_of(unit: str) -> int:
    return 9 if unit == "Hz" else 6


def _shortened(value: float, digits: int, *, up: bool) -> float:
    """Rounded to ``digits`` significant ones, up or down; a value that has no more than these stays."""
    if value == 0:
        return value
    nearest = float(f"{value:.{digits}g}")
    if math.isclose(nearest, value, rel_tol=1e-13):
        return nearest
    step = 10.0 ** (math.floor(math.log10(abs(value))) - digits + 1)
    return (math.ceil if up else math.floor)(value / step) * step
