"""The way back to safety when the present state already breaks a rule.

Allowed is a way on which no broken rule worsens at any step and no new one breaks. Each broken rule has a severity:
how far a limit is exceeded, how fast an orbit grows, how much is missing of a frequency or a depth.
"""

from __future__ import annotations

from collections.abc import Iterable

from trapd.guard import rules
from trapd.guard.allowed import banded_states, point_of
from trapd.guard.limits import amplitude_band, level_of
from trapd.guard.model import GuardModel
from trapd.physics.floquet import motions
from trapd.physics.species import Species
from trapd.setpoint import AMPLITUDE, Values

Severity = dict[tuple[str, ...], float]
"""Broken rules, each named by (rule, setpoint or species, ...), with how badly it is broken."""


def severity(
    model: GuardModel, species: Iterable[Species], values: Values, stretch_hz: tuple[float, float] | None = None
) -> Severity:
    """Every broken rule of this state and how badly; empty when the state is allowed.

    ``stretch_hz``: a frequency step on the way to it, with what the amplitude does meanwhile.
    """
    broken = _limits(model, values)
    for one in species:
        broken.update(_motion(model, one, values, stretch_hz))
    return broken


def worsens(before: Severity, after: Severity) -> tuple[str, ...] | None:
    """The first rule that is newly broken or more badly broken ``after``; None when there is none."""
    for rule, value in after.items():
        if rule not in before or value > before[rule] * (1 + 1e-9):
            return rule
    return None


def _limits(model: GuardModel, values: Values) -> Severity:
    broken: Severity = {}
    for name, limit in model.limits.items():
        low = high = values[name]
        if name == AMPLITUDE:
            high = amplitude_band(model, values)[1]
        excess = max(limit.low - low, high - limit.high)
        if excess > 0:
            broken[rules.LIMIT, name] = excess
    if model.level_max_v is not None and (excess := level_of(model, values) - model.level_max_v) > 0:
        broken[rules.LEVEL, AMPLITUDE] = excess
    return broken


def _motion(model: GuardModel, one: Species, values: Values, stretch_hz: tuple[float, float] | None) -> Severity:
    broken: Severity = {}
    key: tuple[str, ...]
    states = banded_states(model, values, moving="", stretch_hz=stretch_hz, residue=())
    for state, found in zip(states, motions(model.trap, one, [point_of(s.values) for s in states]), strict=True):
        growth = found.growth_per_s or 0.0
        if state.setpoint is not None:
            if not found.first_region:
                side = "up" if state.values[state.setpoint] > values[state.setpoint] else "down"
                key = (rules.MARGIN, one.name, state.setpoint, side)
                broken[key] = max(broken.get(key, 0.0), growth)
            continue
        if not found.first_region:
            key = (rules.STABILITY, one.name)
            broken[key] = max(broken.get(key, 0.0), growth)
        if model.min_secular_frequency_hz is not None:
            missing = model.min_secular_frequency_hz - min(found.secular_frequencies_hz or (0.0,))
            if missing > 0:
                key = (rules.MIN_SECULAR_FREQUENCY, one.name)
                broken[key] = max(broken.get(key, 0.0), missing)
        if model.min_depth_ev is not None and found.depth_ev is not None and found.depth_ev < model.min_depth_ev:
            key = (rules.MIN_DEPTH, one.name)
            broken[key] = max(broken.get(key, 0.0), model.min_depth_ev - found.depth_ev)
    return broken
