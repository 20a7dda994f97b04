"""From a setpoint to what an instrument is told, and back: instrument, channel, gain, quantisation, accuracy."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import partial

from trapd.config.records import Config
from trapd.errors import ConfigError
from trapd.guard.limits import displacement, realised_value
from trapd.guard.model import GuardModel
from trapd.physics.resonator import gain_at
from trapd.setpoint import (
    AMPLITUDE,
    FREQUENCY,
    TICKLE_BURST,
    TICKLE_FREQUENCY,
    TICKLE_LEVEL,
    TICKLE_OUTPUT,
    Intent,
    Step,
    Values,
    unit_of,
)
from trapd_drivers.interfaces import DcSupply, Gauge, Instrument, PhotonCounter, RfSource, Scale

DRIVE_OUTPUT = "drive.output"


@dataclass(frozen=True, kw_only=True)
class Command:
    """One thing to tell an instrument, ready to be recorded and sent.

    ``factor`` is setpoint units per instrument unit (the gain for the amplitude, else 1). A readback within ``accuracy``
    of the value agrees, one beyond ``stop_beyond`` stops the move (both in the unit of the setpoint). ``wait_s`` follows
    before the next command of the move, ``settle_s`` before any other setpoint may move. ``step`` counts the steps of
    the ramp from 1; 0 before and after it.
    """

    intent: Intent
    factor: float
    accuracy: float
    stop_beyond: float
    wait_s: float = 0.0
    settle_s: float = 0.0
    step: int = 0


def output_of(setpoint: str) -> str:
    """Name of the output behind a setpoint."""
    return DRIVE_OUTPUT if setpoint in (FREQUENCY, AMPLITUDE) else f"{setpoint}.output"


class Wiring:
    """Which instrument and channel stands behind each setpoint of one trap."""

    def __init__(self, config: Config, instruments: Mapping[str, Instrument]) -> None:
        if config.drive.instrument is None:
            raise ConfigError(f"{config.source}: drive.instrument is missing; a daemon needs [instruments]")
        self.drive = config.drive.instrument
        self.electrodes: dict[str, tuple[str, int]] = {}
        for name, electrode in config.electrodes.items():
            if electrode.instrument is None or electrode.channel is None:
                raise ConfigError(
                    f"{config.source}: electrodes.{name} has no instrument or channel; nothing was opened"
                )
            self.electrodes[name] = (electrode.instrument, electrode.channel)
        self.tickle = None if config.tickle is None else config.tickle.instrument
        self.counter = None if config.counter is None else config.counter.instrument
        self._scales = self._find_scales(config, instruments)
        self._tickle = self._find_tickle(config, instruments)
        self.gauges = self._find_gauges(config, instruments)

    def _find_scales(self, config: Config, instruments: Mapping[str, Instrument]) -> dict[str, Callable[[], Scale]]:
        source = instruments[self.drive]
        if not isinstance(source, RfSource):
            raise ConfigError(f"{config.source}: drive.instrument = {self.drive!r} is no RF source")
        # Asked for at each use: an instrument that was absent at the start knows its limits only later.
        scales: dict[str, Callable[[], Scale]] = {FREQUENCY: lambda: source.frequency, AMPLITUDE: lambda: source.level}
        for name, (instrument, channel) in self.electrodes.items():
            supply = instruments[instrument]
            if not isinstance(supply, DcSupply):
                raise ConfigError(f"{config.source}: electrodes.{name}.instrument = {instrument!r} is no DC supply")
            if channel not in supply.channels:
                raise ConfigError(
                    f"{config.source}: electrodes.{name}.channel = {channel}: {instrument!r} has channels "
                    f"{', '.join(map(str, supply.channels))}"
                )
            scales[name] = partial(supply.voltage, channel)
        return scales

    def _find_gauges(self, config: Config, instruments: Mapping[str, Instrument]) -> dict[str, str]:
        for name, section in config.interlocks.items():
            if not isinstance(instruments[section.instrument], Gauge):
                raise ConfigError(f"{config.source}: interlocks.{name}.instrument = {section.instrument!r} is no gauge")
        return {name: section.instrument for name, section in config.interlocks.items()}

    def _find_tickle(self, config: Config, instruments: Mapping[str, Instrument]) -> RfSource | None:
        if self.counter is not None and not isinstance(instruments[self.counter], PhotonCounter):
            raise ConfigError(f"{config.source}: counter.instrument = {self.counter!r} is no photon counter")
        if self.tickle is None:
            return None
        source = instruments[self.tickle]
        if not isinstance(source, RfSource) or self.tickle == self.drive:
            raise ConfigError(f"{config.source}: tickle.instrument = {self.tickle!r} is no RF source of its own")
        return source

    @property
    def scales(self) -> dict[str, Scale]:
        """By setpoint; that of the amplitude is the synthesizer's level. And those of the tickle."""
        scales = {name: scale() for name, scale in self._scales.items()}
        if self._tickle is not None:
            scales |= {TICKLE_FREQUENCY: self._tickle.frequency, TICKLE_LEVEL: self._tickle.level}
            if self._tickle.burst is not None:
                scales[TICKLE_BURST] = self._tickle.burst
        return scales

    @property
    def setpoints(self) -> tuple[str, ...]:
        return (FREQUENCY, AMPLITUDE, *self.electrodes)

    def tickle_level_v(self, wanted_v: float) -> float:
        """The strongest tickle that can be programmed and is no stronger than ``wanted_v``; 0 when there is none."""
        scale, lower_v = self.scales[TICKLE_LEVEL], wanted_v
        while (level_v := scale.quantise(lower_v)) > wanted_v * (1 + 1e-9):
            lower_v *= 0.98  # steps may be even in volts or in dB
        return level_v

    @property
    def holding(self) -> tuple[str, ...]:
        """The instruments that hold the ions, the drive first."""
        return tuple(dict.fromkeys((self.drive, *(owner for owner, _ in self.electrodes.values()))))

    @property
    def with_outputs(self) -> tuple[str, ...]:
        """The instruments that `off` switches off, the drive first."""
        return self.holding if self.tickle is None else (*self.holding, self.tickle)

    def instrument_of(self, setpoint: str) -> str:
        """The instrument behind a setpoint or an output."""
        return self.address(setpoint.removesuffix(".output"))[0]

    def address(self, setpoint: str) -> tuple[str, int | None]:
        return self.electrodes.get(setpoint, (self.drive, None))

    def commands(self, model: GuardModel, values: Values, step: Step, number: int, settle_s: float) -> list[Command]:
        """What the instruments are told for one step from the state ``values``.

        A frequency step tells the frequency and the level that holds the electrode amplitude there; the one that lowers
        the amplitude goes first, so that between the two it is never above the set value.
        """
        after = {**values, step.setpoint: step.value}
        if step.setpoint != FREQUENCY:
            return [self.command(model, after, step.setpoint, wait_s=step.wait_s, settle_s=settle_s, step=number)]
        pair = [FREQUENCY, AMPLITUDE]
        if gain_at(model.resonator, step.value) > gain_at(model.resonator, values[FREQUENCY]):
            pair.reverse()
        last = self.command(model, after, pair[1], wait_s=step.wait_s, step=number)
        return [self.command(model, after, pair[0], step=number), last]

    def command(
        self,
        model: GuardModel,
        values: Values,
        setpoint: str,
        *,
        wait_s: float = 0.0,
        settle_s: float = 0.0,
        step: int = 0,
    ) -> Command:
        """Tell one instrument the value that ``setpoint`` has in ``values``."""
        instrument, channel = self.address(setpoint)
        factor = self._factor(model, values, setpoint)
        value = realised_value(model, values, setpoint)
        if setpoint == AMPLITUDE:  # steps that are even in dB have a least level that is none of the even ones in volts
            scale = self._scales[AMPLITUDE]()
            value = min(max(value / factor, scale.low), scale.high) * factor
        accuracy = self.accuracy(model, values, setpoint)
        half_margin = displacement(model, values, setpoint) / 2
        return Command(
            intent=Intent(
                setpoint=setpoint,
                value=value,
                unit=unit_of(setpoint),
                instrument=instrument,
                channel=channel,
                quantity={FREQUENCY: "frequency_hz", AMPLITUDE: "level_v"}.get(setpoint, "voltage_v"),
                level=value / factor,
            ),
            factor=factor,
            accuracy=accuracy,
            stop_beyond=max(accuracy, min(3 * accuracy, half_margin)),
            wait_s=wait_s,
            settle_s=settle_s,
            step=step,
        )

    def accuracy(self, model: GuardModel, values: Values, setpoint: str) -> float:
        """Within this of its value in ``values`` (which names the frequency too) a readback of ``setpoint`` agrees."""
        factor = self._factor(model, values, setpoint)
        scale = self._scales[setpoint]()
        return (scale.accuracy(values[setpoint] / factor) + scale.resolution / 2) * factor

    def _factor(self, model: GuardModel, values: Values, setpoint: str) -> float:
        return gain_at(model.resonator, values[FREQUENCY]) if setpoint == AMPLITUDE else 1.0

    def output(self, setpoint: str, on: bool, *, wait_s: float = 0.0) -> Command:
        """Switch the output behind a setpoint."""
        instrument, channel = self.address(setpoint)
        intent = _switch(output_of(setpoint), instrument, channel, on)
        return Command(intent=intent, factor=1.0, accuracy=0.0, stop_beyond=0.0, wait_s=wait_s)

    def off_intents(self, instrument: str) -> list[Intent]:
        """What `off` tells an instrument: one intent for each of its outputs."""
        if instrument == self.tickle:
            return [_switch(TICKLE_OUTPUT, instrument, None, False)]
        return [
            self.output(name, False).intent
            for name in (AMPLITUDE, *self.electrodes)
            if self.address(name)[0] == instrument
        ]

    def least_amplitude_v(self, model: GuardModel, frequency_hz: float) -> float:
        """The electrode amplitude at the least level the synthesizer gives."""
        return max(self._scales[AMPLITUDE]().low, 0.0) * gain_at(model.resonator, frequency_hz)


