"""What the SCPI instruments share: opening, status, values within their scale, courses, and output switches."""

from __future__ import annotations

from collections.abc import Mapping
from typing import ClassVar, Self

from trapd_drivers.dialect import Course, Dialect, Key
from trapd_drivers.errors import OutOfRange
from trapd_drivers.interfaces import Identity, Instrument, Scale, Status
from trapd_drivers.profile import load_profile
from trapd_drivers.quantity import Quantity
from trapd_drivers.scpi.session import Session


class ScpiInstrument(Instrument):
    """An instrument in the dialect of a profile; `profiles/plain.toml` shows what a profile can say.

    An output that cannot be asked is believed to be in the state it was last told, and on before that and after it was
    switched on: on is the answer that makes nobody careless.
    """

    KIND: ClassVar[str]  # the profile's table

    def __init__(self, session: Session, dialect: Dialect) -> None:
        """Asks for the limits that the profile does not state, and changes nothing."""
        self.resource = session.resource
        self.settle_s = dialect.settle_s
        self._session = session
        self._dialect = dialect
        self._told: dict[int, bool] = {}
        with session.call():
            session.read_identity()
            self._scales = {key: self._scale(key[1], quantity) for key, quantity in dialect.quantities.items()}

    @classmethod
    def open(cls, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Self:
        """Connect to ``resource`` (``TCPIP::HOST::PORT::SOCKET``) in the dialect of ``profile``."""
        read = load_profile(profile)
        return cls(Session(resource, read, timeout_s), read.dialect(cls.KIND))

    @classmethod
    def scales(cls, profile: str) -> Mapping[Key, Scale]:
        """Scales by (quantity, channel) as the profile states them, see `registry.DriverClass`."""
        return load_profile(profile).dialect(cls.KIND).scales()

    def read_identity(self) -> Identity:
        with self._session.call():
            return self._session.read_identity()

    def read_status(self) -> Status:
        trip, channels = self._dialect.trip, self._dialect.channels
        with self._session.call():
            tripped = tuple(one for one in channels if self._session.read_state(trip, one)) if trip else ()
            events = self._session.take_events()
        if events.power_on:
            self._told.clear()
        if events.tripped and not tripped:
            tripped = channels  # the entry does not say which
        return Status(power_on=events.power_on, errors=tuple(events.errors), tripped=tripped)

    def interrupt(self) -> None:
        self._session.interrupt()

    def close(self) -> None:
        self._session.close()

    def _set(self, key: Key, name: str, value: float) -> None:
        encoded = self._encoded(key, name, value)
        with self._session.call():
            self._session.command(self._dialect.quantities[key].set, value=encoded, channel=key[1])

    def _encoded(self, key: Key, name: str, value: float) -> str:
        """``value`` as it is sent; `OutOfRange` outside the scale."""
        scale, quantity = self._scales[key], self._dialect.quantities[key]
        slack = 1e-6 * scale.resolution  # a limit that went through another unit is still the limit
        if not scale.low - slack <= value <= scale.high + slack:  # nor is not a number inside
            raise OutOfRange(
                f"{self.resource}: {name} = {value:.10g} is outside {scale.low:.10g} .. {scale.high:.10g}; "
                "nothing was sent"
            )
        return quantity.encode(value, scale)

    def _start(self, course: Course, key: Key, encoded: str) -> None:
        """Its time, checked, and only then what starts it. Only inside ``with self._session.call():``."""
        self._session.command(self._dialect.quantities[key].set, value=encoded)
        self._session.command(course.start)

    def _read(self, key: Key) -> float:
        with self._session.call():
            return self._session.read_number(self._dialect.quantities[key].programmed, channel=key[1])

    def _measure(self, key: Key) -> float | None:
        measured = self._dialect.quantities[key].measured
        if measured is None:
            return None
        with self._session.call():
            return self._session.read_number(measured, channel=key[1])

    def _switch(self, on: bool, channel: int) -> None:
        """Always sent, whatever the state is believed to be; off even to an instrument that has lost its settings."""
        with self._session.call():
            if on and self._dialect.course is not None and self._dialect.course.end is not None:
                self._session.command(self._dialect.course.end)
            self._switch_now(on, channel)

    def _switch_now(self, on: bool, channel: int) -> None:
        assert self._dialect.output is not None, "only an instrument with outputs is told to switch one"
        self._told.pop(channel, None)
        form = self._dialect.output.on if on else self._dialect.output.off
        self._session.command(form, channel=channel, always=not on)
        self._told[channel] = on

    def _is_on(self, channel: int) -> bool:
        if self._dialect.output is None or self._dialect.output.state is None:
            return self._told.get(channel, True)
        with self._session.call():
            return self._session.read_state(self._dialect.output.state, channel)

    def _scale(self, channel: int, quantity: Quantity) -> Scale:
        return quantity.scale(
            lambda limit: self._session.read_number(quantity.programmed, query=limit, channel=channel)
        )
