"""What a tickle scan has found: the judgement of everything measured so far, a pure function of points and question."""

from __future__ import annotations

from dataclasses import replace
from math import log

import numpy as np

from trapd.scans.evidence import Evidence, gather, second_ratio
from trapd.scans.finding import Finding, Question, State
from trapd.scans.flags import FLAGS
from trapd.scans.likelihood import Fit
from trapd.scans.line import Line, slopes_of
from trapd.scans.points import Array, Points
from trapd.scans.posterior import Marginal, marginals
from trapd.scans.search import row, try_another
from trapd.scans.vanishing import first_lost

__all__ = ["FIT_VERSION", "FLAGS", "Finding", "Question", "State", "estimate", "is_enough"]

FIT_VERSION = "uniform-1"
"""Changes whenever a number that `estimate` gives may change."""

_CONFIDENT, _SECOND = 35.0, 25.0  # likelihood ratios, 2 ln(L1/L0)
_BLENDED = 14.0  # where the line is too wide already: one in 1,000 by chance at one place
_NO_NUMBER, _EDGE = 0.25, 1.0  # widths inside the window
_BROADENED, _NARROWED = 1.5, 0.6  # of the expected width
_REFUSED = 2.0  # dispersion
_DEEP = 0.5  # contrast
_DRIFTING = 0.01  # rms of the fitted drift
_FEWEST_POINTS = 12
_FEWEST_PASSES = 3  # one that stops earlier stops more often on a lucky line
_NEAR_LOSS = 1.5  # widths


def estimate(points: Points, question: Question) -> Finding:
    """The judgement of all ``points`` measured so far, in any order."""
    points = points[np.argsort(points.time_s, kind="stable")]
    lost = (
        first_lost(points, question.floor_per_s, question.dark_per_s, question.width_high_hz) if len(points) else None
    )
    if lost is not None:
        return _vanished(points, lost, question)
    return _judged(points, question)


def is_enough(finding: Finding, question: Question, passes: int) -> bool:
    """Whether a scan may stop after this pass, without stopping on a lucky one."""
    if passes < _FEWEST_PASSES or finding.state in ("unclear", "vanished"):
        return finding.state == "vanished"
    if finding.state == "none":
        return finding.contrast_limit is not None and finding.contrast_limit < question.min_contrast
    reached = question.target_hz is not None and (finding.uncertainty_hz or np.inf) <= question.target_hz
    return bool(reached and (finding.likelihood_ratio or 0) >= _CONFIDENT)


def _judged(points: Points, question: Question) -> Finding:
    if points.tickled.sum() < _FEWEST_POINTS or not points.counts.any():
        return Finding(
            state="unclear", flags=("too_few_points",), message=f"{len(points)} points are too few to judge."
        )
    evidence = gather(points, question)
    dispersion = evidence.dispersion
    ratio = evidence.ratio(dispersion)
    if ratio < evidence.threshold:
        return _nothing(evidence, dispersion, ratio)
    return _something(evidence, dispersion, ratio)


def _nothing(evidence: Evidence, dispersion: float, ratio: float) -> Finding:
    question, null = evidence.question, evidence.null
    trial = try_another(evidence.points, evidence.drift, null, row(evidence.bounds, question.width_hz))
    limit = float((np.abs(trial.contrast) + 1.645 * np.sqrt(dispersion / trial.information)).max())
    flags = _fit_flags(evidence, null, dispersion)
    message = f"No resonance: a contrast above {limit:.1%} is excluded everywhere in the window (95 %)."
    if limit >= question.min_contrast:
        flags.append("not_excluded")
        message = (
            f"No resonance seen, but only a contrast above {limit:.1%} is excluded (95 %), not yet the"
            f" {question.min_contrast:.1%} asked for."
        )
    state: State = "none"
    if dispersion > _REFUSED:
        state, message = "unclear", _scattered(dispersion)
    return Finding(
        state=state,
        flags=tuple(flags),
        message=message,
        rate_per_s=_rate(evidence, null),
        likelihood_ratio=ratio,
        contrast_limit=limit,
    )


def _something(evidence: Evidence, dispersion: float, ratio: float) -> Finding:
    points, best = evidence.points, evidence.best
    centre, log_width = marginals(points, evidence.drift, best, evidence.line, evidence.bounds, dispersion)
    finding = _measured(evidence, centre, ratio)
    flags = _fit_flags(evidence, best, dispersion) + _line_flags(finding, log_width, evidence.question)
    if _inside(centre.mean, evidence) < _EDGE:
        flags.append("at_the_edge")
    second = second_ratio(evidence) / dispersion
    if second > _SECOND or ("broadened" in flags and second > _BLENDED):
        flags.append("two_lines")
    why = _refusal(evidence, centre, dispersion, flags)
    if why is not None:
        return _without_number(finding, "unclear", why, flags)
    return replace(finding, flags=tuple(flags))


