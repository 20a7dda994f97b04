"""The physical truth behind the instruments: the resonator, and what is really on the electrodes at a rack time."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TypeVar

from trapd_simulated.channel import Ramp
from trapd_simulated.clock import Clock, Timeline
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.instrument import Instrument
from trapd_simulated.rf_source import RfSource
from trapd_simulated.settings import ResonatorSettings

T = TypeVar("T")
_STEPS = 64  # heat is taken as constant over this part of the warm-up time


def response(frequency_hz: float, center_hz: float, loaded_q: float, gain: float) -> float:
    """Electrode volts per synthesizer volt: gain / sqrt(1 + (2 Q (f - f0) / f0)^2), a single pole near f0."""
    return gain / math.hypot(1.0, 2.0 * loaded_q * (frequency_hz - center_hz) / center_hz)


@dataclass(frozen=True, kw_only=True)
class Warmth:
    """The law of the detuning from ``start_s`` on, while the heat stays what it was then."""

    start_s: float
    shift_hz: float
    final_hz: float
    time_s: float

    def shift_at(self, time_s: float) -> float:
        return self.final_hz + (self.shift_hz - self.final_hz) * math.exp(-(time_s - self.start_s) / self.time_s)


class Resonator:
    """d(shift)/dt = (final shift - shift) / warm-up time, the final shift going with the electrode amplitude squared.

    That amplitude depends on the shift again, so that is renewed on a fixed grid of rack time that starts anew
    with each change of the drive: the outcome does not depend on who asks when. Guarded by the source's lock.
    """

    def __init__(self, settings: ResonatorSettings, source: RfSource, now_s: float) -> None:
        self._settings = settings
        self._source = source
        first = Warmth(start_s=now_s, shift_hz=0.0, final_hz=0.0, time_s=settings.warmup_time_s)
        self._warmths = Timeline(now_s, first)
        source.after_change = self._drive_changed

    def center_hz(self, time_s: float) -> float:
        return self._settings.center_hz + self._warmths.at(time_s).shift_at(time_s)

    def amplitude_v(self, time_s: float) -> float:
        """At the electrode, zero to peak."""
        carrier = self._source.carrier(time_s)
        return carrier.level_v(time_s) * self._response(carrier.frequency_hz, self.center_hz(time_s))

    def advance(self, now_s: float) -> None:
        """Bring the warm-up to ``now_s``."""
        step_s = self._settings.warmup_time_s / _STEPS
        while (next_s := self._warmths.latest.start_s + step_s) <= now_s:
            if not self._renew(next_s):
                return

    def _drive_changed(self, now_s: float) -> None:
        """The source calls this behind each change; the steps before it still see the old drive in its timeline."""
        self.advance(now_s)
        self._renew(now_s)

    def _renew(self, time_s: float) -> bool:
        """Take the heat of this moment; False when nothing would change any more."""
        before = self._warmths.latest
        shift_hz = before.shift_at(time_s)
        final_hz = self._final_hz(time_s, shift_hz)
        if abs(final_hz - before.final_hz) < 1e-9 and abs(final_hz - shift_hz) < 1e-9:
            return False
        law = Warmth(start_s=time_s, shift_hz=shift_hz, final_hz=final_hz, time_s=before.time_s)
        self._warmths.change(time_s, law)
        return True

    def _final_hz(self, time_s: float, shift_hz: float) -> float:
        """Where the shift would end at the power of ``time_s``; the level counts as settled, heat is far slower."""
        carrier = self._source.carrier(time_s)
        amplitude_v = carrier.settled_v(time_s) * self._response(
            carrier.frequency_hz, self._settings.center_hz + shift_hz
        )
        return self._settings.warmup_shift_hz * (amplitude_v / self._settings.warmup_reference_v) ** 2

    def _response(self, frequency_hz: float, center_hz: float) -> float:
        return response(frequency_hz, center_hz, self._settings.loaded_q, self._settings.gain)


@dataclass(frozen=True, kw_only=True)
class Electrodes:
    """All true, none measured. Maps are keyed by instrument name, then channel number."""

    time_s: float
    drive_frequency_hz: float
    drive_amplitude_v: float  # at the electrode, zero to peak
    resonator_center_hz: float
    frequencies_hz: Mapping[str, float]  # each RF source
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
        self._changing: tuple[RfSource | DcSupply, ...] = (*self._sources.values(), *self._supplies.values())
        self._drive = self._sources[settings.instrument]
        self._resonator = Resonator(settings, self._drive, clock.now_s())

    def electrodes(self, time_s: float | None = None) -> Electrodes:
        """At rack time ``time_s`` in s (default now): back to the changes still remembered, or ahead as things stand.

        Each instrument is read at one instant of its own lock; commands racing with the call are before or after it.
        """
        now_s = self._clock.now_s()
        time_s = now_s if time_s is None else time_s
        with self._drive.lock:
            self._drive.advance(now_s)
            self._resonator.advance(now_s)
            frequency_hz = self._drive.carrier(time_s).frequency_hz
            amplitude_v = self._resonator.amplitude_v(time_s)
            center_hz = self._resonator.center_hz(time_s)
        carriers = {name: source.carrier(time_s) for name, source in self._sources.items()}
        ramps = {name: supply.ramps(time_s) for name, supply in self._supplies.items()}
        return Electrodes(
            time_s=time_s,
            drive_frequency_hz=frequency_hz,
            drive_amplitude_v=amplitude_v,
            resonator_center_hz=center_hz,
            frequencies_hz={name: carrier.frequency_hz for name, carrier in carriers.items()},
            levels_v={name: carrier.level_v(time_s) for name, carrier in carriers.items()},
            rf_outputs={name: carrier.on for name, carrier in carriers.items()},
            voltages_v=_each(ramps, lambda ramp: ramp.electrode_v(time_s)),
            terminals_v=_each(ramps, lambda ramp: ramp.terminal_v(time_s)),
            dc_outputs=_each(ramps, lambda ramp: ramp.on),
        )

    def next_change_s(self, after_s: float) -> float:
        """When something is next switched or told another value behind ``after_s``, as far as known by now."""
        return min(one.next_change_s(after_s) for one in self._changing)

    def changes(self) -> int:
        """How often anything has been changed so far."""
        return sum(one.changes() for one in self._changing)


def _each(ramps: Mapping[str, Mapping[int, Ramp]], value: Callable[[Ramp], T]) -> dict[str, dict[int, T]]:
    return {name: {number: value(ramp) for number, ramp in one.items()} for name, one in ramps.items()}
