"""A multi-channel DC supply that speaks SCPI."""

from __future__ import annotations

from trapd_drivers.dialect import Dialect, Key
from trapd_drivers.errors import OutOfRange
from trapd_drivers.interfaces import DcSupply, Scale
from trapd_drivers.scpi.instrument import ScpiInstrument
from trapd_drivers.scpi.session import Session


class ScpiDcSupply(ScpiInstrument, DcSupply):
    """See `DcSupply` for the contract."""

    KIND = "dc_supply"

    def __init__(self, session: Session, dialect: Dialect) -> None:
        super().__init__(session, dialect)
        self.channels = dialect.channels

    def voltage(self, channel: int) -> Scale:
        return self._scales[self._key(channel)]

    def set_voltage_v(self, channel: int, voltage_v: float) -> None:
        self._set(self._key(channel), f"channel {channel} voltage_v", voltage_v)

    def read_voltage_v(self, channel: int) -> float:
        return self._read(self._key(channel))

    def measure_voltage_v(self, channel: int) -> float | None:
        return self._measure(self._key(channel))

    def set_output(self, channel: int, on: bool) -> None:
        self._require(channel)
        self._switch(on, channel)

    def read_output(self, channel: int) -> bool:
        self._require(channel)
        return self._is_on(channel)

    def _key(self, channel: int) -> Key:
        self._require(channel)
        return ("voltage", channel)

    def _require(self, channel: int) -> None:
        if channel not in self.channels:
            raise OutOfRange(f"{self.resource}: channel {channel} is none of {self.channels}; nothing was sent")