def _measured(evidence: Evidence, centre: Marginal, ratio: float) -> Finding:
    best, line, rate = evidence.best, evidence.line, _rate(evidence, evidence.best)
    return Finding(
        state="found",
        message=f"Resonance at {centre.mean:.0f} Hz, standard uncertainty {centre.deviation:.0f} Hz.",
        frequency_hz=centre.mean,
        uncertainty_hz=centre.deviation,
        interval_68_hz=centre.interval(0.68),
        interval_95_hz=centre.interval(0.95),
        at_s=_at_s(evidence.points, best, line),
        width_hz=line.width_hz,
        contrast=line.contrast * (rate + evidence.question.dark_per_s) / rate,
        rate_per_s=rate,
        likelihood_ratio=ratio,
    )


def _inside(centre_hz: float, evidence: Evidence) -> float:
    """How many widths inside the window; negative outside."""
    question = evidence.question
    return min(centre_hz - question.low_hz, question.high_hz - centre_hz) / evidence.line.width_hz


def _refusal(evidence: Evidence, centre: Marginal, dispersion: float, flags: list[str]) -> str | None:
    """Why there is no number; None where there is one."""
    low, high = centre.interval(0.95)
    if dispersion > _REFUSED:
        return _scattered(dispersion)
    if (
        _inside(centre.mean, evidence) < _NO_NUMBER
        or low < evidence.question.low_hz
        or high > evidence.question.high_hz
    ):
        return f"Something answers near {centre.mean:.0f} Hz, at or beyond the window's edge: widen or move the window."
    if "two_lines" in flags:
        return f"Two lines answer, one of them near {centre.mean:.0f} Hz: which is meant cannot be told."
    return None


def _without_number(finding: Finding, state: State, message: str, flags: list[str]) -> Finding:
    return replace(
        finding,
        state=state,
        message=message,
        flags=tuple(flags),
        frequency_hz=None,
        uncertainty_hz=None,
        interval_68_hz=None,
        interval_95_hz=None,
        at_s=None,
    )


def _scattered(dispersion: float) -> str:
    return f"No number: the counts scatter {dispersion:.1f} times as much as one line on a slow drift allows."


def _fit_flags(evidence: Evidence, best: Fit, dispersion: float) -> list[str]:
    flags = ["poor_fit"] if dispersion > 1 else []
    drifted = np.log(best.base / evidence.points.dwell_s).std()
    return [*flags, "drifting_rate"] if drifted > _DRIFTING else flags


def _line_flags(finding: Finding, log_width: Marginal, question: Question) -> list[str]:
    """Of strength and width; of the width only when it is certain enough to say so."""
    expected = log(question.width_hz)
    raised = {
        "low_confidence": (finding.likelihood_ratio or 0.0) < _CONFIDENT,
        "deep": (finding.contrast or 0.0) > _DEEP,
        "broadened": log_width.quantile(0.16) > expected + log(_BROADENED),
        "narrowed": log_width.quantile(0.84) < expected + log(_NARROWED),
    }
    return [name for name, is_so in raised.items() if is_so]


def _rate(evidence: Evidence, best: Fit) -> float:
    """Per second, far from the line, the known dark rate taken off."""
    return max(float((best.base / evidence.points.dwell_s).mean()) - evidence.question.dark_per_s, 1e-9)


def _at_s(points: Points, best: Fit, line: Line) -> float:
    """The mean time, each point weighted by what it says of the centre (its Fisher information)."""
    weight = best.mean * slopes_of([line], points)[:, 0] ** 2
    return float((weight @ points.time_s) / weight.sum())


def _vanished(points: Points, lost: int, question: Question) -> Finding:
    """What was seen before the counts vanished; never a number that the loss itself may have made."""
    when = points.time_s[lost]
    message = f"The counts vanished {when:.1f} s after the scan began."
    before = points[: max(lost - 1, 0)]
    seen = before.frequency_hz[before.tickled]
    if len(seen) < 2 * _FEWEST_POINTS or np.ptp(seen) <= 0:
        return Finding(state="vanished", flags=("counts_vanished",), message=message)
    window = replace(question, low_hz=max(question.low_hz, seen.min()), high_hz=min(question.high_hz, seen.max()))
    finding = _judged(before, window)
    flags = ["counts_vanished", *finding.flags]
    near = points.frequency_hz[max(lost - 2, 0) : lost + 2]
    if finding.state != "found" or _on_the_line(near[np.isfinite(near)], finding):
        return _without_number(finding, "vanished", message, flags)
    message += f" Before that, a resonance at {finding.frequency_hz:.0f} Hz."
    return replace(finding, state="vanished", message=message, flags=tuple(flags))


def _on_the_line(frequencies: Array, finding: Finding) -> bool:
    width, centre = finding.width_hz or 0.0, finding.frequency_hz or 0.0
    return bool((np.abs(frequencies - centre) < _NEAR_LOSS * width).any()) or "at_the_edge" in finding.flags
