"""The allowed intervals of one setpoint, the others held: what a stretch of a path must lie in.

A path is proved by intervals, not by samples. In each state where one *other* setpoint is displaced by its margin, and
at both ends of the band in which the drive amplitude may really stand, the stable intervals of the moving setpoint are
known exactly; what is allowed is their common part, shortened by the moving setpoint's own margin.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, replace
from math import inf

from trapd.guard import rules
from trapd.guard.limits import amplitude_band, displacement, frequency_limits, highest_amplitude, resolution
from trapd.guard.model import GuardModel
from trapd.physics.point import Point
from trapd.physics.resonator import band
from trapd.physics.species import Species
from trapd.physics.window import LIMIT, Edge, Interval, depth_intervals, intersect, stable_intervals
from trapd.setpoint import AMPLITUDE, FREQUENCY, Values

ANYWHERE = Interval(low=-inf, high=inf, low_by=LIMIT, high_by=LIMIT)

RESIDUE = 0.1
"""A lag residue under this fraction of the margin counts as settled; the next stretch is judged with it."""


@dataclass(frozen=True, kw_only=True)
class Displaced:
    """A state with one setpoint displaced by the margin; ``setpoint`` is None for the state itself, and for one whose
    ``residue`` is not quite gone."""

    setpoint: str | None
    values: Values
    residue: bool = False


def point_of(values: Values) -> Point:
    """The physics' name for a state."""
    electrodes = {name: value for name, value in values.items() if name not in (FREQUENCY, AMPLITUDE)}
    return Point(frequency_hz=values[FREQUENCY], amplitude_v=values[AMPLITUDE], electrodes=electrodes)


def displaced_states(model: GuardModel, values: Values, moving: str) -> list[Displaced]:
    """The state itself, then each setpoint other than ``moving`` alone displaced down and up."""
    states = [Displaced(setpoint=None, values=dict(values))]
    for name in values:
        if name == moving or (name == AMPLITUDE and moving != AMPLITUDE):
            continue
        delta = displacement(model, values, name)
        states += [Displaced(setpoint=name, values={**values, name: values[name] + sign * delta}) for sign in (-1, 1)]
    return states


def with_residue(model: GuardModel, values: Values, moving: str, residue: Sequence[str]) -> list[Displaced]:
    """The state as it is while setpoints that moved before are still short of their values by `RESIDUE` of the margin."""
    states = []
    for name in residue:
        if name != moving and model.limits[name].lag_s > 0:
            rest = RESIDUE * displacement(model, values, name)
            states += [
                Displaced(setpoint=None, values={**values, name: values[name] + sign * rest}, residue=True)
                for sign in (-1, 1)
            ]
    return states


def banded_states(
    model: GuardModel, values: Values, moving: str, stretch_hz: tuple[float, float] | None, residue: Sequence[str]
) -> list[Displaced]:
    """`displaced_states` at both ends of the amplitude band, and the amplitude itself displaced beyond them.

    ``residue`` names the setpoints that moved before, see `with_residue`.
    """
    low, high = amplitude_band(model, values, stretch_hz)
    states = displaced_states(model, values, moving) + with_residue(model, values, moving, residue)
    banded = [replace(s, values={**s.values, AMPLITUDE: end}) for s in states for end in sorted({low, high})]
    delta = displacement(model, values, AMPLITUDE)
    return banded + [
        Displaced(setpoint=AMPLITUDE, values={**values, AMPLITUDE: end}) for end in (low - delta, high + delta)
    ]


