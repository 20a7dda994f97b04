"""The physical truth behind the instruments: what is really on the electrodes at a rack time."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from trapd_simulated.clock import Clock
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.instrument import Instrument
from trapd_simulated.resonator import Resonator
from trapd_simulated.rf_source import RfSource
from trapd_simulated.settings import ResonatorSettings


@dataclass(frozen=True, kw_only=True)
class Electrodes:
    """All true, none measured. Maps are keyed by instrument name, then channel number."""

    time_s: float
    drive_frequency_hz: float
    drive_amplitude_v: float  # at the electrode, zero to peak
    resonator_center_hz: float
    levels_v: Mapping[str, float]  # each RF source at its terminals, zero to peak
    rf_outputs: Mapping[str, bool]
    voltages_v: Mapping[str, Mapping[int, float]]  # at the electrode, behind the lag
    terminals_v: Mapping[str, Mapping[int, float]]
    dc_outputs: Mapping[str, Mapping[int, bool]]


class Bench:
    """Reads instruments, changes none: an ion placed here asks `electrodes` for the times it integrates over."""

    def __init__(self, settings: ResonatorSettings, instruments: Mapping[str, Instrument], clock: Clock) -> None:
        self._clock = clock
        self._sources = {name: one for name, one in instruments.items() if isinstance(one, RfSource)}
        self._supplies = {name: one for name, one in instruments.items() if isinstance(one, DcSupply)}
        self._drive = self._sources[settings.instrument]
        self._resonator = Resonator(settings, self._drive, clock.now_s())

    def electrodes(self, time_s: float | None = None) -> Electrodes:
        """At rack time ``time_s`` in s (default now): back to the changes still remembered, or ahead as things stand.

        Each instrument is read at one instant of its own lock; commands racing with the call are before or after it.
        """
        now_s = self._clock.now_s()
        time_s = now_s if time_s is None else time_s
        with self._drive.lock:
            self._resonator.advance(now_s)
            frequency_hz = self._drive.carrier(time_s).frequency_hz
            amplitude_v = self._resonator.amplitude_v(time_s)
            center_hz = self._resonator.center_hz(time_s)
        levels_v, rf_outputs = self._rf(time_s)
        voltages_v, terminals_v, dc_outputs = self._dc(time_s, now_s)
        return Electrodes(
            time_s=time_s,
            drive_frequency_hz=frequency_hz,
            drive_amplitude_v=amplitude_v,
            resonator_center_hz=center_hz,
            levels_v=levels_v,
            rf_outputs=rf_outputs,
            voltages_v=voltages_v,
            terminals_v=terminals_v,
            dc_outputs=dc_outputs,
        )

    def _rf(self, time_s: float) -> tuple[dict[str, float], dict[str, bool]]:
        levels_v, outputs = {}, {}
        for name, source in self._sources.items():
            with source.lock:
                carrier = source.carrier(time_s)
            levels_v[name], outputs[name] = carrier.level_v(time_s), carrier.on
        return levels_v, outputs

    def _dc(
        self, time_s: float, now_s: float
    ) -> tuple[dict[str, dict[int, float]], dict[str, dict[int, float]], dict[str, dict[int, bool]]]:
        voltages_v, terminals_v, outputs = {}, {}, {}
        for name, supply in self._supplies.items():
            with supply.lock:
                supply.advance(now_s)
                ramps = {number: channel.ramp(time_s) for number, channel in supply.channels.items()}
            voltages_v[name] = {number: ramp.electrode_v(time_s) for number, ramp in ramps.items()}
            terminals_v[name] = {number: ramp.terminal_v(time_s) for number, ramp in ramps.items()}
            outputs[name] = {number: ramp.on for number, ramp in ramps.items()}
        return voltages_v, terminals_v, outputs
