"""A synthesizer with one output: a level that settles, a frequency that hops, bursts, a range relay, a latch."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import ClassVar

from trapd_simulated.arguments import scales
from trapd_simulated.clock import Clock, Timeline
from trapd_simulated.dialect import (
    frequency_reply,
    greatest,
    least,
    level_to_volts,
    number_reply,
    quantise,
    state_reply,
    volts_to_level,
)
from trapd_simulated.errors import RackUseError, ScpiError
from trapd_simulated.instrument import Call, Instrument, Query, Set
from trapd_simulated.settings import RfSourceSettings

_BURST = ("burst", "duration", "initiate", "abort", "active")


@dataclass(frozen=True, kw_only=True)
class Carrier:
    """The law of the output from ``start_s`` on: dead until the relay has switched, then settling exponentially.

    A burst ends at ``until_s``, whatever becomes of whoever started it.
    """

    start_s: float
    frequency_hz: float
    from_v: float = 0.0
    to_v: float = 0.0  # zero to peak; 0 with the output off
    settle_s: float
    on: bool = False
    until_s: float = math.inf

    def settled_v(self, time_s: float) -> float:
        """What `level_v` has gone to when it counts as settled."""
        return self.to_v if time_s < self.until_s else 0.0

    def level_v(self, time_s: float) -> float:
        """Volts zero to peak at the terminals."""
        since_s = time_s - self.start_s
        if since_s < 0.0 or time_s >= self.until_s:
            return 0.0
        if self.settle_s == 0.0:
            return self.to_v
        return self.to_v + (self.from_v - self.to_v) * math.exp(-since_s / self.settle_s)


class RfSource(Instrument):
    """Levels on the wire are in the dialect's unit, `Carrier` is in real volts zero to peak."""

    settings: RfSourceSettings
    PATTERNS: ClassVar = {
        "frequency": ("[SOURce#]:FREQuency[:CW]", "[SOURce#]:FREQuency:FIXed"),
        "level": ("[SOURce#]:VOLTage[:LEVel][:IMMediate][:AMPLitude]",),
        "output": ("OUTPut#[:STATe]",),
        "tripped": ("[SOURce#]:VOLTage:PROTection:TRIPped",),
        "clear": ("[SOURce#]:VOLTage:PROTection:CLEar",),
        "measure": ("MEASure[:SCALar][:VOLTage]:AC",),
        "burst": ("[SOURce#]:BURSt:STATe",),
        "duration": ("[SOURce#]:BURSt:DURation",),
        "initiate": ("INITiate[:IMMediate]",),
        "abort": ("ABORt",),
        "active": ("[SOURce#]:BURSt:ACTive",),
    }

    def __init__(self, name: str, settings: RfSourceSettings, clock: Clock, seed: int) -> None:
        super().__init__(name, settings, clock, seed)
        self.after_change: Callable[[float], None] = lambda now_s: None  # what is driven learns when it changed
        self._bias = self.random.uniform(-1.0, 1.0)
        unit, resolution = self.dialect.amplitude_unit, settings.level_resolution
        self._level_units = scales("DBM") if unit == "DBM" else scales("V") | scales(unit)
        self._level_low = least(volts_to_level(self.dialect, settings.level_min_v), resolution)
        self._level_high = greatest(volts_to_level(self.dialect, settings.level_max_v), resolution)
        self._preset()
        now_s = clock.now_s()
        first = Carrier(start_s=now_s, frequency_hz=self._frequency_hz, settle_s=settings.settle_s)
        self._carriers = Timeline(now_s, first)

    def _preset(self) -> None:
        self._frequency_hz = self.settings.frequency_min_hz
        self._level = self._level_low
        self._on = False
        self._tripped = False
        self._bursting = False
        self._duration_s = self.settings.burst_min_s
        self._burst_ends_s = -math.inf

    def commands(self) -> dict[str, tuple[Set | None, Query | None]]:
        return {
            "frequency": (self._set_frequency, self._read_frequency),
            "level": (self._set_level, self._read_level),
            "output": (self._set_output, lambda call: state_reply(self.dialect, "OUTP", self._on)),
            "tripped": (None, lambda call: state_reply(self.dialect, "VOLT:PROT:TRIP", self._tripped)),
            "clear": (self._clear, None),
            "measure": (None, self._measure if self.dialect.measures else None),
            **(self._burst_commands() if self.settings.bursts else dict.fromkeys(_BURST, (None, None))),
        }

    def _burst_commands(self) -> dict[str, tuple[Set | None, Query | None]]:
        return {
            "burst": (self._set_bursting, lambda call: state_reply(self.dialect, "BURS:STAT", self._bursting)),
            "duration": (self._set_duration, self._read_duration),
            "initiate": (self._initiate, None),
            "abort": (self._abort, None),
            "active": (None, lambda call: str(int(call.now_s < self._burst_ends_s))),
        }

    def carrier(self, time_s: float) -> Carrier:
        """The law in force at rack time ``time_s``."""
        with self.lock:
            return self._carriers.at(time_s)

    def next_change_s(self, after_s: float) -> float:
        """When the law is next another than just behind ``after_s``, as far as known by now; infinite when never."""
        with self.lock:
            law = self._carriers.at(after_s)
            due_s = [one_s for one_s in (law.start_s, law.until_s) if one_s > after_s]
            return min([self._carriers.next_s(after_s), *due_s])

    def changes(self) -> int:
        """How often the law has changed so far."""
        with self.lock:
            return self._carriers.changes

    def advance(self, now_s: float) -> None:
        """A burst that is over by ``now_s`` ended when it was due."""
        until_s = self._carriers.latest.until_s
        if until_s <= now_s:
            self._change(until_s)

    def reset(self, now_s: float) -> None:
        self._preset()
        self._change(now_s)

    def trip(self, channel: int) -> None:
        if channel not in (0, 1):
            raise RackUseError(f"{self.name} has one output, not a channel {channel}; nothing tripped")
        with self.lock:
            now_s = self.clock.now_s()
            self.advance(now_s)
            self._tripped, self._on = True, False
            self._burst_ends_s = -math.inf
            self._change(now_s)

    def _change(self, now_s: float, dead_s: float = 0.0) -> None:
        """A new law for the values now set; a relay still switching goes on doing so."""
        before = self._carriers.latest
        start_s = max(now_s + dead_s, before.start_s)
        emitting = self._on and (not self._bursting or now_s < self._burst_ends_s)
        to_v = level_to_volts(self.dialect, self._level) if emitting else 0.0
        from_v = before.level_v(now_s) if start_s <= now_s else 0.0
        law = Carrier(
            start_s=start_s,
            frequency_hz=self._frequency_hz,
            # Behind the gate of the bursts the level stands ready: it opens and shuts at once.
            from_v=to_v if self._bursting and 0.0 in (to_v, from_v) else from_v,
            to_v=to_v,
            settle_s=self.settings.settle_s,
            on=self._on,
            until_s=self._burst_ends_s if self._bursting and emitting else math.inf,
        )
        self._carriers.change(now_s, law)
        self.after_change(now_s)

    def _set_frequency(self, call: Call) -> None:
        low, high = self.settings.frequency_min_hz, self.settings.frequency_max_hz
        value = call.arguments.quantity(scales("HZ"), low, high, self.dialect.frequency_default_unit)
        self._end(call)
        self._frequency_hz = quantise(value, self.settings.frequency_resolution_hz)
        self._change(call.now_s)

    def _read_frequency(self, call: Call) -> str:
        extreme = call.arguments.extreme(self.settings.frequency_min_hz, self.settings.frequency_max_hz)
        self._end(call)
        return frequency_reply(self.dialect, "FREQ", self._frequency_hz if extreme is None else extreme)

    def _set_level(self, call: Call) -> None:
        low, high = self._level_low, self._level_high
        value = call.arguments.quantity(self._level_units, low, high, self.dialect.amplitude_unit)
        self._end(call)
        before, self._level = self._level, quantise(value, self.settings.level_resolution)
        self._change(call.now_s, self.settings.range_dropout_s if self._crosses(before, self._level) else 0.0)

    def _crosses(self, before: float, after: float) -> bool:
        old_v, new_v = (level_to_volts(self.dialect, level) for level in (before, after))
        return any((old_v < boundary) != (new_v < boundary) for boundary in self.settings.range_boundaries_v)

    def _read_level(self, call: Call) -> str:
        extreme = call.arguments.extreme(self._level_low, self._level_high)
        self._end(call)
        value = self._level if extreme is None else extreme
        return number_reply(self.dialect, "VOLT", self.dialect.amplitude_unit, value)

    def _set_output(self, call: Call) -> None:
        on = call.arguments.boolean()
        self._end(call)
        if on and self._tripped:
            raise ScpiError(-221, "protection has tripped; clear it first")
        self._on = on
        self._end_burst(call.now_s)

    def _set_bursting(self, call: Call) -> None:
        bursting = call.arguments.boolean()
        self._end(call)
        if bursting != self._bursting:
            self._bursting = bursting
            self._end_burst(call.now_s)

    def _set_duration(self, call: Call) -> None:
        low, high = self.settings.burst_min_s, self.settings.burst_max_s
        value = call.arguments.quantity(scales("S"), low, high, "S")
        self._end(call)
        self._duration_s = value

    def _read_duration(self, call: Call) -> str:
        extreme = call.arguments.extreme(self.settings.burst_min_s, self.settings.burst_max_s)
        self._end(call)
        return number_reply(self.dialect, "BURS:DUR", "S", self._duration_s if extreme is None else extreme)

    def _initiate(self, call: Call) -> None:
        self._end(call)
        if not (self._bursting and self._on):
            raise ScpiError(-213, "burst state or output is off")
        self._burst_ends_s = call.now_s + self._duration_s
        self._change(call.now_s)

    def _abort(self, call: Call) -> None:
        self._end(call)
        self._end_burst(call.now_s)

    def _end_burst(self, now_s: float) -> None:
        self._burst_ends_s = -math.inf
        self._change(now_s)

    def _clear(self, call: Call) -> None:
        self._end(call)
        self._tripped = False

    def _measure(self, call: Call) -> str:
        rms_v = self._carriers.latest.level_v(call.now_s) / math.sqrt(2.0)
        accuracy_v = self.settings.accuracy_absolute_v + self.settings.accuracy_relative * rms_v
        return number_reply(self.dialect, "MEAS:VOLT:AC", "V", abs(self.readback(rms_v, accuracy_v, self._bias)))

    @staticmethod
    def _end(call: Call) -> None:
        call.arguments.done()
        if call.suffix != 1:
            raise ScpiError(-114, "one output")