def allowed_intervals(
    model: GuardModel,
    species: Iterable[Species],
    values: Values,
    setpoint: str,
    *,
    stretch: tuple[float, float] | None = None,
    residue: Sequence[str] = (),
    limits: bool = True,
) -> list[Interval]:
    """All values of ``setpoint`` that margin, rules and limits allow for these species, the others as in ``values``.

    ``stretch`` (only matters for the frequency) bounds the values of interest: the amplitude band is taken over it
    instead of over the whole range of the setpoint. ``residue``: see `with_residue`. Without ``limits`` only the motion
    counts.
    """
    limit = model.limits[setpoint]
    everybody = list(species)
    allowed = limit_intervals(model, values, setpoint) if limits else [ANYWHERE]
    for one in everybody:
        if not allowed:
            break
        if setpoint == AMPLITUDE:
            found = _amplitude_intervals(model, one, values, stretch or (limit.low, limit.high), residue)
        else:
            reach = stretch or (limit.low, limit.high)
            found = _other_intervals(model, one, values, setpoint, reach, residue)
        for intervals in found:
            allowed = intersect(allowed, intervals)
    return _fixed(model, values, allowed) if setpoint == FREQUENCY and everybody else allowed


def _fixed(model: GuardModel, values: Values, allowed: list[Interval]) -> list[Interval]:
    """With a flat gain the frequency's only allowed value is the one it has."""
    if not model.frequency_fixed:
        return allowed
    here = values[FREQUENCY]
    only = Edge(kind="rule", rule=rules.FIXED_FREQUENCY)
    return [Interval(low=here, high=here, low_by=only, high_by=only) for i in allowed if i.low <= here <= i.high]


def limit_intervals(model: GuardModel, values: Values, setpoint: str) -> list[Interval]:
    """What the limits alone allow."""
    limit = model.limits[setpoint]
    low, high = limit.low, limit.high
    by_low = by_high = Edge(kind="limit", rule=rules.LIMIT)
    if setpoint == AMPLITUDE:
        high = highest_amplitude(model, values)
        if high < limit.high and model.level_max_v is not None:
            by_high = Edge(kind="limit", rule=rules.LEVEL if _level_binds(model, values) else rules.LIMIT)
    elif setpoint == FREQUENCY:
        low, high = frequency_limits(model, values)
        by_low = by_low if low == limit.low else Edge(kind="limit", rule=rules.LEVEL)
        by_high = by_high if high == limit.high else Edge(kind="limit", rule=rules.LEVEL)
    return [Interval(low=low, high=high, low_by=by_low, high_by=by_high)] if low <= high else []


def shrink(
    intervals: Sequence[Interval],
    down: Callable[[float], float],
    up: Callable[[float], float],
    rule: str,
    ends: tuple[float, float],
) -> list[Interval]:
    """Intervals shortened at both ends: ``up`` maps a low end to its new place, ``down`` a high end.

    An end that coincides with ``ends`` is where the search stopped, not an edge: nothing is known to lie beyond it, and
    it is the caller's business to search far enough.
    """
    out = []
    for interval in intervals:
        low, high = up(interval.low), down(interval.high)
        if low > high:
            continue
        by_low = interval.low_by if interval.low <= ends[0] else replace(interval.low_by, kind="rule", rule=rule)
        by_high = interval.high_by if interval.high >= ends[1] else replace(interval.high_by, kind="rule", rule=rule)
        out.append(Interval(low=low, high=high, low_by=by_low, high_by=by_high))
    return out


def _level_binds(model: GuardModel, values: Values) -> bool:
    without_level = replace(model, level_max_v=None)
    return highest_amplitude(model, values) < highest_amplitude(without_level, values)


