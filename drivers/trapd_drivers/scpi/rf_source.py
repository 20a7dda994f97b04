"""A synthesizer that speaks SCPI."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Self

from trapd_drivers.interfaces import Identity, RfSource, Scale, Status
from trapd_drivers.profile import RfSourceDialect, load_profile
from trapd_drivers.quantity import Quantity
from trapd_drivers.scpi.output import Output
from trapd_drivers.scpi.ranges import require_inside
from trapd_drivers.scpi.session import Session


class ScpiRfSource(RfSource):
    """See `RfSource` for the contract and `profiles/plain.toml` for what a profile can say."""

    def __init__(self, session: Session, dialect: RfSourceDialect) -> None:
        """Asks for the limits that the profile does not state, and changes nothing."""
        self.resource = session.resource
        self.settle_s = dialect.settle_s
        self._session = session
        self._dialect = dialect
        self._output = Output(session, dialect.output)
        with session.call():
            session.read_identity()
            self.frequency = self._scale(dialect.frequency)
            self.level = self._scale(dialect.level)

    @classmethod
    def open(cls, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Self:
        """Connect to ``resource`` (``TCPIP::HOST::PORT::SOCKET``) in the dialect of ``profile``."""
        read = load_profile(profile)
        return cls(Session(resource, read, timeout_s), read.require_rf_source())

    @classmethod
    def scales(cls, profile: str) -> Mapping[tuple[str, int], Scale]:
        """The scales of ("frequency", 0) and ("level", 0) as the profile states them, without an instrument.

        A limit that only the instrument knows is infinite.
        """
        dialect = load_profile(profile).require_rf_source()
        return {("frequency", 0): dialect.frequency.scale(), ("level", 0): dialect.level.scale()}

    def read_identity(self) -> Identity:
        with self._session.call():
            return self._session.read_identity()

    def read_status(self) -> Status:
        with self._session.call():
            trip = self._dialect.trip
            tripped = trip is not None and self._session.read_trip(trip)
            events = self._session.take_events()
        if events.power_on:
            self._output.forget()
        return Status(
            power_on=events.power_on,
            errors=tuple(events.errors),
            tripped=(0,) if tripped or events.tripped else (),
        )

    def set_frequency_hz(self, frequency_hz: float) -> None:
        self._set(self._dialect.frequency, "frequency_hz", frequency_hz, self.frequency)

    def read_frequency_hz(self) -> float:
        with self._session.call():
            return self._session.read_number(self._dialect.frequency.programmed)

    def set_level_v(self, level_v: float) -> None:
        self._set(self._dialect.level, "level_v", level_v, self.level)

    def read_level_v(self) -> float:
        with self._session.call():
            return self._session.read_number(self._dialect.level.programmed)

    def measure_level_v(self) -> float | None:
        measured = self._dialect.level.measured
        if measured is None:
            return None
        with self._session.call():
            return self._session.read_number(measured)

    def set_output(self, on: bool) -> None:
        self._output.set(on)

    def read_output(self) -> bool:
        return self._output.read()

    def interrupt(self) -> None:
        self._session.interrupt()

    def close(self) -> None:
        self._session.close()

    def _scale(self, quantity: Quantity) -> Scale:
        return quantity.scale(lambda limit: self._session.read_number(quantity.programmed, query=limit))

    def _set(self, quantity: Quantity, name: str, value: float, scale: Scale) -> None:
        require_inside(self.resource, name, value, scale)
        with self._session.call():
            self._session.command(quantity.set, value=quantity.encode(value, scale))
