"""A synthesizer that speaks SCPI."""

from __future__ import annotations

from trapd_drivers.interfaces import RfSource
from trapd_drivers.profile import Dialect
from trapd_drivers.scpi.instrument import ScpiInstrument
from trapd_drivers.scpi.session import Session

_FREQUENCY, _LEVEL = ("frequency", 0), ("level", 0)


class ScpiRfSource(ScpiInstrument, RfSource):
    """See `RfSource` for the contract."""

    KIND = "rf_source"

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        self.frequency, self.level = self._scales[_FREQUENCY], self._scales[_LEVEL]

    def set_frequency_hz(self, frequency_hz: float) -> None:
        self._set(_FREQUENCY, "frequency_hz", frequency_hz)

    def read_frequency_hz(self) -> float:
        return self._read(_FREQUENCY)

    def set_level_v(self, level_v: float) -> None:
        self._set(_LEVEL, "level_v", level_v)

    def read_level_v(self) -> float:
        return self._read(_LEVEL)

    def measure_level_v(self) -> float | None:
        return self._measure(_LEVEL)

    def set_output(self, on: bool) -> None:
        self._switch(on, 0)

    def read_output(self) -> bool:
        return self._is_on(0)
