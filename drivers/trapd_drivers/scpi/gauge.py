"""A gauge that speaks SCPI."""

from __future__ import annotations

from trapd_drivers.dialect import Dialect
from trapd_drivers.interfaces import Gauge
from trapd_drivers.scpi.instrument import ScpiInstrument
from trapd_drivers.scpi.session import Session


class ScpiGauge(ScpiInstrument, Gauge):
    """See `Gauge` for the contract."""

    KIND = "gauge"

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        assert dialect.reading is not None, "every profile's [gauge] has a reading"
        self._reading = dialect.reading
        self.unit = dialect.reading.unit.si

    def read_value(self) -> float:
        with self._session.call():
            return self._session.read_gauge(self._reading)
