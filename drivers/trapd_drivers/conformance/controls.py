"""An instrument's controls as a list, so that one check serves RF sources and DC supplies."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

from trapd_drivers.interfaces import DcSupply, Instrument, RfSource, Scale


@dataclass(frozen=True, kw_only=True)
class Knob:
    """One settable quantity; ``measure`` where the interface has one for it."""

    name: str
    channel: int
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

    channel: int
    set: Callable[[bool], None]
    read: Callable[[], bool]


def knobs(instrument: Instrument) -> tuple[Knob, ...]:
    if isinstance(instrument, RfSource):
        return (
            Knob(
                name="frequency_hz",
                channel=0,
                scale=instrument.frequency,
                set=instrument.set_frequency_hz,
                read=instrument.read_frequency_hz,
            ),
            Knob(
                name="level_v",
                channel=0,
                scale=instrument.level,
                set=instrument.set_level_v,
                read=instrument.read_level_v,
                measure=instrument.measure_level_v,
            ),
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
        return (Switch(channel=0, set=instrument.set_output, read=instrument.read_output),)
    if isinstance(instrument, DcSupply):
        return tuple(
            Switch(
                channel=channel,
                set=partial(instrument.set_output, channel),
                read=partial(instrument.read_output, channel),
            )
            for channel in instrument.channels
        )
    return ()


def readings(instrument: Instrument) -> tuple[Callable[[], object], ...]:
    """Every method that only asks."""
    measured = tuple(knob.measure for knob in knobs(instrument) if knob.measure is not None)
    return (
        instrument.read_identity,
        instrument.read_status,
        *(knob.read for knob in knobs(instrument)),
        *measured,
        *(switch.read for switch in switches(instrument)),
    )


@dataclass(frozen=True, kw_only=True)
class Settings:
    """All values and output states at one moment."""

    values: tuple[float, ...]
    outputs: tuple[bool, ...]


def read_settings(instrument: Instrument) -> Settings:
    return Settings(
        values=tuple(knob.read() for knob in knobs(instrument)),
        outputs=tuple(switch.read() for switch in switches(instrument)),
    )


def restore_settings(instrument: Instrument, before: Settings) -> None:
    """Off first where it was off, then the values, then on where it was on."""
    for switch, on in zip(switches(instrument), before.outputs, strict=True):
        if not on:
            switch.set(False)
    for knob, value in zip(knobs(instrument), before.values, strict=True):
        knob.set(min(max(value, knob.scale.low), knob.scale.high))
    for switch, on in zip(switches(instrument), before.outputs, strict=True):
        if on:
            switch.set(True)


def same_settings(instrument: Instrument, one: Settings, other: Settings) -> bool:
    """Within the accuracy of each quantity."""
    pairs = zip(knobs(instrument), one.values, other.values, strict=True)
    return one.outputs == other.outputs and all(abs(a - b) <= knob.scale.accuracy(a) for knob, a, b in pairs)
