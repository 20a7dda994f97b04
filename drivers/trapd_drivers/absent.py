"""An instrument that does not answer yet stands in its place and opens it at the first call that succeeds.

So a daemon whose supply is dead still owns the synthesizer, and `off` still works. What the profile states of the scales
is known without the instrument; a limit that only the instrument knows is infinite until it answers.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Generic, TypeVar

from trapd_drivers.errors import Malformed, Unreachable
from trapd_drivers.interfaces import DcSupply, Identity, Instrument, RfSource, Scale, Status
from trapd_drivers.registry import DriverClass, driver_class

RealT = TypeVar("RealT", bound=Instrument)
Scales = Mapping[tuple[str, int], Scale]


def open_or_absent(name: str, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Instrument:
    """As `registry.open_instrument`, but where nobody answers, a stand-in that opens the instrument later.

    So too where what answers makes no sense: it may be the instrument in trouble. `ProfileError` as there.
    """
    driver = driver_class(name)

    def open_() -> Instrument:
        return driver.open(resource, profile=profile, timeout_s=timeout_s)

    try:
        return open_()
    except (Unreachable, Malformed):
        return _absent(driver, resource, open_, driver.scales(profile))


def _absent(driver: DriverClass, resource: str, open_: Callable[[], Instrument], scales: Scales) -> Instrument:
    assert isinstance(driver, type)
    if issubclass(driver, RfSource):
        return AbsentRfSource(resource, open_, scales)
    if issubclass(driver, DcSupply):
        return AbsentDcSupply(resource, open_, scales)
    raise Unreachable(f"{resource}: does not answer, and nothing can stand in for {driver.__name__}")


class _Absent(Generic[RealT]):
    """The part that all kinds share: one real instrument, opened when it can be."""

    def __init__(self, resource: str, open_: Callable[[], Instrument], scales: Scales) -> None:
        self.resource = resource
        self._open = open_
        self._scales = scales
        self._opened: RealT | None = None

    def _real(self) -> RealT:
        if self._opened is None:
            self._opened = self._open()  # type: ignore[assignment]
        assert self._opened is not None
        return self._opened

    def read_identity(self) -> Identity:
        return self._real().read_identity()

    def read_status(self) -> Status:
        return self._real().read_status()

    def interrupt(self) -> None:
        if self._opened is not None:
            self._opened.interrupt()

    def close(self) -> None:
        if self._opened is not None:
            self._opened.close()


class AbsentRfSource(_Absent[RfSource], RfSource):
    """See `RfSource`; every call first tries to reach the instrument."""

    @property
    def frequency(self) -> Scale:  # type: ignore[override]
        return self._scales["frequency", 0] if self._opened is None else self._opened.frequency

    @property
    def level(self) -> Scale:  # type: ignore[override]
        return self._scales["level", 0] if self._opened is None else self._opened.level

    def set_frequency_hz(self, frequency_hz: float) -> None:
        self._real().set_frequency_hz(frequency_hz)

    def read_frequency_hz(self) -> float:
        return self._real().read_frequency_hz()

    def set_level_v(self, level_v: float) -> None:
        self._real().set_level_v(level_v)

    def read_level_v(self) -> float:
        return self._real().read_level_v()

    def measure_level_v(self) -> float | None:
        return self._real().measure_level_v()

    def set_output(self, on: bool) -> None:
        self._real().set_output(on)

    def read_output(self) -> bool:
        return self._real().read_output()


class AbsentDcSupply(_Absent[DcSupply], DcSupply):
    """See `DcSupply`; every call first tries to reach the instrument."""

    @property
    def channels(self) -> tuple[int, ...]:  # type: ignore[override]
        return tuple(channel for _, channel in self._scales)

    def voltage(self, channel: int) -> Scale:
        return self._scales["voltage", channel] if self._opened is None else self._opened.voltage(channel)

    def set_voltage_v(self, channel: int, voltage_v: float) -> None:
        self._real().set_voltage_v(channel, voltage_v)

    def read_voltage_v(self, channel: int) -> float:
        return self._real().read_voltage_v(channel)

    def measure_voltage_v(self, channel: int) -> float | None:
        return self._real().measure_voltage_v(channel)

    def set_output(self, channel: int, on: bool) -> None:
        self._real().set_output(channel, on)

    def read_output(self, channel: int) -> bool:
        return self._real().read_output(channel)
