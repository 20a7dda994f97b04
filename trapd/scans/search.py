"""Many lines tried side by side: what each would explain of the counts, its contrast and the drift integrated over.

About a fit the expected counts are linear in the contrast and in small changes of the drift, so both are integrated exactly
for every centre and width: generalised least squares with the fit's own variances.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import log

import numpy as np

from trapd.scans.drift import Wander
from trapd.scans.likelihood import Bounds, Fit
from trapd.scans.line import profiles, slopes_of
from trapd.scans.points import Array, Points

_WIDTH_RATIO = 1.5  # of neighbouring widths of the search
_STEPS_A_WIDTH = 3
_FREE = 3.0  # widths, factors of e, contrast: so far the fit's own line may move as if it were free
_BLOCK = 4_000_000  # numbers in the largest array
_USUAL_CONTRAST = 1.0  # spread of the prior, dips and rises


@dataclass(frozen=True, kw_only=True)
class Cells:
    """Lines to try, (cells,) each."""

    frequency_hz: Array
    width_hz: Array


@dataclass(frozen=True, kw_only=True)
class Trial:
    """(cells,) contrast that each explains best, its information (1 / variance), and twice the log likelihood gained."""

    contrast: Array
    information: Array
    gain: Array


def cells(bounds: Bounds) -> Cells:
    """Centres a third of a width apart, from one width below the window to one above, at every width that may be."""
    count = 1 + max(1, round(log(bounds.width_high_hz / bounds.width_low_hz) / log(_WIDTH_RATIO)))
    frequencies, widths = [], []
    for width in np.geomspace(bounds.width_low_hz, bounds.width_high_hz, count):
        steps = int((bounds.high_hz - bounds.low_hz + 2 * width) / width * _STEPS_A_WIDTH) + 1
        frequencies.append(np.linspace(bounds.low_hz - width, bounds.high_hz + width, steps))
        widths.append(np.full(steps, width))
    return Cells(frequency_hz=np.concatenate(frequencies), width_hz=np.concatenate(widths))


def row(bounds: Bounds, width_hz: float) -> Cells:
    """Centres all over the window at one width."""
    steps = int((bounds.high_hz - bounds.low_hz) / width_hz * _STEPS_A_WIDTH) + 2
    return Cells(frequency_hz=np.linspace(bounds.low_hz, bounds.high_hz, steps), width_hz=np.full(steps, width_hz))


def try_another(points: Points, wander: Wander, fit: Fit, lines: Cells) -> Trial:
    """A line beside the fit's own, which may move to make room."""
    return _try(points, wander, fit, fit.mean, lines, slopes_of(fit.lines, points) * _FREE)


def try_instead(points: Points, wander: Wander, fit: Fit, lines: Cells) -> Trial:
    """A line in the place of the fit's own; the gain counts from no line at all."""
    return _try(points, wander, fit, fit.base, lines, np.empty((len(points), 0)))


def _try(points: Points, wander: Wander, fit: Fit, start: Array, lines: Cells, own: Array) -> Trial:
    """In blocks: lines times points may be more than a machine holds."""
    size = max(1, _BLOCK // len(points))
    parts = [
        _try_block(points, wander, fit, start, Cells(frequency_hz=frequency_hz, width_hz=width_hz), own)
        for frequency_hz, width_hz in zip(
            *(np.split(one, range(size, len(one), size)) for one in (lines.frequency_hz, lines.width_hz)), strict=True
        )
    ]
    return Trial(
        **{
            name: np.concatenate([getattr(part, name) for part in parts])
            for name in ("contrast", "information", "gain")
        }
    )


def _try_block(points: Points, wander: Wander, fit: Fit, start: Array, lines: Cells, own: Array) -> Trial:
    basis = np.hstack([own, wander.basis(fit.size)])
    excess = points.counts - start
    pull = basis.T @ excess - np.concatenate([np.zeros(own.shape[1]), fit.waves])
    stiffness = np.eye(basis.shape[1]) + basis.T @ (fit.mean[:, None] * basis)
    root = np.linalg.inv(np.linalg.cholesky(stiffness))
    change = profiles(points, lines.frequency_hz, lines.width_hz) * fit.base
    shared = (change @ basis) @ root.T
    score = shared @ (root @ pull) - change @ (excess / fit.mean)
    information = np.maximum((change**2) @ (1 / fit.mean) - (shared**2).sum(axis=1), 0.0) + 1 / _USUAL_CONTRAST**2
    return Trial(contrast=score / information, information=information, gain=score**2 / information)
