"""An instrument's controls as a list, so that one check serves every kind of instrument."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

from trapd_drivers.interfaces import DcSupply, Gauge, Instrument, PhotonCounter, RfSource, Scale


@dataclass(frozen=True, kw_only=True)
class Knob:
    """One settable quantity; ``measure`` where the interface has one for it."""

    name: str
    channel: int = 0
    scale: Scale
    set: Callable[[float], None]
    read: Callable[[], float]
    measure: Callable[[], float | None] | None = None

    @property
    def rest(self) -> float:
        """The value nearest to zero."""
        return min(max(0.0, self.scale.low), self.scale.high)

    def small(self, fraction: float) -> float:
        """A value that far up from rest, off the grid of programmable values."""
        return self.rest + fraction * (self.scale.high - self.rest) + 0.3 * self.scale.resolution


@dataclass(frozen=True, kw_only=True)
class Switch:
    """One output."""

    channel: int = 0
    set: Callable[[bool], None]
    read: Callable[[], bool]


def knobs(instrument: Instrument) -> tuple[Knob, ...]:
    if isinstance(instrument, RfSource):
        it = instrument
        return (
            Knob(name="frequency_hz", scale=it.frequency, set=it.set_frequency_hz, read=it.read_frequency_hz),
            Knob(name="level_v", scale=it.level, set=it.set_level_v, read=it.read_level_v, measure=it.measure_level_v),
        )
    if isinstance(instrument, DcSupply):
        return tuple(_voltage(instrument, channel) for channel in instrument.channels)
    return ()


def _voltage(instrument: DcSupply, channel: int) -> Knob:
    return Knob(
        name=f"channel {channel} voltage_v",
        channel=channel,
        scale=instrument.voltage(channel),
        set=partial(instrument.set_voltage_v, channel),
        read=partial(instrument.read_voltage_v, channel),
        measure=partial(instrument.measure_voltage_v, channel),
    )


def switches(instrument: Instrument) -> tuple[Switch, ...]:
    if isinstance(instrument, RfSource):
        return (Switch(set=instrument.set_output, read=instrument.read_output),)
    if isinstance(instrument, DcSupply):
        to, of = instrument.set_output, instrument.read_output
        return tuple(Switch(channel=one, set=partial(to, one), read=partial(of, one)) for one in instrument.channels)
    return ()


def starts(instrument: Instrument) -> tuple[Callable[[], None], ...]:
    """What begins a burst or a count, the shortest there is."""
    if isinstance(instrument, RfSource) and instrument.burst is not None:
        return (partial(instrument.start_burst, instrument.burst.low),)
    if isinstance(instrument, PhotonCounter):
        return (partial(instrument.start_count, instrument.gate.low),)
    return ()


def readings(instrument: Instrument) -> tuple[Callable[[], object], ...]:
    """Every method that only asks, but for `read_count`, which first wants a count."""
    return (
        instrument.read_identity,
        instrument.read_status,
        *(knob.read for knob in knobs(instrument)),
        *(knob.measure for knob in knobs(instrument) if knob.measure is not None),
        *(switch.read for switch in switches(instrument)),
        *((instrument.read_burst,) if isinstance(instrument, RfSource) else ()),
        *((instrument.read_value,) if isinstance(instrument, Gauge) else ()),
    )


@dataclass(frozen=True, kw_only=True)
class Settings:
    """All values and output states at one moment."""

    values: tuple[float, ...]
    outputs: tuple[bool, ...]

    @classmethod
    def of(cls, instrument: Instrument) -> Settings:
        values = tuple(knob.read() for knob in knobs(instrument))
        return cls(values=values, outputs=tuple(switch.read() for switch in switches(instrument)))

    def hold_at(self, instrument: Instrument) -> bool:
        """Whether the instrument has them now, within the accuracy of each quantity."""
        now = Settings.of(instrument)
        pairs = zip(knobs(instrument), self.values, now.values, strict=True)
        return self.outputs == now.outputs and all(abs(a - b) <= knob.scale.accuracy(a) for knob, a, b in pairs)

    def restore(self, instrument: Instrument) -> None:
        """Off first where it was off, then the values, then on where it was on."""
        states = list(zip(switches(instrument), self.outputs, strict=True))
        for switch, on in states:
            if not on:
                switch.set(False)
        for knob, value in zip(knobs(instrument), self.values, strict=True):
            knob.set(min(max(value, knob.scale.low), knob.scale.high))
        for switch, on in states:
            if on:
                switch.set(True)
