"""Poisson maximum likelihood of a scan: a rate that wanders, with any number of lines.

``counts ~ Poisson(dwell rate(t) (1 - sum C L))``, Fisher scoring, damped where it does not gain. The evidence
integrates the drift by Laplace's method and leaves f0, w and C at their best, so twice a difference of two is a likelihood
ratio.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import log

import numpy as np

from trapd.scans.drift import Wander
from trapd.scans.line import Line, shape_of, slopes_of
from trapd.scans.points import Array, Points

_STEPS = 25
_STUCK = 1e4  # damping
_SETTLED = 1e-5  # gain of log likelihood that is not worth another step
_DEEPEST, _HIGHEST = 0.98, -8.0  # contrasts


@dataclass(frozen=True, kw_only=True)
class Bounds:
    """Where a line's centre and width may be."""

    low_hz: float
    high_hz: float
    width_low_hz: float
    width_high_hz: float

    def clip(self, centre_hz: float, log_width: float, contrast: float) -> Line:
        width = float(np.exp(np.clip(log_width, log(self.width_low_hz), log(self.width_high_hz))))
        centre = float(np.clip(centre_hz, self.low_hz - width, self.high_hz + width))
        return Line(frequency_hz=centre, width_hz=width, contrast=min(_DEEPEST, max(_HIGHEST, contrast)))


@dataclass(frozen=True, kw_only=True)
class Fit:
    """The best description found, and how good it is."""

    lines: tuple[Line, ...]
    size: int  # index of the drift's size in drift.SIZES
    base: Array  # (n,) expected counts without the lines
    mean: Array  # (n,) expected counts
    waves: Array  # (k,) coefficients of the drift, in units of their spread
    evidence: float  # ln
    freedom: float  # degrees of freedom left

    def dispersion(self, points: Points) -> float:
        """Pearson's chi squared for each degree of freedom. The deviance is biased at few counts; this is not."""
        return float((((points.counts - self.mean) ** 2) / self.mean).sum() / self.freedom)


@dataclass(frozen=True, kw_only=True)
class _Guess:
    """One description on the way to the best."""

    lines: tuple[Line, ...]
    waves: Array
    base: Array
    mean: Array
    value: float  # ln likelihood, and ln prior of the drift


def fit(points: Points, wander: Wander, size: int, lines: tuple[Line, ...], bounds: Bounds) -> Fit:
    """The most likely rate, drift of the given size and, from ``lines`` on, the most likely lines."""
    basis = wander.basis(size)
    plain: Array = points.dwell_s * (points.counts.sum() / (points.dwell_s * shape_of(lines, points)).sum())
    guess, damping = _guess(points, plain, basis, lines, np.zeros(basis.shape[1])), 0.0
    for _ in range(_STEPS):
        step = _scoring_step(points, basis, guess, damping)
        waves = guess.waves + step[3 * len(lines) :]
        tried = _guess(points, plain, basis, _moved(guess.lines, step, bounds), waves)
        gain = tried.value - guess.value
        if gain > 0:
            guess, damping = tried, damping / 10
        else:
            damping = max(10 * damping, 1e-2)
        if abs(gain) < _SETTLED or damping > _STUCK:
            break
    return _finished(guess, size, basis)


def _guess(points: Points, plain: Array, basis: Array, lines: tuple[Line, ...], waves: Array) -> _Guess:
    base = plain * np.exp(np.clip(basis @ waves, -20.0, 20.0))
    mean = base * shape_of(lines, points)
    value = float(points.counts @ np.log(mean) - mean.sum() - waves @ waves / 2)
    return _Guess(lines=lines, waves=waves, base=base, mean=mean, value=value)


def _finished(guess: _Guess, size: int, basis: Array) -> Fit:
    stiffness = np.eye(basis.shape[1]) + basis.T @ (guess.mean[:, None] * basis)
    held = float(np.trace(np.linalg.inv(stiffness)))  # waves that the prior decides, not the counts
    return Fit(
        lines=guess.lines,
        size=size,
        base=guess.base,
        mean=guess.mean,
        waves=guess.waves,
        evidence=guess.value - float(np.linalg.slogdet(stiffness)[1]) / 2,
        freedom=max(len(guess.mean) - 3 * len(guess.lines) - basis.shape[1] + held, 1.0),
    )


def _scoring_step(points: Points, basis: Array, guess: _Guess, damping: float) -> Array:
    """(3 lines + k,) The lines' own parameters are damped; the drift holds itself by its prior."""
    slopes = np.hstack([slopes_of(guess.lines, points), basis])
    free = 3 * len(guess.lines)
    pull = slopes.T @ (points.counts - guess.mean)
    pull[free:] -= guess.waves
    information = slopes.T @ (guess.mean[:, None] * slopes)
    diagonal = np.ones(len(pull))
    diagonal[:free] = 1e-9 + damping * np.diag(information)[:free]
    return np.linalg.solve(information + np.diag(diagonal), pull).astype(np.float64)


def _moved(lines: tuple[Line, ...], step: Array, bounds: Bounds) -> tuple[Line, ...]:
    return tuple(_nudged(line, step[3 * index : 3 * index + 3], bounds) for index, line in enumerate(lines))


def _nudged(line: Line, step: Array, bounds: Bounds) -> Line:
    shift, stretch = np.clip(step[:2], -0.5, 0.5)
    centre = line.frequency_hz + line.width_hz * float(shift)
    return bounds.clip(centre, log(line.width_hz) + float(stretch), line.contrast + float(step[2]))
