"""One straight stretch of a way: one setpoint moves, the others are held."""

from __future__ import annotations

from collections.abc import Sequence

from trapd.guard import rules
from trapd.guard.allowed import allowed_intervals
from trapd.guard.contents import Watched
from trapd.guard.limits import amplitude_band, level_of, show
from trapd.guard.model import GuardModel
from trapd.guard.motion_rules import motion_reasons
from trapd.physics.interval import Edge, Interval
from trapd.physics.species import Species
from trapd.setpoint import AMPLITUDE, FREQUENCY, Reason, Step, Values, unit_of


def leg_reason(
    model: GuardModel, who: Watched, values: Values, steps: list[Step], residue: Sequence[str], *, clean_end: bool
) -> Reason | None:
    """Why this stretch is not allowed; None when it is. ``residue``: the setpoints that moved before it; ``clean_end``: the
    state at its end is known to break no rule."""
    name, end = steps[-1].setpoint, steps[-1].value
    reason = hazard_reason(model, who, values, steps) or stretch_reason(model, who.enforced, values, steps, residue)
    if reason is not None or clean_end or name == AMPLITUDE:  # whose allowed values are judged over the whole band
        return reason
    # With both ends judged over the whole amplitude band, and the stretch at both ends of the band, the border of the box
    # (stretch x band) is proved.
    return next(iter(motion_reasons(model, who.enforced, {**values, name: end}, [name])), None)


def hazard_reason(model: GuardModel, who: Watched, values: Values, steps: list[Step]) -> Reason | None:
    """What no interval tells: a range boundary on the way, and the amplitude's band along a frequency stretch."""
    name, end = steps[-1].setpoint, steps[-1].value
    low, high = min(values[name], end), max(values[name], end)
    if name == FREQUENCY and (reason := _amplitude_on_the_way(model, values, low, high)) is not None:
        return reason
    return _boundary(model, values, steps) if who.enforced or who.incoming else None


def stretch_reason(
    model: GuardModel,
    species: Sequence[Species],
    values: Values,
    steps: list[Step],
    residue: Sequence[str],
    *,
    limits: bool = True,
) -> Reason | None:
    """Whether the stretch lies in one allowed interval for these species; without ``limits`` as far as their motion goes."""
    name, start, end = steps[-1].setpoint, values[steps[-1].setpoint], steps[-1].value
    low, high = min(start, end), max(start, end)
    intervals = allowed_intervals(model, species, values, name, stretch=(low, high), residue=residue, limits=limits)
    slack = 1e-12 * max(abs(low), abs(high))
    if any(i.low <= low + slack and i.high >= high - slack for i in intervals):
        return None
    return _leaves(values, name, start, end, intervals)


def _leaves(values: Values, name: str, start: float, end: float, intervals: list[Interval]) -> Reason:
    home = next((i for i in intervals if i.low <= start <= i.high), None)
    way = f"{name} from {show(start, name)} to {show(end, name)}"
    held = ", ".join(f"{other} = {show(value, other)}" for other, value in values.items() if other != name)
    if home is None:
        text = f"{way} with {held}: not allowed from the first step on"
        return Reason(rule=rules.PATH, quantity=name, unit=unit_of(name), found=end, bound=None, message=text)
    bound, cause = (home.high, home.high_by) if end > start else (home.low, home.low_by)
    return Reason(
        rule=rules.PATH,
        quantity=name,
        unit=unit_of(name),
        found=end,
        bound=bound,
        species=cause.species,
        mode=cause.mode,
        nearest=bound,
        message=f"{way} with {held}: the way leaves what is allowed at {show(bound, name)}{_because(cause)}",
    )


def _because(cause: Edge) -> str:
    parts = [part for part in (cause.rule, cause.species, cause.mode, cause.edge) if part]
    return f" ({', '.join(parts)})" if parts else ""


def _amplitude_on_the_way(model: GuardModel, values: Values, low: float, high: float) -> Reason | None:
    _, top = amplitude_band(model, values, (low, high))
    bound = model.limits[AMPLITUDE].high
    if top <= bound:
        return None
    return Reason(
        rule=rules.LIMIT,
        quantity=AMPLITUDE,
        unit="V",
        found=top,
        bound=bound,
        message=f"between {show(low, FREQUENCY)} and {show(high, FREQUENCY)} the electrode may see {top:.6g} V "
        f"within the resonator's uncertainty, max = {bound:.6g} V",
    )


def _boundary(model: GuardModel, values: Values, steps: list[Step]) -> Reason | None:
    """A frequency step changes the level as well: either may cross a boundary of its own."""
    name = steps[-1].setpoint
    for told in (FREQUENCY, AMPLITUDE) if name == FREQUENCY else (name,):
        if model.limits[told].boundaries and (reason := _crossing(model, values, steps, told)) is not None:
            return reason
    return None


def _crossing(model: GuardModel, values: Values, steps: list[Step], told: str) -> Reason | None:
    name = steps[-1].setpoint

    def instrument_value(state: Values) -> float:
        return level_of(model, state) if told == AMPLITUDE else state[told]

    before = instrument_value(values)
    for step in steps:
        after = instrument_value({**values, name: step.value})
        for boundary in model.limits[told].boundaries:
            if (before < boundary) != (after < boundary):
                return Reason(
                    rule=rules.BOUNDARY,
                    quantity=name,
                    unit=unit_of(name),
                    found=step.value,
                    bound=boundary,
                    message=f"{name} = {show(step.value, name)} crosses a range boundary of its instrument at "
                    f"{show(boundary, told)}, where the output drops out; not with ions in the trap",
                )
        before = after
    return None
