"""The parameters of one unit, taken off one by one by the command that wants them (SCPI-1999 volume 1, clause 7)."""

from __future__ import annotations

import math

from trapd_simulated.errors import ScpiError
from trapd_simulated.syntax import Kind, Parameter

_PREFIXES = {"G": 1e9, "MA": 1e6, "K": 1e3, "": 1.0, "M": 1e-3, "U": 1e-6, "N": 1e-9}
_NOT_ALLOWED = {Kind.NUMBER: -128, Kind.WORD: -148, Kind.STRING: -158, Kind.CHANNELS: -178}


def scales(unit: str) -> dict[str, float]:
    """Factor of each suffix that ends in ``unit``; in front of HZ, M means mega (IEEE 488.2 table 7-1)."""
    if unit == "DBM":
        return {"DBM": 1.0}
    return {prefix + unit: (1e6 if (prefix, unit) == ("M", "HZ") else factor) for prefix, factor in _PREFIXES.items()}


class Arguments:
    """Each taker raises the SCPI error that fits what it found instead."""

    def __init__(self, parameters: tuple[Parameter, ...]) -> None:
        self._left = list(parameters)

    def take(self, *kinds: Kind) -> Parameter:
        """The next parameter, one of ``kinds`` (any when none is given); -109 when there is none."""
        if not self._left:
            raise ScpiError(-109)
        found = self._left.pop(0)
        if kinds and found.kind not in kinds:
            raise ScpiError(_NOT_ALLOWED[found.kind])
        return found

    def take_before_channels(self) -> tuple[Parameter, ...]:
        """The next parameter unless there is none or it is a channel list."""
        return (self.take(),) if self._left and self._left[0].kind is not Kind.CHANNELS else ()

    def done(self) -> None:
        if self._left:
            raise ScpiError(-108)

    def quantity(self, units: dict[str, float], low: float, high: float, default_unit: str) -> float:
        """A number, its suffix one of ``units``, or MINimum or MAXimum; -222 outside ``low`` .. ``high``."""
        found = self.take(Kind.NUMBER, Kind.WORD)
        if found.kind is Kind.WORD:
            return _extreme(found.text, low, high)
        suffix = found.text or default_unit
        if suffix not in units:
            raise ScpiError(-131, found.text)
        value = found.value * units[suffix]
        slack = 1e-9 * max(abs(low), abs(high))  # what binary fractions may add to a decimal bound
        if not (math.isfinite(value) and low - slack <= value <= high + slack):
            raise ScpiError(-222, f"{value:g} is outside {low:g} .. {high:g}")
        return value

    def extreme(self, low: float, high: float) -> float | None:
        """MINimum or MAXimum of a query; None when the query has no parameter."""
        return _extreme(self.take(Kind.WORD).text, low, high) if self._left else None

    def integer(self, low: int, high: int) -> int:
        value = self._bare(self.take(Kind.NUMBER))
        if not low <= value < high + 0.5:
            raise ScpiError(-222, f"{value:g} is outside {low} .. {high}")
        return math.floor(value + 0.5)

    def boolean(self) -> bool:
        """ON, OFF or a number; a number is rounded and is ON unless it is 0 (SCPI-1999 7.3)."""
        found = self.take(Kind.NUMBER, Kind.WORD)
        if found.kind is Kind.NUMBER:
            return abs(self._bare(found)) >= 0.5
        if found.text not in ("ON", "OFF"):
            raise ScpiError(-141, found.text)
        return found.text == "ON"

    def channels(self) -> tuple[int, ...]:
        return self.take(Kind.CHANNELS).channels

    @staticmethod
    def _bare(number: Parameter) -> float:
        if number.text:
            raise ScpiError(-138, number.text)
        return number.value


def _extreme(word: str, low: float, high: float) -> float:
    if word in ("MIN", "MINIMUM"):
        return low
    if word in ("MAX", "MAXIMUM"):
        return high
    raise ScpiError(-141, word)
