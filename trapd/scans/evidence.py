"""The descriptions of a scan that compete: no line, one, two, each with the size of drift that suits it."""

from __future__ import annotations

from dataclasses import dataclass
from math import log, sqrt

from trapd.scans.drift import Wander, wander
from trapd.scans.finding import Question
from trapd.scans.likelihood import Bounds, Fit, fit
from trapd.scans.line import Line, shape_of
from trapd.scans.points import Points
from trapd.scans.search import cells, try_another

_DETECTED = 25.0  # likelihood ratio, 2 ln(L1/L0)
_FALSE_ALARM = 14.0  # plus 2 ln(widths in the window): one false detection in 1,000

_HALF_APART, _HALF_WIDTH = 0.25, 0.6  # of the width of two blended lines


@dataclass(frozen=True, kw_only=True)
class Evidence:
    """What the judgement rests on: the best description without a line, ``null``, and with one, ``best``."""

    points: Points
    question: Question
    bounds: Bounds
    drift: Wander
    null: Fit
    best: Fit

    @property
    def line(self) -> Line:
        """The line, whether it is believed or not."""
        return self.best.lines[0]

    @property
    def dispersion(self) -> float:
        """Of the better description; 1 where it is no larger than chance allows."""
        best = self.best if self.ratio(1.0) >= self.threshold else self.null
        found = best.dispersion(self.points)
        chance = sqrt((2 + float((1 / best.mean).mean())) / best.freedom)
        return found if found > 1 + 2 * chance else 1.0

    def ratio(self, dispersion: float) -> float:
        """2 ln(L1/L0), scatter beyond chance taken into account."""
        return 2 * (self.best.evidence - self.null.evidence) / dispersion

    @property
    def threshold(self) -> float:
        """The ratio from which on a line is found."""
        widths = (self.question.high_hz - self.question.low_hz) / self.question.width_hz
        return max(_DETECTED, _FALSE_ALARM + 2 * log(max(widths, 1.0)))


def gather(points: Points, question: Question) -> Evidence:
    """The best descriptions of these points without a line and with one."""
    bounds = Bounds(
        low_hz=question.low_hz,
        high_hz=question.high_hz,
        width_low_hz=question.width_low_hz,
        width_high_hz=question.width_high_hz,
    )
    drift = wander(points)
    nulls = [fit(points, drift, size, (), bounds) for size in sorted({0, _best_size(points, drift, ())})]
    ones = [_with_another(points, drift, null, bounds) for null in nulls]
    return Evidence(points=points, question=question, bounds=bounds, drift=drift, null=_best(nulls), best=_best(ones))


def second_ratio(evidence: Evidence) -> float:
    """2 ln(L2/L1) of a second line: anywhere, or so near that the two look like one wide line."""
    points, drift, best, bounds = evidence.points, evidence.drift, evidence.best, evidence.bounds
    starts = [best] if best.size == 0 else [best, fit(points, drift, 0, best.lines, bounds)]
    pairs = [_with_another(points, drift, one, bounds) for one in starts]
    if evidence.line.width_hz > evidence.question.width_hz:
        pairs.append(_fit_any(points, drift, best.size, _halves(evidence.line, bounds), bounds))
    return 2 * (_best(pairs).evidence - best.evidence)


def _halves(line: Line, bounds: Bounds) -> tuple[Line, ...]:
    """Two lines that together look much like the given one: where a fit of two finds its way from."""
    apart, width = line.width_hz * _HALF_APART, log(line.width_hz * _HALF_WIDTH)
    return tuple(bounds.clip(line.frequency_hz + side * apart, width, line.contrast / 2) for side in (-1, 1))


def _best(fits: list[Fit]) -> Fit:
    return max(fits, key=lambda one: one.evidence)


def _best_size(points: Points, drift: Wander, lines: tuple[Line, ...]) -> int:
    """The size of drift that explains best what the lines leave."""
    mean = points.dwell_s * shape_of(lines, points)
    return int(drift.evidence(points.counts, mean * (points.counts.sum() / mean.sum())).argmax())


def _with_another(points: Points, drift: Wander, before: Fit, bounds: Bounds) -> Fit:
    """The most likely line beside those there are already, from the best of a search on."""
    tried = cells(bounds)
    trial = try_another(points, drift, before, tried)
    top = int(trial.gain.argmax())
    line = bounds.clip(float(tried.frequency_hz[top]), log(tried.width_hz[top]), float(trial.contrast[top]))
    return _fit_any(points, drift, before.size, (*before.lines, line), bounds)


def _fit_any(points: Points, drift: Wander, size: int, lines: tuple[Line, ...], bounds: Bounds) -> Fit:
    """The most likely lines with this size of drift, or with the one that then explains best what they leave."""
    found = fit(points, drift, size, lines, bounds)
    better = _best_size(points, drift, found.lines)
    return found if better == size else _best([found, fit(points, drift, better, found.lines, bounds)])
