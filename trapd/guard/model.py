"""What the guard knows of one trap: the physics, the limits, the rules. Data only; built by `trapd.config`."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from trapd.physics.resonator import Resonator
from trapd.physics.species import Species
from trapd.physics.trap import Trap


@dataclass(frozen=True, kw_only=True)
class Limit:
    """The limits of one setpoint, in its own unit (Hz, or V at the electrode).

    ``slew_per_s`` bounds the mean rate of a ramp and ``step`` its largest single command. ``resolution`` is the distance
    between values the instrument can take (0: unknown, not quantised; for the drive amplitude it is that of the
    *synthesizer level*, see `GuardModel.level_resolution_v`, and 0 here). ``lag_s`` is the low-pass time constant between
    supply and electrode. ``boundaries`` are values whose crossing interrupts the output, in the unit of the instrument
    (synthesizer volts for the amplitude).
    """

    low: float
    high: float
    slew_per_s: float
    step: float
    resolution: float = 0.0
    lag_s: float = 0.0
    boundaries: tuple[float, ...] = ()


@dataclass(frozen=True, kw_only=True)
class TickleLimits:
    """What the tickle may be told: levels (V, zero to peak, at the generator) up to ``level_max_v``, frequencies (in steps of
    ``frequency_resolution_hz``) and burst times within the generator's ranges. ``burst_s`` None: it cannot do bursts, or
    nobody knows yet."""

    level_max_v: float
    frequency_resolution_hz: float = 1.0
    frequency_hz: tuple[float, float] = (0.0, math.inf)
    burst_s: tuple[float, float] | None = None


@dataclass(frozen=True, kw_only=True)
class GuardModel:
    """Everything a verdict depends on besides the state itself and the contents of the trap.

    ``limits`` has ``drive.frequency``, ``drive.amplitude`` and every electrode, in the order of the file. ``resonator``
    turns synthesizer volts into electrode volts (a flat gain is a resonator of infinite width). ``frequency_fixed``: the
    drive frequency must not move while ions are held (flat gain: nothing says what the amplitude would do).
    ``margin`` is relative. ``tickle`` None: the trap has none. ``min_secular_frequency_hz`` and ``min_depth_ev`` are
    None when the file does not ask.
    """

    trap: Trap
    catalogue: Mapping[str, Species]
    limits: Mapping[str, Limit]
    resonator: Resonator
    level_max_v: float | None
    level_resolution_v: float
    frequency_fixed: bool
    margin: float
    min_secular_frequency_hz: float | None = None
    min_depth_ev: float | None = None
    tickle: TickleLimits | None = None
