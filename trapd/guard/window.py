"""The window of a state: for each setpoint all stable and all allowed values, the others held."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from trapd.guard.allowed import allowed_intervals, point_of
from trapd.guard.limits import displacement
from trapd.guard.model import GuardModel
from trapd.physics.species import Species
from trapd.physics.window import LIMIT, Interval, intersect, stable_intervals
from trapd.setpoint import FREQUENCY, Values, unit_of


@dataclass(frozen=True, kw_only=True)
class Reach:
    """Intervals of one setpoint, in ``unit``, ascending."""

    unit: str
    intervals: tuple[Interval, ...]


@dataclass(frozen=True, kw_only=True)
class Window:
    """By setpoint. ``stable``: first region, no margin, within the limits. ``allowed``: margin, rules and limits as well."""

    stable: Mapping[str, Reach]
    allowed: Mapping[str, Reach]


def window(model: GuardModel, species: Sequence[Species], values: Values) -> Window:
    """Around ``values``, which are what the instruments really take, for all ``species`` together."""
    if values[FREQUENCY] <= displacement(model, values, FREQUENCY):
        nothing = {name: _reach(name, ()) for name in model.limits}
        return Window(stable=nothing, allowed=nothing)
    return Window(
        stable={name: _reach(name, _stable(model, species, values, name)) for name in model.limits},
        allowed={name: _reach(name, allowed_intervals(model, species, values, name)) for name in model.limits},
    )


def _reach(setpoint: str, intervals: Sequence[Interval]) -> Reach:
    return Reach(unit=unit_of(setpoint), intervals=tuple(intervals))


def _stable(model: GuardModel, species: Sequence[Species], values: Values, setpoint: str) -> list[Interval]:
    limit = model.limits[setpoint]
    intervals = [Interval(low=limit.low, high=limit.high, low_by=LIMIT, high_by=LIMIT)]
    for one in species:
        (found,) = stable_intervals(model.trap, one, [point_of(values)], setpoint, limit.low, limit.high)
        intervals = intersect(intervals, found)
    return intervals
