"""An instrument that does not answer yet stands in its place and opens it at the first call that succeeds.

So a daemon whose supply is dead still owns the synthesizer, and `off` still works. What the profile states of the scales
is known without the instrument; a limit that only the instrument knows is infinite until it answers. An attempt to open
it cannot be interrupted; it ends by itself within twice the timeout.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, cast

from trapd_drivers.errors import Malformed, OutOfRange, Unreachable
from trapd_drivers.interfaces import DcSupply, Gauge, Instrument, PhotonCounter, RfSource, Scale
from trapd_drivers.registry import driver_class

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
        scales, kind = driver.scales(profile), cast(type[Instrument], driver)
        for interface, stand_in in _STAND_INS.items():
            if issubclass(kind, interface):
                return stand_in(resource, open_, scales)
        raise  # nothing can stand in for it


def _real(method: str) -> Any:
    """The real instrument's method of that name, opened for it when need be."""

    def call(self: _Absent, *arguments: Any) -> Any:
        return getattr(self._take_up(), method)(*arguments)

    return call


class _Absent(Instrument):
    """The part that all kinds share: one real instrument, opened when it can be."""

    def __init__(self, resource: str, open_: Callable[[], Instrument], scales: Scales) -> None:
        self.resource = resource
        self._open = open_
        self._scales = scales
        self._opened: Any = None

    def _take_up(self) -> Any:
        if self._opened is None:
            self._opened = self._open()
        return self._opened

    read_identity = _real("read_identity")
    read_status = _real("read_status")

    def interrupt(self) -> None:
        if self._opened is not None:
            self._opened.interrupt()

    def close(self) -> None:
        if self._opened is not None:
            self._opened.close()


class AbsentRfSource(_Absent, RfSource):
    """See `RfSource`; every call first tries to reach the instrument."""

    @property
    def frequency(self) -> Scale:  # type: ignore[override]
        return self._scales["frequency", 0] if self._opened is None else self._opened.frequency

    @property
    def level(self) -> Scale:  # type: ignore[override]
        return self._scales["level", 0] if self._opened is None else self._opened.level

    @property
    def burst(self) -> Scale | None:  # type: ignore[override]
        return self._scales.get(("burst", 0)) if self._opened is None else self._opened.burst

    set_frequency_hz = _real("set_frequency_hz")
    read_frequency_hz = _real("read_frequency_hz")
    set_level_v = _real("set_level_v")
    read_level_v = _real("read_level_v")
    measure_level_v = _real("measure_level_v")
    set_output = _real("set_output")
    read_output = _real("read_output")
    start_burst = _real("start_burst")
    read_burst = _real("read_burst")


class AbsentDcSupply(_Absent, DcSupply):
    """See `DcSupply`; every call first tries to reach the instrument."""

    @property
    def channels(self) -> tuple[int, ...]:  # type: ignore[override]
        return tuple(channel for _, channel in self._scales)

    def voltage(self, channel: int) -> Scale:
        if channel not in self.channels:
            raise OutOfRange(f"{self.resource}: channel {channel} is none of {self.channels}; nothing was sent")
        return self._scales["voltage", channel] if self._opened is None else self._opened.voltage(channel)

    set_voltage_v = _real("set_voltage_v")
    read_voltage_v = _real("read_voltage_v")
    measure_voltage_v = _real("measure_voltage_v")
    set_output = _real("set_output")
    read_output = _real("read_output")


class AbsentPhotonCounter(_Absent, PhotonCounter):
    """See `PhotonCounter`; every call first tries to reach the instrument."""

    @property
    def gate(self) -> Scale:  # type: ignore[override]
        return self._scales["gate", 0] if self._opened is None else self._opened.gate

    start_count = _real("start_count")
    read_count = _real("read_count")


class AbsentGauge(_Absent, Gauge):
    """See `Gauge`; every call, and asking for the unit, first tries to reach the instrument."""

    @property
    def unit(self) -> str:  # type: ignore[override]
        return str(self._take_up().unit)

    read_value = _real("read_value")


_STAND_INS = {
    RfSource: AbsentRfSource,
    DcSupply: AbsentDcSupply,
    PhotonCounter: AbsentPhotonCounter,
    Gauge: AbsentGauge,
}
