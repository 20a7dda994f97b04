"""One setpoint's straight way as steps: none larger than the file allows, none faster, the lag waited out at the end."""

from __future__ import annotations

import math

from trapd.guard.allowed import RESIDUE
from trapd.guard.limits import displacement, realised, resolution
from trapd.guard.model import GuardModel
from trapd.setpoint import Step, Values


def leg_steps(model: GuardModel, values: Values, setpoint: str, target: float) -> list[Step]:
    """Steps that bring ``setpoint`` from its value in ``values`` to ``target``, the last one settled.

    Each step is a value the instrument can take, at most ``step`` from the one before; its wait keeps the mean rate
    under the slew limit.
    """
    limit = model.limits[setpoint]
    start = values[setpoint]
    quantum = resolution(model, values, setpoint)
    # Rounding moves either end by half a quantum. Where that leaves next to nothing, or less, half of one does: two
    # neighbours are then one quantum apart at most.
    largest = max(limit.step - quantum, quantum / 2)
    count = max(1, math.ceil(abs(target - start) / largest * (1 - 1e-12)))
    steps = []
    last = start
    for k in range(1, count + 1):
        asked = {**values, setpoint: start + (target - start) * k / count}
        value = target if k == count else realised(model, asked)[setpoint]
        if value != last:
            steps.append(Step(setpoint=setpoint, value=value, wait_s=abs(value - last) / limit.slew_per_s))
            last = value
    if steps:
        settle = settle_s(model, {**values, setpoint: target}, setpoint, abs(target - start))
        steps[-1] = Step(setpoint=setpoint, value=target, wait_s=max(steps[-1].wait_s, settle))
    return steps


def settle_s(model: GuardModel, values: Values, setpoint: str, distance: float) -> float:
    """How long after a move over ``distance`` the low-pass residue is under `RESIDUE` of the margin."""
    limit = model.limits[setpoint]
    # Where margin and resolution are both nothing (0 V, unquantised) a millionth of the range has to do.
    small = RESIDUE * max(displacement(model, values, setpoint), 1e-6 * (limit.high - limit.low))
    return limit.lag_s * math.log(distance / small) if distance > small else 0.0
