"""An interlock: a stream of gauge readings becomes a warning or a trip.

What a trip does is named by `Action`, after the stop categories of IEC 60204-1 [mem]: ``off`` is category 0, an immediate
removal of power; ``ramp down`` is category 1, a controlled stop with power available to achieve it (`trapd.guard.rundown`),
power being removed when it is achieved; ``hold`` is category 2, a controlled stop with power left available.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

from trapd.errors import Conflict

Action = Literal["hold", "ramp down", "off"]


@dataclass(frozen=True, kw_only=True)
class InterlockLimits:
    """Levels are in ``unit``, the SI unit of the gauge; None where there is none, and on a level is not beyond it.

    ``for_s``: beyond a level without interruption for so long before it counts. ``deadband``: the share of the level by
    which a reading must come back before a warning ends or a trip may be cleared. ``unreadable_s``: a reading older than
    this is none.
    """

    name: str
    unit: str
    action: Action
    warn_above: float | None = None
    trip_above: float | None = None
    warn_below: float | None = None
    trip_below: float | None = None
    for_s: float = 0.0
    deadband: float = 0.0
    unreadable_s: float = 5.0


@dataclass(frozen=True, kw_only=True)
class InterlockState:
    """``warned`` and ``unreadable`` end by themselves, ``tripped`` stays until `clear`.

    ``value`` (in the gauge's unit) is the last good reading and ``read_s`` (monotonic) its time, None before the first.
    The ``beyond_since_s`` times are those of the first reading beyond the level, None when the last good one was not.
    """

    warned: bool = False
    tripped: bool = False
    unreadable: bool = False
    value: float | None = None
    read_s: float | None = None
    warn_beyond_since_s: float | None = None
    trip_beyond_since_s: float | None = None


def step(limits: InterlockLimits, state: InterlockState, reading: float | None, now_s: float) -> InterlockState:
    """The state after one reading (None: it could not be read) at ``now_s`` (monotonic).

    A reading that is not beyond a level starts its delay anew. One that could not be read proves nothing: it neither
    starts, nor ends, nor completes a delay, and changes no warning; only the gauge becomes unreadable in time.
    """
    if reading is None or not math.isfinite(reading):
        return replace(state, unreadable=_unreadable(limits, state, now_s))
    warn, trip = _Levels.to_warn(limits), _Levels.to_trip(limits)
    warn_since_s = warn.beyond_since_s(reading, state.warn_beyond_since_s, now_s)
    trip_since_s = trip.beyond_since_s(reading, state.trip_beyond_since_s, now_s)
    still_warned = state.warned and not warn.is_back(reading)
    return InterlockState(
        warned=still_warned or _long_enough(limits, warn_since_s, now_s),
        tripped=state.tripped or _long_enough(limits, trip_since_s, now_s),
        value=reading,
        read_s=now_s,
        warn_beyond_since_s=warn_since_s,
        trip_beyond_since_s=trip_since_s,
    )


def clear(limits: InterlockLimits, state: InterlockState, now_s: float) -> InterlockState:
    """The state without its trip. Raises `Conflict` when the gauge is unreadable or has not come back by the deadband."""
    if state.value is None or _unreadable(limits, state, now_s):
        raise Conflict(
            f"interlock {limits.name}: its gauge could not be read for more than {limits.unreadable_s:g} s; expected a "
            "reading inside the trip levels; nothing was cleared"
        )
    trip = _Levels.to_trip(limits)
    if not trip.is_back(state.value):
        raise Conflict(
            f"interlock {limits.name}: {state.value:.6g} {limits.unit}; expected {trip.come_back(limits.unit)}; "
            "nothing was cleared"
        )
    return replace(state, tripped=False)


@dataclass(frozen=True, kw_only=True)
class _Levels:
    """The upper and the lower level of a warning or a trip."""

    above: float | None
    below: float | None
    deadband: float

    @classmethod
    def to_warn(cls, limits: InterlockLimits) -> _Levels:
        return cls(above=limits.warn_above, below=limits.warn_below, deadband=limits.deadband)

    @classmethod
    def to_trip(cls, limits: InterlockLimits) -> _Levels:
        return cls(above=limits.trip_above, below=limits.trip_below, deadband=limits.deadband)

    def beyond_since_s(self, value: float, since_s: float | None, now_s: float) -> float | None:
        beyond = (self.above is not None and value > self.above) or (self.below is not None and value < self.below)
        return (now_s if since_s is None else since_s) if beyond else None

    def is_back(self, value: float) -> bool:
        """By the deadband: on its edge is back."""
        low, high = self._inner()
        return low <= value <= high

    def come_back(self, unit: str) -> str:
        low, high = self._inner()
        ends = ((f"at least {low:.6g} {unit}", low), (f"at most {high:.6g} {unit}", high))
        return " and ".join(text for text, end in ends if math.isfinite(end))

    def _inner(self) -> tuple[float, float]:
        low = -math.inf if self.below is None else self.below + self.deadband * abs(self.below)
        high = math.inf if self.above is None else self.above - self.deadband * abs(self.above)
        return low, high


def _long_enough(limits: InterlockLimits, since_s: float | None, now_s: float) -> bool:
    return since_s is not None and now_s - since_s >= limits.for_s


def _unreadable(limits: InterlockLimits, state: InterlockState, now_s: float) -> bool:
    return state.read_s is None or now_s - state.read_s > limits.unreadable_s
