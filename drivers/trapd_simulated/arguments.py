"""The parameters of one unit, taken off one by one by the command that wants them (SCPI-1999 volume 1, clause 7)."""

from __future__ import annotations

import math

from trapd_simulated.errors import ScpiError
from trapd_simulated.syntax import ChannelList, Number, Parameter, Quoted, Word

_PREFIXES = {"G": 1e9, "MA": 1e6, "K": 1e3, "": 1.0, "M": 1e-3, "U": 1e-6, "N": 1e-9}


def scales(unit: str) -> dict[str, float]:
    """Factor of each suffix that ends in ``unit``; in front of HZ, M means mega (IEEE 488.2 table 7-1)."""
    if unit == "DBM":
        return {"DBM": 1.0}
    return {prefix + unit: (1e6 if (prefix, unit) == ("M", "HZ") else factor) for prefix, factor in _PREFIXES.items()}


class Arguments:
    """Each taker raises the SCPI error that fits what it found instead."""

    def __init__(self, parameters: tuple[Parameter, ...]) -> None:
        self._left = list(parameters)

    def take(self) -> Parameter:
        """The next parameter, not judged yet; -109 when there is none."""
        if not self._left:
            raise ScpiError(-109)
        return self._left.pop(0)

    def take_before_channels(self) -> tuple[Parameter, ...]:
        """The next parameter unless there is none or it is a channel list."""
        if not self._left or isinstance(self._left[0], ChannelList):
            return ()
        return (self.take(),)

    def done(self) -> None:
        if self._left:
            raise ScpiError(-108)

    def quantity(self, units: dict[str, float], low: float, high: float, default_unit: str) -> float:
        """A number, its suffix one of ``units``, or MINimum or MAXimum; -222 outside ``low`` .. ``high``."""
        found = self.take()
        if isinstance(found, Word):
            return self._extreme(found, low, high)
        if not isinstance(found, Number):
            raise _not_allowed(found)
        suffix = found.suffix or default_unit
        if suffix not in units:
            raise ScpiError(-131, found.suffix)
        value = found.value * units[suffix]
        slack = 1e-9 * max(abs(low), abs(high))  # what binary fractions may add to a decimal bound
        if not (math.isfinite(value) and low - slack <= value <= high + slack):
            raise ScpiError(-222, f"{value:g} is outside {low:g} .. {high:g}")
        return value

    def extreme(self, low: float, high: float) -> float | None:
        """MINimum or MAXimum of a query; None when the query has no parameter."""
        if not self._left:
            return None
        found = self.take()
        if not isinstance(found, Word):
            raise _not_allowed(found)
        return self._extreme(found, low, high)

    @staticmethod
    def _extreme(word: Word, low: float, high: float) -> float:
        if word.text in ("MIN", "MINIMUM"):
            return low
        if word.text in ("MAX", "MAXIMUM"):
            return high
        raise ScpiError(-141, word.text)

    def integer(self, low: int, high: int) -> int:
        found = self.take()
        if not isinstance(found, Number):
            raise _not_allowed(found)
        if found.suffix:
            raise ScpiError(-138, found.suffix)
        if not low <= found.value < high + 0.5:
            raise ScpiError(-222, f"{found.value:g} is outside {low} .. {high}")
        return math.floor(found.value + 0.5)

    def boolean(self) -> bool:
        """ON, OFF or a number; a number is rounded and is ON unless it is 0 (SCPI-1999 7.3)."""
        found = self.take()
        if isinstance(found, Word):
            if found.text not in ("ON", "OFF"):
                raise ScpiError(-141, found.text)
            return found.text == "ON"
        if not isinstance(found, Number):
            raise _not_allowed(found)
        if found.suffix:
            raise ScpiError(-138, found.suffix)
        return abs(found.value) >= 0.5

    def channels(self) -> tuple[int, ...]:
        found = self.take()
        if not isinstance(found, ChannelList):
            raise _not_allowed(found)
        return found.channels


def _not_allowed(found: Parameter) -> ScpiError:
    codes = {Number: -128, Word: -148, Quoted: -158, ChannelList: -178}
    return ScpiError(codes[type(found)])
