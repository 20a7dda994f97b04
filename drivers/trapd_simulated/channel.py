"""One channel of a DC supply and the wire to its electrode: slew, low-pass, over-voltage trip, all in closed form."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from trapd_simulated.clock import Timeline
from trapd_simulated.settings import ChannelSettings


@dataclass(frozen=True, kw_only=True)
class Ramp:
    """The law from ``start_s`` on: the terminals slew from ``from_v`` to ``to_v`` and stay; the electrode lags.

    The electrode obeys lag dv/dt = u - v. Behind u = u0 + k t it is v = u - k lag + (v0 - u0 + k lag) exp(-t / lag),
    exactly, so nothing need tick between two questions.
    """

    start_s: float
    from_v: float = 0.0
    to_v: float = 0.0
    electrode_from_v: float = 0.0
    slew_v_per_s: float
    lag_s: float
    on: bool = False

    @property
    def slew_ends_s(self) -> float:
        """Seconds after the start."""
        return abs(self.to_v - self.from_v) / self.slew_v_per_s

    def terminal_v(self, time_s: float) -> float:
        since_s = time_s - self.start_s
        if since_s >= self.slew_ends_s:
            return self.to_v
        return self.from_v + math.copysign(self.slew_v_per_s, self.to_v - self.from_v) * since_s

    def electrode_v(self, time_s: float) -> float:
        if self.lag_s == 0.0:
            return self.terminal_v(time_s)
        since_s = time_s - self.start_s
        slewed_s = min(since_s, self.slew_ends_s)
        slope = math.copysign(self.slew_v_per_s, self.to_v - self.from_v)
        behind_v = slope * self.lag_s
        lagging_v = self.electrode_from_v - self.from_v + behind_v
        value = self.from_v + slope * slewed_s - behind_v + lagging_v * math.exp(-slewed_s / self.lag_s)
        if since_s > slewed_s:
            value = self.to_v + (value - self.to_v) * math.exp(-(since_s - slewed_s) / self.lag_s)
        return value


class Channel:
    """What is set, and the law that follows from it. Times are rack times; calls come in their order."""

    def __init__(self, settings: ChannelSettings, now_s: float, bias: float) -> None:
        self.settings = settings
        self.bias = bias
        self.protection_max_v = 1.1 * max(abs(settings.low_v), abs(settings.high_v))
        self._preset()
        self._ramps = Timeline(now_s, Ramp(start_s=now_s, slew_v_per_s=settings.slew_v_per_s, lag_s=settings.lag_s))

    def _preset(self) -> None:
        self.programmed_v = max(0.0, self.settings.low_v)
        self.protection_v = self.protection_max_v
        self.on = False
        self.tripped = False

    def ramp(self, time_s: float) -> Ramp:
        return self._ramps.at(time_s)

    def next_change_s(self, after_s: float) -> float:
        return self._ramps.next_s(after_s)

    def changes(self) -> int:
        return self._ramps.changes

    def terminal_v(self, now_s: float) -> float:
        return self._ramps.latest.terminal_v(now_s)

    def reset(self, now_s: float) -> None:
        self._preset()
        self._change(now_s)

    def program(self, voltage_v: float, now_s: float) -> None:
        self.programmed_v = voltage_v
        self._change(now_s)

    def switch(self, on: bool, now_s: float) -> None:
        self.on = on
        self._change(now_s)

    def protect(self, level_v: float, now_s: float) -> None:
        self.protection_v = level_v
        self._change(now_s)  # so that a level below the present voltage trips now, not when it was once passed
        self.advance(now_s)

    def trip(self, now_s: float) -> None:
        self.tripped, self.on = True, False
        self._change(now_s)

    def advance(self, now_s: float) -> None:
        """Trip at the moment the terminals passed the protection level, if they did so by ``now_s``."""
        if not self.on:
            return
        ramp, limit_v = self._ramps.latest, self.protection_v * (1.0 + 1e-9) + 1e-9
        if abs(ramp.from_v) > limit_v:
            self.trip(ramp.start_s)
        elif abs(ramp.to_v) > limit_v:
            passed_s = ramp.start_s + abs(math.copysign(self.protection_v, ramp.to_v) - ramp.from_v) / ramp.slew_v_per_s
            if passed_s <= now_s:
                self.trip(passed_s)

    def _change(self, now_s: float) -> None:
        before = self._ramps.latest
        law = replace(
            before,
            start_s=now_s,
            from_v=before.terminal_v(now_s),
            to_v=self.programmed_v if self.on else 0.0,
            electrode_from_v=before.electrode_v(now_s),
            on=self.on,
        )
        self._ramps.change(now_s, law)
