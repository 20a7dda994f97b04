"""A vacuum gauge: what it is said to read, with noise, until its sensor is off or over its range."""

from __future__ import annotations

import math
from typing import ClassVar

from trapd_simulated.clock import Clock
from trapd_simulated.dialect import number_reply, pressure_reply
from trapd_simulated.errors import RackUseError
from trapd_simulated.faults import FaultKind
from trapd_simulated.instrument import Call, Instrument, Query, Set
from trapd_simulated.settings import GaugeSettings

NOT_A_NUMBER = 9.91e37  # SCPI-1999 volume 1, 7.2.1.5


class Gauge(Instrument):
    """``READBACK_OFFSET`` is in mbar here."""

    settings: GaugeSettings
    PATTERNS: ClassVar = {"pressure": ("MEASure[:SCALar]:PRESsure",)}

    def __init__(self, name: str, settings: GaugeSettings, clock: Clock, seed: int) -> None:
        super().__init__(name, settings, clock, seed)
        self._pressure_mbar: float | None = settings.pressure_mbar

    def commands(self) -> dict[str, tuple[Set | None, Query | None]]:
        return {"pressure": (None, self._measure)}

    def set_pressure(self, pressure_mbar: float | None) -> None:
        """The true pressure from now on; None: the sensor is off."""
        if pressure_mbar is not None and not 0.0 < pressure_mbar < math.inf:
            raise RackUseError(f"pressure_mbar = {pressure_mbar!r}: expected a number above 0; nothing was changed")
        with self.lock:
            self._pressure_mbar = pressure_mbar

    def advance(self, now_s: float) -> None:
        """A gauge has no state of its own."""

    def reset(self, now_s: float) -> None:
        """Nothing can be set."""

    def trip(self, channel: int) -> None:
        raise RackUseError(f"{self.name} has no output; nothing tripped")

    def _measure(self, call: Call) -> str:
        true_mbar = self._pressure_mbar
        if true_mbar is None or true_mbar > self.settings.pressure_max_mbar:
            return number_reply(self.dialect, "MEAS:PRES", "", NOT_A_NUMBER)
        reading_mbar = true_mbar * (1.0 + self.settings.noise_relative * self.random.gauss(0.0, 1.0))
        offset = self._fault(FaultKind.READBACK_OFFSET)
        return pressure_reply(self.dialect, "MEAS:PRES", reading_mbar + (offset.value if offset else 0.0))
