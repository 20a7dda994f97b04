"""What the instruments can take and what the file allows, before any ion is thought of."""

from __future__ import annotations

import math

from trapd.guard import rules
from trapd.guard.model import GuardModel, Limit
from trapd.physics.resonator import band, gain_at
from trapd.setpoint import AMPLITUDE, FREQUENCY, Reason, Values, unit_of


def realised(model: GuardModel, values: Values) -> dict[str, float]:
    """The state the instruments will really take: every value rounded to what can be programmed."""
    frequency = realised_value(model, values, FREQUENCY)
    return {name: realised_value(model, {**values, FREQUENCY: frequency}, name) for name in values}


def realised_value(model: GuardModel, values: Values, setpoint: str) -> float:
    """One setpoint of it; the amplitude's steps are those of the synthesizer's level at the frequency in ``values``."""
    if setpoint != AMPLITUDE:
        return _rounded(values[setpoint], model.limits[setpoint].resolution)
    gain = gain_at(model.resonator, values[FREQUENCY])
    return _rounded(values[AMPLITUDE] / gain, model.level_resolution_v) * gain


def resolution(model: GuardModel, values: Values, setpoint: str) -> float:
    """Distance between values of ``setpoint`` that can be programmed in this state; 0 when not known."""
    if setpoint == AMPLITUDE:
        return model.level_resolution_v * gain_at(model.resonator, values[FREQUENCY])
    return model.limits[setpoint].resolution


def displacement(model: GuardModel, values: Values, setpoint: str) -> float:
    """How far the margin displaces ``setpoint``: margin times the magnitude, at least one quantisation step."""
    return max(model.margin * abs(values[setpoint]), resolution(model, values, setpoint))


def level_of(model: GuardModel, values: Values) -> float:
    """Synthesizer level (V, zero to peak) that gives the drive amplitude of this state."""
    return values[AMPLITUDE] / gain_at(model.resonator, values[FREQUENCY])


def amplitude_band(
    model: GuardModel, values: Values, stretch_hz: tuple[float, float] | None = None
) -> tuple[float, float]:
    """Lowest and highest amplitude (V) that may really stand at the electrode.

    Gain and resonator are known within their uncertainty. Over a frequency stretch the level follows each step with
    two commands, ordered so that the amplitude between them is never above the set value; how far it falls below
    is in the lower end, as is the rounding of the level.
    """
    frequency = values[FREQUENCY]
    low_hz, high_hz = stretch_hz or (frequency, frequency)
    low, high = band(model.resonator, low_hz, high_hz)
    if high_hz > low_hz:
        low /= _largest_gain_ratio(model, low_hz, high_hz)
    # Half a step either way: on the way of a frequency, and for instruments whose steps are even in dB, not in volts.
    nearest = min(max(model.resonator.center_hz, low_hz), high_hz)
    rounding = model.level_resolution_v * gain_at(model.resonator, nearest) / 2
    ends = (values[AMPLITUDE] * low, values[AMPLITUDE] * high)
    return min(ends) - rounding, max(ends) + rounding


def limit_reasons(model: GuardModel, values: Values) -> list[Reason]:
    """Every limit this state breaks. Needs no species: these hold for an empty trap too."""
    reasons = []
    for name, limit in model.limits.items():
        low = high = values[name]
        if name == AMPLITUDE:
            high = amplitude_band(model, values)[1]
        if low < limit.low or high > limit.high:
            reasons.append(_outside(model, values, name, limit, low if low < limit.low else high))
    if model.level_max_v is not None and level_of(model, values) > model.level_max_v * (1 + 1e-12):
        reasons.append(_level_too_high(model, values, model.level_max_v))
    return reasons


def step_reasons(model: GuardModel, values: Values, moved: list[str]) -> list[Reason]:
    """A setpoint whose instrument cannot take steps as small as the file demands cannot be ramped."""
    return [
        Reason(
            rule=rules.STEP,
            quantity=name,
            unit=unit_of(name),
            found=found,
            bound=model.limits[name].step,
            message=f"{name}: the instrument resolves {show(found, name)}, the largest allowed step is "
            f"{show(model.limits[name].step, name)}",
        )
        for name in moved
        if (found := resolution(model, values, name)) > model.limits[name].step
    ]


