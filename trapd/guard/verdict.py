"""The verdict on one state, and on a move: all reasons, what is only a warning, and the motion of every species."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from trapd.guard.allowed import point_of
from trapd.guard.contents import Watched, watched
from trapd.guard.limits import displacement, limit_reasons
from trapd.guard.model import GuardModel
from trapd.guard.motion_rules import motion_reasons, nearest_allowed
from trapd.guard.path import plan_path
from trapd.guard.rules import STABILITY
from trapd.physics.floquet import motion
from trapd.setpoint import FREQUENCY, Contents, Motion, Ramp, Reason, Values, Verdict


def judge(model: GuardModel, contents: Contents, values: Values, changed: Sequence[str] = ()) -> Verdict:
    """The verdict on a state, however it was reached. ``values`` are what the instruments will really take."""
    who = watched(model, contents)
    reasons, warnings = state_reasons(model, who, values, changed)
    return Verdict(
        accepted=not reasons,
        values=dict(values),
        reasons=tuple(reasons),
        warnings=tuple(warnings),
        species=motion_of(model, who, values),
    )


def judge_move(model: GuardModel, contents: Contents, present: Values, target: Values) -> tuple[Verdict, Ramp | None]:
    """The verdict on going from ``present`` to ``target``, and the ramp when it is accepted.

    Both states are what the instruments really take (`trapd.guard.limits.realised`). When the present state itself breaks
    a rule, a way on which no broken rule worsens and no new one breaks is accepted as *recovering*.
    """
    who = watched(model, contents)
    changed = [name for name in target if target[name] != present[name]]
    reasons, warnings = state_reasons(model, who, target, changed)
    plan = plan_path(model, who, present, target, target_is_clean=not reasons)
    if plan.recovering:
        # What comes in must be stable at the end, however badly the trap stands now.
        kept = [one for one in reasons if one.rule == STABILITY and one.species in {s.name for s in who.incoming}]
        warnings, reasons = warnings + [one for one in reasons if one not in kept], kept
    verdict = Verdict(
        accepted=not reasons and plan.ramp is not None,
        values=dict(target),
        reasons=tuple(reasons) + (tuple(plan.reasons) if not reasons else ()),
        warnings=tuple(warnings),
        species=motion_of(model, who, target),
        recovering=plan.recovering,
    )
    return verdict, plan.ramp if verdict.accepted else None


def state_reasons(
    model: GuardModel, who: Watched, values: Values, changed: Sequence[str]
) -> tuple[list[Reason], list[Reason]]:
    """What refuses this state, and what only warns."""
    reasons = limit_reasons(model, values)
    if values[FREQUENCY] <= displacement(model, values, FREQUENCY):
        return reasons, []  # no drive to speak of: a limit is broken, and there is no motion to compute
    if who.enforced:  # a limit's nearest value must suit the ions as well
        reasons = [replace(r, nearest=nearest_allowed(model, who.enforced, values, r.quantity)) for r in reasons]
    reasons += motion_reasons(model, who.enforced, values, changed)
    warnings = motion_reasons(model, who.shown, values, changed)
    for reason in motion_reasons(model, who.incoming, values, changed):
        (reasons if reason.rule == STABILITY else warnings).append(reason)
    return reasons, warnings


def motion_of(model: GuardModel, who: Watched, values: Values) -> tuple[Motion, ...]:
    """The motion of every species concerned, in the order of the catalogue where nobody is declared."""
    if values[FREQUENCY] <= 0:
        return ()
    return tuple(motion(model.trap, one, point_of(values)) for one in who.everybody)
