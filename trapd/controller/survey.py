"""What an instrument says of itself: read before every move and on start. Nothing here commands anything."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field

from trapd.guard.model import GuardModel
from trapd.physics.resonator import gain_at
from trapd.setpoint import AMPLITUDE, FREQUENCY, TICKLE_OUTPUT, Values, unit_of
from trapd.wiring import DRIVE_OUTPUT, Wiring, output_of
from trapd_drivers.errors import DriverError
from trapd_drivers.interfaces import DcSupply, Identity, Instrument, RfSource


@dataclass(frozen=True, kw_only=True)
class Survey:
    """One instrument as found. ``programmed`` by setpoint in instrument units, ``outputs`` by output name.
    ``tickling``: whether the tickle's output is on, None for any other instrument. ``failure``: it reported events,
    which it does only once, and then did not answer any more.
    """

    instrument: str
    identity: Identity
    power_on: bool
    errors: tuple[tuple[int, str], ...]
    tripped: tuple[int, ...]
    programmed: Mapping[str, float] = field(default_factory=dict)
    outputs: Mapping[str, bool] = field(default_factory=dict)
    tickling: bool | None = None
    failure: str | None = None


def survey_job(wiring: Wiring, name: str) -> Callable[[Instrument], Survey]:
    """A job for the instrument's own thread. Events are asked for last, since asking for them uses them up."""
    channels = {setpoint: channel for setpoint, (owner, channel) in wiring.electrodes.items() if owner == name}

    def state(instrument: Instrument) -> tuple[dict[str, float], dict[str, bool]]:
        programmed: dict[str, float] = {}
        outputs: dict[str, bool] = {}
        if isinstance(instrument, RfSource) and name == wiring.drive:
            programmed[FREQUENCY] = instrument.read_frequency_hz()
            programmed[AMPLITUDE] = instrument.read_level_v()
            outputs[DRIVE_OUTPUT] = instrument.read_output()
        elif isinstance(instrument, DcSupply):
            for setpoint, channel in channels.items():
                programmed[setpoint] = instrument.read_voltage_v(channel)
                outputs[output_of(setpoint)] = instrument.read_output(channel)
        return programmed, outputs

    def job(instrument: Instrument) -> Survey:
        identity = instrument.read_identity()
        programmed, outputs = state(instrument)
        tickling = instrument.read_output() if isinstance(instrument, RfSource) and name == wiring.tickle else None
        status = instrument.read_status()
        failure = None
        if status.power_on or status.tripped:  # what was read before may be from before
            try:
                programmed, outputs = state(instrument)
            except DriverError as error:
                programmed, outputs, failure = {}, {}, str(error)
        return Survey(
            instrument=name,
            identity=identity,
            power_on=status.power_on,
            errors=status.errors,
            tripped=status.tripped,
            programmed=programmed,
            outputs=outputs,
            tickling=tickling,
            failure=failure,
        )

    return job


def values_found(model: GuardModel, surveys: Iterable[Survey], before: Values) -> dict[str, float]:
    """The state at the electrodes that these surveys mean; what no survey covers stays as ``before``."""
    values = dict(before)
    level: float | None = None
    for found in surveys:
        for setpoint, programmed in found.programmed.items():
            on = found.outputs[output_of(setpoint)]
            if setpoint == AMPLITUDE:
                level = programmed if on else 0.0
            else:
                values[setpoint] = programmed if on or setpoint == FREQUENCY else 0.0
    if level is not None:
        values[AMPLITUDE] = level * gain_at(model.resonator, values[FREQUENCY])
    return values


def differences(
    wiring: Wiring, model: GuardModel, surveys: Iterable[Survey], expected: Values, outputs: Mapping[str, bool]
) -> list[str]:
    """In words, what differs beyond accuracy from what was last commanded, and what the instruments report.

    ``expected`` and ``outputs`` need not name everything; what they do not name was never commanded.
    """
    words = []
    for found in surveys:
        words += reports(found)
        if found.tickling:
            words.append(f"{TICKLE_OUTPUT} is on, last commanded off")
        for name, on in found.outputs.items():
            if name in outputs and outputs[name] != on:
                words.append(f"{name} is {_on(on)}, last commanded {_on(outputs[name])}")
        values = values_found(model, [found], {})
        for setpoint, value in values.items():
            silent = setpoint != FREQUENCY and not found.outputs[output_of(setpoint)]
            if silent or setpoint not in expected or (setpoint == AMPLITUDE and FREQUENCY not in expected):
                continue
            if abs(value - expected[setpoint]) > wiring.accuracy(model, expected, setpoint):
                unit = unit_of(setpoint)
                words.append(f"{setpoint} reads {value:.8g} {unit}, last commanded {expected[setpoint]:.8g} {unit}")
    return words


def reports(found: Survey) -> list[str]:
    """In words, what the instrument told of itself."""
    words = [f"{found.instrument} was switched on since the last look"] if found.power_on else []
    words += [f"{found.instrument} reports {code}, {text}" for code, text in found.errors]
    return words + [f"{found.instrument} has tripped its protection{_channel(channel)}" for channel in found.tripped]


def _on(on: bool) -> str:
    return "on" if on else "off"


def _channel(channel: int) -> str:
    return f" on channel {channel}" if channel else ""