def highest_amplitude(model: GuardModel, values: Values) -> float:
    """The largest amplitude (V) that limit and level allow at this frequency."""
    rounding = resolution(model, values, AMPLITUDE) / 2
    high = (model.limits[AMPLITUDE].high - rounding) / band(model.resonator, values[FREQUENCY], values[FREQUENCY])[1]
    if model.level_max_v is not None:
        high = min(high, model.level_max_v * gain_at(model.resonator, values[FREQUENCY]))
    return high


def frequency_limits(model: GuardModel, values: Values) -> tuple[float, float]:
    """The stretch (Hz) around the resonance in which level_max still gives the amplitude; may be empty (low > high)."""
    limit = model.limits[FREQUENCY]
    resonator = model.resonator
    if model.level_max_v is None or resonator.loaded_q is None or resonator.center_hz is None:
        return limit.low, limit.high
    excess = (resonator.gain * model.level_max_v / max(abs(values[AMPLITUDE]), 1e-100)) ** 2 - 1
    if excess < 0:
        return limit.high, limit.low
    reach = resonator.center_hz / (2 * resonator.loaded_q) * math.sqrt(excess)
    return max(limit.low, resonator.center_hz - reach), min(limit.high, resonator.center_hz + reach)


def show(value: float, setpoint: str) -> str:
    """A value for people: "260 V", "21.05 MHz"."""
    if setpoint == FREQUENCY:
        for scale, unit in ((1e6, "MHz"), (1e3, "kHz")):
            if abs(value) >= scale:
                return f"{value / scale:.9g} {unit}"
        return f"{value:.9g} Hz"
    return f"{value:.6g} V"


def _rounded(value: float, step: float) -> float:
    # The division by the reciprocal keeps decimal steps decimal: round(2.3 / 0.001) / 1000 is 2.3, x 0.001 is not.
    if step <= 0:
        return value
    reciprocal = 1 / step
    whole = round(reciprocal)
    return round(value / step) / whole if abs(reciprocal - whole) < 1e-9 * whole else round(value / step) * step


def _largest_gain_ratio(model: GuardModel, low_hz: float, high_hz: float) -> float:
    """Bound of the gain's change over any step that fits into this stretch: the highest over the lowest gain within one."""
    step = min(model.limits[FREQUENCY].step, high_hz - low_hz)
    center = model.resonator.center_hz
    ratio, count = 1.0, 256
    for k in range(count + 1):
        first = low_hz + (high_hz - step - low_hz) * k / count
        gains = [gain_at(model.resonator, one) for one in (first, first + step)]
        peak = gain_at(model.resonator, min(max(center, first), first + step))
        ratio = max(ratio, max(*gains, peak) / min(gains))
    return ratio * (1 + 1e-4)  # between two samples


def _outside(model: GuardModel, values: Values, name: str, limit: Limit, found: float) -> Reason:
    bound = limit.low if found < limit.low else limit.high
    side = "under min" if found < limit.low else "over max"
    nearest = min(max(values[name], limit.low), limit.high)
    text = f"{name} = {show(values[name], name)} is {side} = {show(bound, name)}"
    if name == AMPLITUDE:
        nearest = max(limit.low, min(nearest, highest_amplitude(model, values)))
        if found != values[name]:
            text = (
                f"{name} = {show(values[name], name)} may be {show(found, name)} at the electrode "
                f"within the gain's uncertainty, {side} = {show(bound, name)}"
            )
    return Reason(
        rule=rules.LIMIT,
        quantity=name,
        unit=unit_of(name),
        found=found,
        bound=bound,
        nearest=_inward(model, values, name, nearest),
        message=text,
    )


def _level_too_high(model: GuardModel, values: Values, level_max_v: float) -> Reason:
    level = level_of(model, values)
    return Reason(
        rule=rules.LEVEL,
        quantity=AMPLITUDE,
        unit="V",
        found=level,
        bound=level_max_v,
        nearest=_inward(model, values, AMPLITUDE, highest_amplitude(model, values)),
        message=f"{AMPLITUDE} = {show(values[AMPLITUDE], AMPLITUDE)} at {show(values[FREQUENCY], FREQUENCY)} needs "
        f"{level:.4g} V from the synthesizer, level_max is {level_max_v:.4g} V",
    )


def _inward(model: GuardModel, values: Values, name: str, nearest: float) -> float:
    """``nearest`` moved towards the present sign of zero until rounding cannot push it out again."""
    step = resolution(model, values, name)
    if step <= 0 or abs(_rounded(nearest, step) - nearest) < 1e-9 * step:
        return nearest
    inside = math.floor(nearest / step) if values[name] > nearest else math.ceil(nearest / step)
    return inside * step