def _switch(output: str, instrument: str, channel: int | None, on: bool) -> Intent:
    return Intent(
        setpoint=output,
        value=float(on),
        unit="1",
        instrument=instrument,
        channel=channel,
        quantity="output",
        level=float(on),
    )


def send(instrument: Instrument, intent: Intent) -> None:
    """Command the instrument. Runs on its own thread."""
    match instrument, intent.quantity:
        case RfSource(), "frequency_hz":
            instrument.set_frequency_hz(intent.level)
        case RfSource(), "level_v":
            instrument.set_level_v(intent.level)
        case RfSource(), "output":
            instrument.set_output(intent.level == 1.0)
        case DcSupply(), "voltage_v":
            instrument.set_voltage_v(_channel(intent), intent.level)
        case DcSupply(), "output":
            instrument.set_output(_channel(intent), intent.level == 1.0)
        case _:
            raise TypeError(f"{intent.quantity} is nothing that {intent.instrument} can be told")


def read_programmed(instrument: Instrument, intent: Intent) -> float:
    """What the instrument says it was told, in its own unit."""
    match instrument, intent.quantity:
        case RfSource(), "frequency_hz":
            return instrument.read_frequency_hz()
        case RfSource(), "level_v":
            return instrument.read_level_v()
        case RfSource(), "output":
            return float(instrument.read_output())
        case DcSupply(), "voltage_v":
            return instrument.read_voltage_v(_channel(intent))
        case DcSupply(), "output":
            return float(instrument.read_output(_channel(intent)))
        case _:
            raise TypeError(f"{intent.quantity} is nothing that {intent.instrument} can be asked")


def measure(instrument: Instrument, intent: Intent) -> float | None:
    """What stands at the terminals, in the instrument's unit; None when it cannot tell."""
    match instrument, intent.quantity:
        case RfSource(), "level_v":
            return instrument.measure_level_v()
        case DcSupply(), "voltage_v":
            return instrument.measure_voltage_v(_channel(intent))
        case _:
            return None


def output_is_on(instrument: Instrument, intent: Intent) -> bool:
    """Whether the output through which an intent acts is on."""
    match instrument:
        case RfSource():
            return instrument.read_output()
        case DcSupply():
            return instrument.read_output(_channel(intent))
        case _:
            raise TypeError(f"{intent.instrument} has no output")


def _channel(intent: Intent) -> int:
    assert intent.channel is not None
    return intent.channel
