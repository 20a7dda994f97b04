"""The ramp down: RF to zero, then DC, one setpoint after another. The ions are lost, so no window has a say."""

from __future__ import annotations

from math import copysign

from trapd.guard import rules
from trapd.guard.limits import limit_reasons, realised, resolution
from trapd.guard.model import GuardModel
from trapd.guard.ramp import leg_steps
from trapd.setpoint import AMPLITUDE, FREQUENCY, Ramp, Step, Values


def plan_rundown(model: GuardModel, present: Values) -> Ramp:
    """The way from ``present`` (Hz, V) to no drive and the least voltages, within slew and step; it is never refused.

    No value is further from 0 V than the one before, and no electrode's further outside its limits; the least amplitude of
    the file does not hold the drive. The frequency stays. Where an instrument's own steps are larger than ``step``, it goes
    by one of them at a time. `Ramp.duration_s` is the whole time, the commands' own left out.
    """
    values, steps = dict(present), list[Step]()
    for name in (AMPLITUDE, *(other for other in model.limits if other not in (AMPLITUDE, FREQUENCY))):
        end = 0.0 if name == AMPLITUDE else _least(model, values, name)
        if end != values[name]:
            steps += _leg(model, values, name, end)
            values[name] = end
    return Ramp(start=dict(present), target=values, steps=tuple(steps))


def _least(model: GuardModel, values: Values, name: str) -> float:
    """0 V or the allowed value nearest to it; but a voltage already below that is not raised (an output that is off is
    at 0 V)."""
    dark = {**values, name: 0.0}
    outside = (r.nearest for r in limit_reasons(model, dark) if (r.rule, r.quantity) == (rules.LIMIT, name))
    nearest = realised(model, {**values, name: next(outside, None) or 0.0})[name]
    return max(min(nearest, values[name]), 0.0) if nearest >= 0 else min(max(nearest, values[name]), 0.0)


def _leg(model: GuardModel, values: Values, name: str, end: float) -> list[Step]:
    return leg_steps(model, {**values, name: _programmable(model, values, name, end)}, name, end)


def _programmable(model: GuardModel, values: Values, name: str, end: float) -> float:
    """The present value, or if the instrument cannot have been told it, the next it can on the far side from ``end``: steps
    counted from there are none too large, and none leads away."""
    taken, quantum = realised(model, values)[name], resolution(model, values, name)
    away = copysign(quantum, values[name] - end)
    if (values[name] - taken) * copysign(1.0, away) <= 0:
        return taken
    return realised(model, {**values, name: taken + away})[name]
