"""A synthesizer that speaks SCPI."""

from __future__ import annotations

from trapd_drivers.dialect import Dialect
from trapd_drivers.errors import InstrumentRefused
from trapd_drivers.interfaces import RfSource
from trapd_drivers.scpi.instrument import ScpiInstrument
from trapd_drivers.scpi.session import Session

_FREQUENCY, _LEVEL, _BURST = ("frequency", 0), ("level", 0), ("burst", 0)


class ScpiRfSource(ScpiInstrument, RfSource):
    """See `RfSource` for the contract."""

    KIND = "rf_source"

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        self.frequency, self.level = self._scales[_FREQUENCY], self._scales[_LEVEL]
        self.burst = self._scales.get(_BURST)

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

    def start_burst(self, duration_s: float) -> None:
        if (course := self._dialect.course) is None:
            super().start_burst(duration_s)
            return
        duration = self._encoded(_BURST, "duration_s", duration_s)
        with self._session.call():
            self._told.pop(0, None)
            try:
                self._start(course, _BURST, duration)
            except InstrumentRefused as refused:
                if refused.entries:  # it may be on, and what was refused may be the end of that
                    self._switch_now(False, 0)
                raise

    def read_burst(self) -> bool:
        if self._dialect.course is None:
            return False
        with self._session.call():
            return self._session.read_state(self._dialect.course.running)
