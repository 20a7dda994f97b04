"""What the counts say of a line's centre whatever its width, contrast and rate: the marginal posterior.

Flat prior in f0 and in ln w within the bounds; contrast and drift are integrated exactly about the fit (`search`).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import log

import numpy as np

from trapd.scans.drift import Wander
from trapd.scans.likelihood import Bounds, Fit
from trapd.scans.line import Line, slopes_of
from trapd.scans.points import Array, Points
from trapd.scans.search import Cells, try_instead

_CENTRES, _WIDTHS = 81, 15
_REACH, _WIDTH_REACH = 7.0, 3.5  # standard deviations from the middle to the end of the grid
_ROUNDS = 3


@dataclass(frozen=True, kw_only=True)
class Marginal:
    """A distribution on an even grid: ``value`` and ``weight`` (grid,), weights of sum 1."""

    value: Array
    weight: Array

    @property
    def mean(self) -> float:
        return float(self.weight @ self.value)

    @property
    def deviation(self) -> float:
        """Standard deviation, not less than the grid resolves."""
        return float(np.sqrt(self.weight @ (self.value - self.mean) ** 2))

    def quantile(self, share: float) -> float:
        """The value below which the share lies; every grid point stands for the step around it."""
        step = self.value[1] - self.value[0]
        edges = np.append(self.value - step / 2, self.value[-1] + step / 2)
        return float(np.interp(share, np.append(0.0, np.cumsum(self.weight)), edges))

    def interval(self, share: float) -> tuple[float, float]:
        """With as much left out below as above."""
        return self.quantile((1 - share) / 2), self.quantile((1 + share) / 2)


def marginals(
    points: Points, wander: Wander, fit: Fit, line: Line, bounds: Bounds, dispersion: float
) -> tuple[Marginal, Marginal]:
    """Of f0 in Hz and of ln w. A dispersion above 1 widens both by its square root."""
    spread = _spread(points, wander, fit, line) * dispersion**0.5
    middle = np.array([line.frequency_hz, log(line.width_hz)])
    for _ in range(_ROUNDS):
        centre, width = _on_grid(points, wander, fit, bounds, dispersion, middle, spread)
        found = np.array([centre.deviation, width.deviation])
        middle = np.array([centre.mean, width.mean])
        if (found < 1.3 * spread).all() and found[0] > spread[0] / 2:
            break
        spread = np.maximum(found, spread / 10)
    return centre, width


def _on_grid(
    points: Points, wander: Wander, fit: Fit, bounds: Bounds, dispersion: float, middle: Array, spread: Array
) -> tuple[Marginal, Marginal]:
    reach = spread * [_REACH, _WIDTH_REACH]
    low, high = middle - reach, middle + reach
    low[1], high[1] = max(low[1], log(bounds.width_low_hz)), min(high[1], log(bounds.width_high_hz))
    far = np.exp(high[1])
    low[0], high[0] = max(low[0], bounds.low_hz - far), min(high[0], bounds.high_hz + far)
    centres, widths = np.linspace(low[0], high[0], _CENTRES), np.linspace(low[1], high[1], _WIDTHS)
    lines = Cells(frequency_hz=np.repeat(centres, _WIDTHS), width_hz=np.exp(np.tile(widths, _CENTRES)))
    trial = try_instead(points, wander, fit, lines)
    weight = trial.gain / dispersion - np.log(trial.information)
    weight = np.exp((weight - weight.max()) / 2).reshape(_CENTRES, _WIDTHS)
    weight /= weight.sum()
    return Marginal(value=centres, weight=weight.sum(axis=1)), Marginal(value=widths, weight=weight.sum(axis=0))


def _spread(points: Points, wander: Wander, fit: Fit, line: Line) -> Array:
    """(2,) first guess of the standard deviations of f0 and ln w: the inverse Fisher information, within reason."""
    basis = wander.basis(fit.size)
    slopes = np.hstack([slopes_of([line], points), basis])
    prior = np.append([1.0, 1.0, 1.0], np.ones(basis.shape[1]))
    covariance = np.linalg.inv(slopes.T @ (fit.mean[:, None] * slopes) + np.diag(prior))
    spread: Array = np.sqrt(np.diag(covariance)[:2]) * [line.width_hz, 1.0]
    return spread
