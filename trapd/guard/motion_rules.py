"""The rules on the ions' motion in one state: stability, margin, secular frequency, depth."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from trapd.guard import rules
from trapd.guard.allowed import allowed_intervals, displaced_states, point_of
from trapd.guard.limits import amplitude_band, displacement, resolution, show
from trapd.guard.model import GuardModel
from trapd.physics.floquet import motion, motions
from trapd.physics.species import Species
from trapd.physics.window import Edge, Interval, stable_intervals
from trapd.setpoint import AMPLITUDE, FREQUENCY, Motion, Reason, Values, unit_of

_ROUNDING = 1e-12
"""Relative; edges are known that well, and a value on an edge is neither offered nor refused for its last digits."""

_GRID = 1e-9
"""Of a programmable step: a limit this close to one is on it."""


def motion_reasons(
    model: GuardModel, species: Iterable[Species], values: Values, changed: Sequence[str] = ()
) -> list[Reason]:
    """Every rule on the motion that this state breaks. ``changed``: the setpoints to blame first."""
    everybody = list(species)
    reasons: list[Reason] = []
    for one in everybody:
        reasons += _window_reasons(model, everybody, one, values, changed)
    for one in everybody:
        if not any(r.species == one.name and r.rule == rules.STABILITY for r in reasons):
            reasons += _rule_reasons(model, everybody, one, values, changed)
    return reasons


def nearest_allowed(model: GuardModel, species: Sequence[Species], values: Values, setpoint: str) -> float | None:
    """The allowed value of ``setpoint`` nearest to the one asked, the others as asked; None when there is none.

    Moved inwards to a value the instrument can take.
    """
    quantum = resolution(model, values, setpoint)
    found = []
    for interval in allowed_intervals(model, species, values, setpoint):
        low, high = interval.low, interval.high
        if quantum > 0:
            low, high = math.ceil(low / quantum - _GRID) * quantum, math.floor(high / quantum + _GRID) * quantum
        else:  # an edge of the motion is lost on the edge itself; a limit is not
            low += _ROUNDING * abs(low) * (interval.low_by.kind != "limit")
            high -= _ROUNDING * abs(high) * (interval.high_by.kind != "limit")
        if low <= high:
            found.append(min(max(values[setpoint], low), high))
    nearest = min(found, key=lambda value: abs(value - values[setpoint]), default=None)
    if setpoint == FREQUENCY and nearest is not None and nearest != values[FREQUENCY]:
        return _closer(model, species, values, nearest)
    return nearest


def _closer(model: GuardModel, species: Sequence[Species], values: Values, allowed_hz: float) -> float:
    """The intervals of the frequency are for the amplitude's band over the whole range; one frequency alone has a narrower
    one, and may be nearer to what was asked."""
    good, bad = allowed_hz, values[FREQUENCY]
    while abs(good - bad) > max(1.0, model.limits[FREQUENCY].resolution):
        middle = (good + bad) / 2
        there = {**values, FREQUENCY: middle}
        intervals = allowed_intervals(model, species, there, FREQUENCY, stretch=(middle, middle))
        if any(i.low <= middle <= i.high for i in intervals):
            good = middle
        else:
            bad = middle
    quantum = model.limits[FREQUENCY].resolution or 1.0
    return math.floor(good / quantum) * quantum if good < bad else math.ceil(good / quantum) * quantum


def _window_reasons(
    model: GuardModel, everybody: list[Species], one: Species, values: Values, changed: Sequence[str]
) -> list[Reason]:
    low, high = amplitude_band(model, values)
    delta = displacement(model, values, AMPLITUDE)
    states = displaced_states(model, values, AMPLITUDE)
    points = [point_of(state.values) for state in states]
    itself, *others = stable_intervals(model.trap, one, points, AMPLITUDE, low - delta, high + delta)
    if not _covers(itself, low, high):
        return [_unstable(model, everybody, one, values, changed)]
    reasons = []
    if not _covers(itself, low - delta, high + delta):
        reasons.append(_margin(model, everybody, one, values, AMPLITUDE))
    failing = dict.fromkeys(
        state.setpoint
        for state, intervals in zip(states[1:], others, strict=True)
        if state.setpoint is not None and not _covers(intervals, low, high)
    )
    return reasons + [_margin(model, everybody, one, values, name) for name in failing]


def _covers(intervals: Sequence[Interval], low: float, high: float) -> bool:
    slack = 1e-12 * max(abs(low), abs(high))
    return any(i.low <= low + slack and i.high >= high - slack for i in intervals)


def _unstable(
    model: GuardModel, everybody: list[Species], one: Species, values: Values, changed: Sequence[str]
) -> Reason:
    names = list(changed) or [name for name in values if name != FREQUENCY or not model.frequency_fixed]
    blamed, edge, end = _nearest_edge(model, one, values, names)
    what = "outside the first stability region"
    if edge is None:
        text = f"{one.name} is {what}, and no {blamed} within its limits would change that"
    else:
        inside = motion(model.trap, one, point_of(values)).first_region
        where = f"may be {what} within the gain's uncertainty" if inside else f"is {what}"
        text = (
            f"{blamed} = {show(values[blamed], blamed)}: {one.name} {where}"
            f"{_in_q(model, one, values, blamed, edge, end)}; the region ends at {show(edge, blamed)}{_names(end)}"
        )
    return Reason(
        rule=rules.STABILITY,
        quantity=blamed,
        unit=unit_of(blamed),
        found=values[blamed],
        bound=edge,
        species=one.name,
        mode=end.mode if end else None,
        nearest=nearest_allowed(model, everybody, values, blamed),
        message=text,
    )


def _margin(model: GuardModel, everybody: list[Species], one: Species, values: Values, name: str) -> Reason:
    _, edge, end = _nearest_edge(model, one, values, [name])
    value = values[name]
    text = f"{name} = {show(value, name)}"
    if edge is None:
        text += f": {one.name} is not stable everywhere within the margin of {model.margin:.3g}"
    elif value:
        text += (
            f" is {abs(edge - value) / abs(value):.2%} from where {one.name} leaves the first stability region, "
            f"{show(edge, name)}{_names(end)}; the margin is {model.margin:.2%}, one programmable step at least"
            + (", on top of the gain's uncertainty" if model.resonator.gain_uncertainty else "")
        )
    else:
        text += f" is {show(abs(edge), name)} from an edge{_names(end)}, less than one programmable step"
    return Reason(
        rule=rules.MARGIN,
        quantity=name,
        unit=unit_of(name),
        found=value,
        bound=edge,
        species=one.name,
        mode=end.mode if end else None,
        nearest=nearest_allowed(model, everybody, values, name),
        message=text,
    )


def _nearest_edge(
    model: GuardModel, one: Species, values: Values, names: Sequence[str]
) -> tuple[str, float | None, Edge | None]:
    """Of these setpoints the one whose stable interval ends nearest, relative to its range; the end, and its cause."""
    best: tuple[float, str, float, Edge] | None = None
    for name in names:
        limit = model.limits[name]
        reach = 2 * (abs(limit.low) + abs(limit.high)) + abs(values[name])
        low, high = (
            (1e-3 * limit.low, 4 * limit.high) if limit.low > 0 else (values[name] - reach, values[name] + reach)
        )
        for interval in stable_intervals(model.trap, one, [point_of(values)], name, low, high)[0]:
            for end, cause in ((interval.low, interval.low_by), (interval.high, interval.high_by)):
                distance = abs(end - values[name]) / max(abs(limit.low), abs(limit.high))
                if cause.kind == "edge" and (best is None or distance < best[0]):
                    best = (distance, name, end, cause)
    return (names[0], None, None) if best is None else best[1:]


def _in_q(model: GuardModel, one: Species, values: Values, name: str, edge: float, end: Edge | None) -> str:
    """ " (q = 1.17, edge 0.908)" where the amplitude is to blame and the trap is not tilted."""
    q = motion(model.trap, one, point_of(values)).q
    if name != AMPLITUDE or end is None or end.mode is None or not values[AMPLITUDE] or isinstance(q[0], tuple):
        return ""
    found = abs(float(q["xyz".index(end.mode)]))
    return f" (q = {found:.4g}, edge {found * abs(edge / values[AMPLITUDE]):.4g})"


def _names(end: Edge | None) -> str:
    return f" ({end.edge} of {end.mode})" if end is not None and end.edge is not None else ""


def _rule_reasons(
    model: GuardModel, everybody: list[Species], one: Species, values: Values, changed: Sequence[str]
) -> list[Reason]:
    """The file's own rules, at both ends of the band in which the amplitude may really stand."""
    least_hz, least_ev = model.min_secular_frequency_hz, model.min_depth_ev
    if least_hz is None and least_ev is None:
        return []

    def broken(rule: str, unit: str, value: float, bound: float, mode: str | None, message: str) -> Reason:
        blamed = _easiest(model, everybody, values, changed)
        return Reason(
            rule=rule,
            quantity=blamed,
            unit=unit,
            found=value,
            bound=bound,
            species=one.name,
            mode=mode,
            nearest=nearest_allowed(model, everybody, values, blamed),
            message=message,
        )

    ends = sorted(set(amplitude_band(model, values)))
    found = motions(model.trap, one, [point_of({**values, AMPLITUDE: end}) for end in ends])
    reasons = []
    if least_hz is not None and (slowest := min(map(_slowest, found)))[0] < least_hz * (1 - _ROUNDING):
        frequency, mode = slowest
        text = (
            f"secular frequency of {one.name} along {mode} is {frequency / 1e3:.6g} kHz, "
            f"min_secular_frequency is {least_hz / 1e3:.6g} kHz"
        )
        reasons.append(broken(rules.MIN_SECULAR_FREQUENCY, "Hz", frequency, least_hz, mode, text))
    depth = min((m.depth_ev for m in found if m.depth_ev is not None), default=math.inf)
    if least_ev is not None and depth < least_ev * (1 - _ROUNDING):
        text = f"depth for {one.name} is {depth:.4g} eV (pseudopotential), min_depth is {least_ev:.4g} eV"
        reasons.append(broken(rules.MIN_DEPTH, "eV", depth, least_ev, None, text))
    return reasons


def _easiest(model: GuardModel, everybody: list[Species], values: Values, changed: Sequence[str]) -> str:
    """The setpoint to blame: of those that were changed (else of all) the one with the shortest way to an allowed value."""
    names = list(changed) or list(values)

    def way(name: str) -> float:
        nearest = nearest_allowed(model, everybody, values, name)
        limit = model.limits[name]
        return math.inf if nearest is None else abs(nearest - values[name]) / (limit.high - limit.low)

    return names[0] if len(names) == 1 else min(names, key=way)


def _slowest(found: Motion) -> tuple[float, str]:
    assert found.secular_frequencies_hz is not None  # a state outside the first region never comes here
    return min(zip(found.secular_frequencies_hz, "xyz", strict=True))
