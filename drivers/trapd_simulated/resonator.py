"""The true resonator: how the drive reaches the electrodes, and how the drive's heat moves the center."""

from __future__ import annotations

import math
from dataclasses import dataclass

from trapd_simulated.clock import Timeline
from trapd_simulated.rf_source import RfSource
from trapd_simulated.settings import ResonatorSettings

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
        amplitude_v = carrier.to_v * self._response(carrier.frequency_hz, self._settings.center_hz + shift_hz)
        return self._settings.warmup_shift_hz * (amplitude_v / self._settings.warmup_reference_v) ** 2

    def _response(self, frequency_hz: float, center_hz: float) -> float:
        return response(frequency_hz, center_hz, self._settings.loaded_q, self._settings.gain)
