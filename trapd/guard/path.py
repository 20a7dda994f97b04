"""The way from one state to another: one setpoint at a time, in an order in which every stretch is proved."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

from trapd.guard import rules
from trapd.guard.contents import Watched
from trapd.guard.leg import hazard_reason, leg_reason, stretch_reason
from trapd.guard.limits import show, step_reasons
from trapd.guard.model import GuardModel
from trapd.guard.ramp import leg_steps
from trapd.guard.recovering import Severity, severity, worsens
from trapd.setpoint import FREQUENCY, Ramp, Reason, Step, Values, unit_of

MOST_LEGS = 400
"""Stretches judged before the search for an order gives up; six setpoints have 192 at most."""


@dataclass(frozen=True, kw_only=True)
class Plan:
    """``ramp`` is None when no way was found; then ``reasons`` say where the ways tried break."""

    ramp: Ramp | None
    reasons: tuple[Reason, ...] = ()
    recovering: bool = False


@dataclass
class _Search:
    """Depth first over orders to a target that is allowed; what failed once from the same place is not tried again."""

    model: GuardModel
    who: Watched
    target: Values
    legs: int = 0
    failed: dict[tuple[str, frozenset[str]], Reason] = field(default_factory=dict)

    def order(self, values: Values, rest: tuple[str, ...], moved: tuple[str, ...]) -> list[Step] | None:
        if not rest:
            return []
        for name in rest:
            key = (name, frozenset(rest))
            if key in self.failed or self.legs >= MOST_LEGS:
                continue
            self.legs += 1
            steps = leg_steps(self.model, values, name, self.target[name])
            reason = leg_reason(self.model, self.who, values, steps, residue=moved, clean_end=len(rest) == 1)
            if reason is None:
                there = {**values, name: self.target[name]}
                onward = self.order(there, tuple(other for other in rest if other != name), (*moved, name))
                if onward is not None:
                    return steps + onward
                reason = Reason(rule=rules.PATH, quantity=name, unit=unit_of(name), found=None, bound=None, message="")
            self.failed[key] = reason
        return None


def plan_path(model: GuardModel, who: Watched, present: Values, target: Values, *, target_is_clean: bool) -> Plan:
    """A ramp from ``present`` to ``target`` on which every stretch lies in one allowed interval.

    When ``present`` is not allowed itself the way may be *recovering* (see `trapd.guard.recovering`). Where
    ``target`` is not allowed and ``present`` is, there is nothing to plan: no ramp, no reasons of its own.
    """
    moved = tuple(name for name in target if target[name] != present[name])
    if not moved:
        return Plan(ramp=Ramp(start=dict(present), target=dict(target), steps=()) if target_is_clean else None)
    reasons = step_reasons(model, target, list(moved)) + _fixed_frequency(model, who, present, target)
    if reasons:
        return Plan(ramp=None, reasons=tuple(reasons))
    broken = severity(model, who.enforced, present)
    if broken:
        return _recover(model, who, present, target, moved, broken)
    if not target_is_clean:
        return Plan(ramp=None)
    search = _Search(model=model, who=who, target=target)
    steps = search.order(present, moved, ())
    if steps is not None:
        return Plan(ramp=Ramp(start=dict(present), target=dict(target), steps=tuple(steps)))
    return Plan(ramp=None, reasons=tuple(reason for reason in search.failed.values() if reason.message))


def _fixed_frequency(model: GuardModel, who: Watched, present: Values, target: Values) -> list[Reason]:
    if not model.frequency_fixed or not (who.enforced or who.incoming) or target[FREQUENCY] == present[FREQUENCY]:
        return []
    return [
        Reason(
            rule=rules.FIXED_FREQUENCY,
            quantity=FREQUENCY,
            unit="Hz",
            found=target[FREQUENCY],
            bound=present[FREQUENCY],
            nearest=present[FREQUENCY],
            message=f"{FREQUENCY} = {show(target[FREQUENCY], FREQUENCY)}: with a flat gain it stays at "
            f"{show(present[FREQUENCY], FREQUENCY)} while ions are in the trap",
        )
    ]


def _recover(
    model: GuardModel, who: Watched, present: Values, target: Values, moved: tuple[str, ...], broken: Severity
) -> Plan:
    """Whole moves in the order that worsens nothing, each judged at every step."""
    worse = worsens(broken, severity(model, who.enforced, target))
    if worse is not None:  # and before a way to a senseless target is cut into steps
        return Plan(ramp=None, reasons=(_worse_reason(moved[0], target[moved[0]], worse, broken),))
    values, rest, steps = dict(present), list(moved), list[Step]()
    reasons = list[Reason]()
    while rest:
        for name in rest:
            leg = leg_steps(model, values, name, target[name])
            reason = _recovering_leg_reason(model, who, values, leg)
            if reason is None:
                values[name] = target[name]
                steps += leg
                rest.remove(name)
                break
            reasons.append(reason)
        else:
            return Plan(ramp=None, reasons=tuple(reasons), recovering=False)
    return Plan(ramp=Ramp(start=dict(present), target=dict(target), steps=tuple(steps)), recovering=True)


def _recovering_leg_reason(model: GuardModel, who: Watched, values: Values, steps: list[Step]) -> Reason | None:
    before = severity(model, who.enforced, values)
    if not before:
        return leg_reason(model, who, values, steps, residue=(), clean_end=False)
    # A species that is well is proved as on any other way; the broken rules are followed in half steps.
    well = [one for one in who.enforced if not any(one.name in rule for rule in before)]
    reason = hazard_reason(model, who, values, steps) or stretch_reason(model, well, values, steps, (), limits=False)
    if reason is not None:
        return reason
    name, last = steps[-1].setpoint, values[steps[-1].setpoint]
    for value in half_steps(last, steps):
        stretch = (min(last, value), max(last, value)) if name == FREQUENCY else None
        after = severity(model, who.enforced, {**values, name: value}, stretch)
        worse = worsens(before, after)
        if worse is not None:
            return _worse_reason(name, value, worse, before)
        before, last = after, value
    return None


def _worse_reason(name: str, value: float, worse: tuple[str, ...], broken: Severity) -> Reason:
    return Reason(
        rule=rules.PATH,
        quantity=name,
        unit=unit_of(name),
        found=value,
        bound=None,
        message=f"{name} = {show(value, name)} on the way makes it worse: {', '.join(worse)}; the present state "
        f"already breaks {', '.join(sorted({rule[0] for rule in broken}))}",
    )


def half_steps(start: float, steps: list[Step]) -> Iterator[float]:
    """Every step's value, and the middle of the way to it."""
    for step in steps:
        yield (start + step.value) / 2
        yield step.value
        start = step.value
