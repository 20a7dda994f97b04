"""A multi-channel DC supply that speaks SCPI."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Self

from trapd_drivers.errors import OutOfRange
from trapd_drivers.interfaces import DcSupply, Identity, Scale, Status
from trapd_drivers.profile import DcSupplyDialect, load_profile
from trapd_drivers.quantity import Quantity
from trapd_drivers.scpi.output import Output
from trapd_drivers.scpi.ranges import require_inside
from trapd_drivers.scpi.session import Session


class ScpiDcSupply(DcSupply):
    """See `DcSupply` for the contract and `profiles/plain.toml` for what a profile can say."""

    def __init__(self, session: Session, dialect: DcSupplyDialect) -> None:
        """Asks for the limits that the profile does not state, and changes nothing."""
        self.resource = session.resource
        self.settle_s = dialect.settle_s
        self.channels = tuple(dialect.voltages)
        self._session = session
        self._dialect = dialect
        self._output = Output(session, dialect.output)
        with session.call():
            session.read_identity()
            self._scales = {channel: self._scale(channel, one) for channel, one in dialect.voltages.items()}

    @classmethod
    def open(cls, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Self:
        """Connect to ``resource`` (``TCPIP::HOST::PORT::SOCKET``) in the dialect of ``profile``."""
        read = load_profile(profile)
        return cls(Session(resource, read, timeout_s), read.require_dc_supply())

    @classmethod
    def scales(cls, profile: str) -> Mapping[tuple[str, int], Scale]:
        """The scale of ("voltage", channel) for each channel as the profile states it, without an instrument.

        A limit that only the instrument knows is infinite.
        """
        dialect = load_profile(profile).require_dc_supply()
        return {("voltage", channel): quantity.scale() for channel, quantity in dialect.voltages.items()}

    def voltage(self, channel: int) -> Scale:
        self._require(channel)
        return self._scales[channel]

    def read_identity(self) -> Identity:
        with self._session.call():
            return self._session.read_identity()

    def read_status(self) -> Status:
        trip = self._dialect.trip
        with self._session.call():
            tripped = (
                tuple(channel for channel in self.channels if self._session.read_trip(trip, channel)) if trip else ()
            )
            events = self._session.take_events()
        if events.power_on:
            self._output.forget()
        if events.tripped and not tripped:
            tripped = self.channels  # the entry does not say which
        return Status(power_on=events.power_on, errors=tuple(events.errors), tripped=tripped)

    def set_voltage_v(self, channel: int, voltage_v: float) -> None:
        scale = self.voltage(channel)
        require_inside(self.resource, f"channel {channel} voltage_v", voltage_v, scale)
        quantity = self._dialect.voltages[channel]
        with self._session.call():
            self._session.command(quantity.set, value=quantity.encode(voltage_v, scale), channel=channel)

    def read_voltage_v(self, channel: int) -> float:
        self._require(channel)
        with self._session.call():
            return self._session.read_number(self._dialect.voltages[channel].programmed, channel=channel)

    def measure_voltage_v(self, channel: int) -> float | None:
        self._require(channel)
        measured = self._dialect.voltages[channel].measured
        if measured is None:
            return None
        with self._session.call():
            return self._session.read_number(measured, channel=channel)

    def set_output(self, channel: int, on: bool) -> None:
        self._require(channel)
        self._output.set(on, channel)

    def read_output(self, channel: int) -> bool:
        self._require(channel)
        return self._output.read(channel)

    def interrupt(self) -> None:
        self._session.interrupt()

    def close(self) -> None:
        self._session.close()

    def _require(self, channel: int) -> None:
        if channel not in self.channels:
            raise OutOfRange(f"{self.resource}: channel {channel} is none of {self.channels}; nothing was sent")

    def _scale(self, channel: int, quantity: Quantity) -> Scale:
        return quantity.scale(
            lambda limit: self._session.read_number(quantity.programmed, query=limit, channel=channel)
        )
