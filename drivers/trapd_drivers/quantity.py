"""What a profile says of one quantity: its unit on the wire, its commands, its range, its resolution, its accuracy."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal

from trapd_drivers.form import Form
from trapd_drivers.interfaces import Scale

FREQUENCY_UNITS = {"Hz": 1.0, "kHz": 1e3, "MHz": 1e6, "GHz": 1e9}
DC_UNITS = {"V": 1.0, "mV": 1e-3}
LEVEL_UNITS = {"Vpk": 1.0, "Vpp": 0.5, "Vrms": math.sqrt(2.0), "dBm": 0.0}  # V zero to peak of a sine, for each
TIME_UNITS = {"s": 1.0, "ms": 1e-3, "us": 1e-6}
_GAUGE_UNITS = {
    "Pa": {"Pa": 1.0, "hPa": 100.0, "mbar": 100.0, "Torr": 101325.0 / 760.0},
    "K": {"K": 1.0, "degC": 1.0},
    "W": {"W": 1.0, "mW": 1e-3, "uW": 1e-6},
    "A": {"A": 1.0, "mA": 1e-3},
    "V": DC_UNITS,
}
GAUGE_UNITS = {name: factor for units in _GAUGE_UNITS.values() for name, factor in units.items()}
COUNTS = "counts"
_SI_PER_UNIT = FREQUENCY_UNITS | DC_UNITS | LEVEL_UNITS | TIME_UNITS | GAUGE_UNITS | {COUNTS: 1.0}
_SI_AT_ZERO = {"degC": 273.15}


@dataclass(frozen=True, kw_only=True)
class Unit:
    """A number on the wire and the SI value (volts zero to peak for a sine) at the instrument's real load.

    ``load_factor``: real volts for each volt displayed, 2 for an instrument that displays what 50 ohm would get and
    feeds a high impedance. ``impedance_ohm`` matters to dBm only: P = (V_peak / sqrt 2)^2 / R.
    """

    name: str
    load_factor: float = 1.0
    impedance_ohm: float = 50.0

    @property
    def logarithmic(self) -> bool:
        return self.name == "dBm"

    @property
    def si(self) -> str:
        """The name of the SI unit that a gauge's numbers become."""
        return next(si for si, units in _GAUGE_UNITS.items() if self.name in units)

    def to_si(self, number: float) -> float:
        """Raises ValueError for what only infinity could hold, and for so few dBm that they would be 0 V."""
        if self.logarithmic:
            value = self.load_factor * math.sqrt(2.0 * self.impedance_ohm * 1e-3) * _ratio(number)
        else:
            value = self.load_factor * _SI_PER_UNIT[self.name] * number + _SI_AT_ZERO.get(self.name, 0.0)
        if not math.isfinite(value) or (self.logarithmic and value == 0.0):
            raise ValueError(f"{number:g} {self.name} is beyond what can be computed with")
        return value

    def from_si(self, value: float) -> float:
        """The number for ``value``; minus infinity for 0 V in dBm."""
        if not self.logarithmic:
            return (value - _SI_AT_ZERO.get(self.name, 0.0)) / (self.load_factor * _SI_PER_UNIT[self.name])
        relative = value / (self.load_factor * math.sqrt(2.0 * self.impedance_ohm * 1e-3))
        return 20.0 * math.log10(relative) if relative > 0.0 else -math.inf


@dataclass(frozen=True, kw_only=True)
class DecibelScale(Scale):
    """Programmable values evenly spaced in dB. ``resolution`` is the widest step, at the top (at 1 V when not known)."""

    unit: Unit
    step_db: float

    def quantise(self, value: float) -> float:
        number = self.unit.from_si(value)
        return self.unit.to_si(round(number / self.step_db) * self.step_db) if math.isfinite(number) else self.low


@dataclass(frozen=True, kw_only=True)
class Reading:
    """A query, the form of its reply and the unit of the number in it."""

    query: Form
    reply: Form
    unit: Unit


@dataclass(frozen=True, kw_only=True)
class Quantity:
    """One settable quantity. ``low``, ``high``, ``resolution``, ``boundaries`` and ``accuracy_absolute`` are numbers
    in ``unit``, as in the instrument's manual; a `Form` for ``low`` or ``high`` is a query that tells it.
    """

    unit: Unit
    set: Form
    programmed: Reading
    measured: Reading | None
    low: float | Form
    high: float | Form
    resolution: float
    accuracy_absolute: float
    accuracy_relative: float
    boundaries: tuple[float, ...] = ()

    def scale(self, ask: Callable[[Form], float] | None = None) -> Scale:
        """The scale in SI. ``ask`` gets the SI value that a limit's query tells; without it such a limit is infinite.

        In dBm the answer is a `DecibelScale`, and an accuracy in dB becomes a relative one.
        """
        low = self._limit(self.low, ask, -math.inf)
        high = self._limit(self.high, ask, math.inf)
        boundaries = tuple(map(self.unit.to_si, self.boundaries))
        if not self.unit.logarithmic:
            return Scale(
                low=low,
                high=high,
                resolution=self.unit.to_si(self.resolution),
                accuracy_absolute=self.unit.to_si(self.accuracy_absolute),
                accuracy_relative=self.accuracy_relative,
                boundaries=boundaries,
            )
        return DecibelScale(
            low=max(low, 0.0),
            high=high,
            resolution=(high if math.isfinite(high) else 1.0) * (_ratio(self.resolution) - 1.0),
            accuracy_absolute=0.0,
            accuracy_relative=self.accuracy_relative + _ratio(self.accuracy_absolute) - 1.0,
            boundaries=boundaries,
            unit=self.unit,
            step_db=self.resolution,
        )

    def encode(self, value: float, scale: Scale) -> str:
        """``value`` (SI, inside ``scale``) as the nearest programmable number, with the digits the resolution has."""
        step = Decimal(repr(self.resolution))
        first = math.ceil(self._steps(scale.low) - 1e-6)
        last = math.floor(self._steps(scale.high) + 1e-6)
        steps = min(max(round(self._steps(value)), first), last)
        return f"{steps * step + 0:f}"

    def _steps(self, value: float) -> float:
        return self.unit.from_si(value) / self.resolution

    def _limit(self, limit: float | Form, ask: Callable[[Form], float] | None, unknown: float) -> float:
        if isinstance(limit, Form):
            return ask(limit) if ask is not None else unknown
        return self.unit.to_si(limit)


def _ratio(decibel: float) -> float:
    """Infinity for more than a number holds."""
    try:
        return math.pow(10.0, decibel / 20.0)
    except OverflowError:
        return math.inf
