"""The verdict on a scan: the present state, and all that the scan may tell the tickle."""

from __future__ import annotations

from dataclasses import replace

from trapd.guard import rules
from trapd.guard.limits import show
from trapd.guard.model import GuardModel, TickleLimits
from trapd.guard.verdict import judge
from trapd.setpoint import FREQUENCY, TICKLE, Contents, Envelope, Reason, Values, Verdict

_ROUNDING = 1e-9  # relative: a limit that went through the instrument's unit is still the limit


def judge_tickle(model: GuardModel, contents: Contents, values: Values, envelope: Envelope) -> Verdict:
    """The verdict on tickling what is held in the state ``values`` by anything within ``envelope``.

    A state that breaks a rule is not tickled: the motion grows, and the margin is what it grows into.
    """
    verdict = judge(model, contents, values)
    reasons = (*verdict.reasons, *tickle_reasons(model, values, envelope))
    return replace(verdict, accepted=not reasons, reasons=reasons)


def tickle_reasons(model: GuardModel, values: Values, envelope: Envelope) -> list[Reason]:
    """Every rule on the tickle that the envelope breaks. A trap without a tickle breaks the first of them."""
    limits = model.tickle or TickleLimits(level_max_v=0.0)
    checks = (_level(limits, envelope), _band(limits, envelope, values[FREQUENCY] / 2), _burst(limits, envelope))
    return [reason for reason in checks if reason is not None]


def _level(limits: TickleLimits, envelope: Envelope) -> Reason | None:
    if 0.0 < envelope.level_v <= limits.level_max_v * (1 + _ROUNDING):
        return None
    message = f"the tickle's level {envelope.level_v:.4g} V is over {limits.level_max_v:.4g} V"
    if envelope.level_v <= 0.0:
        message = "the tickle is weaker than the least step of its generator: it would be none at all"
    return Reason(
        rule=rules.TICKLE_LEVEL,
        quantity=TICKLE,
        unit="V",
        found=envelope.level_v,
        bound=limits.level_max_v,
        message=message,
    )


def _band(limits: TickleLimits, envelope: Envelope, half_drive_hz: float) -> Reason | None:
    low_hz, high_hz = limits.frequency_hz[0], min(limits.frequency_hz[1], half_drive_hz)
    if low_hz <= envelope.low_hz <= envelope.high_hz <= high_hz:
        return None
    found, bound = (envelope.low_hz, low_hz) if envelope.low_hz < low_hz else (envelope.high_hz, high_hz)
    return Reason(
        rule=rules.TICKLE_BAND,
        quantity=TICKLE,
        unit="Hz",
        found=found,
        bound=bound,
        message=f"the tickle would reach {show(found, FREQUENCY)}; its generator and half the drive frequency allow "
        f"{show(low_hz, FREQUENCY)} to {show(high_hz, FREQUENCY)}",
    )


def _burst(limits: TickleLimits, envelope: Envelope) -> Reason | None:
    low_s, high_s = limits.burst_s or (0.0, 0.0)
    if low_s <= envelope.burst_s <= high_s:
        return None
    able = f"{low_s:.4g} to {high_s:.4g} s" if limits.burst_s else "no bursts that end by themselves"
    return Reason(
        rule=rules.TICKLE_BURST,
        quantity=TICKLE,
        unit="s",
        found=envelope.burst_s,
        bound=high_s,
        message=f"the scan needs bursts of {envelope.burst_s:.4g} s; its generator can do {able}",
    )