def _amplitude_intervals(
    model: GuardModel, one: Species, values: Values, reach: tuple[float, float], residue: Sequence[str]
) -> list[list[Interval]]:
    """For each rule, the nominal amplitudes whose whole band (and own margin, in the state itself) is inside."""
    limit = model.limits[AMPLITUDE]
    low_factor, high_factor = band(model.resonator, values[FREQUENCY], values[FREQUENCY])
    quantum = resolution(model, values, AMPLITUDE)
    rounding = quantum / 2
    least, most = min(limit.low, *reach, 0.0), max(limit.high, *reach)
    outside = (high_factor + model.margin) * max(abs(least), most) + 2 * quantum
    search = (-outside if least < 0 else -2 * quantum, outside)

    def up(edge: float, margin: float = 0.0, floor: float = 0.0) -> float:
        # The least V with V x low_factor - rounding - max(margin x |V|, floor) at the edge; below 0 the band turns over.
        inside = edge + rounding
        factor, sign = (low_factor, 1) if inside >= 0 else (high_factor, -1)
        return max(inside / (factor - sign * margin), (inside + floor) / factor)

    def down(edge: float, margin: float = 0.0, floor: float = 0.0) -> float:
        inside = edge - rounding
        factor, sign = (high_factor, 1) if inside >= 0 else (low_factor, -1)
        return min(inside / (factor + sign * margin), (inside - floor) / factor)

    states = displaced_states(model, values, AMPLITUDE) + with_residue(model, values, AMPLITUDE, residue)
    points = [point_of(state.values) for state in states]
    per_state = stable_intervals(model.trap, one, points, AMPLITUDE, *search)
    own = shrink(
        per_state[0],
        lambda edge: down(edge, model.margin, quantum),
        lambda edge: up(edge, model.margin, quantum),
        rules.MARGIN,
        search,
    )
    found = [own] + [shrink(p, down, up, rules.MARGIN, search) for p in per_state[1:]]
    plain = [point for state, point in zip(states, points, strict=True) if state.setpoint is None]
    for rule, per_point in _rule_intervals(model, one, plain, AMPLITUDE, search):
        found += [shrink(intervals, down, up, rule, search) for intervals in per_point]
    return found


def _other_intervals(
    model: GuardModel, one: Species, values: Values, setpoint: str, reach: tuple[float, float], residue: Sequence[str]
) -> list[list[Interval]]:
    stretch_hz = reach if setpoint == FREQUENCY else None
    states = banded_states(model, values, setpoint, stretch_hz, residue)
    quantum = resolution(model, values, setpoint)
    limit = model.limits[setpoint]
    least, most = min(limit.low, *reach), max(limit.high, *reach)
    search = (least - model.margin * abs(least) - quantum, most + model.margin * abs(most) + quantum)

    def up(edge: float) -> float:
        scale = 1 - model.margin if edge >= 0 else 1 + model.margin
        return max(edge / scale, edge + quantum)

    def down(edge: float) -> float:
        scale = 1 + model.margin if edge >= 0 else 1 - model.margin
        return min(edge / scale, edge - quantum)

    points = [point_of(state.values) for state in states]
    per_state = stable_intervals(model.trap, one, points, setpoint, *search)
    found = []
    for state, intervals in zip(states, per_state, strict=True):
        itself = state.setpoint is None and not state.residue
        found.append(shrink(intervals, down, up, rules.MARGIN, search) if itself else list(intervals))
    plain = [point for state, point in zip(states, points, strict=True) if state.setpoint is None]
    for _rule, per_point in _rule_intervals(model, one, plain, setpoint, search):
        found += [list(intervals) for intervals in per_point]
    return found


def _rule_intervals(
    model: GuardModel, one: Species, points: Sequence[Point], setpoint: str, search: tuple[float, float]
) -> list[tuple[str, list[list[Interval]]]]:
    """Where the file's own rules on the motion hold, the amplitude as it is in each point."""
    found = []
    if model.min_secular_frequency_hz is not None:
        found.append(
            (
                rules.MIN_SECULAR_FREQUENCY,
                stable_intervals(
                    model.trap, one, points, setpoint, *search, min_secular_hz=model.min_secular_frequency_hz
                ),
            )
        )
    if model.min_depth_ev is not None and model.trap.escape is not None:
        found.append(
            (
                rules.MIN_DEPTH,
                depth_intervals(model.trap, one, points, setpoint, *search, min_depth_ev=model.min_depth_ev),
            )
        )
    return found
