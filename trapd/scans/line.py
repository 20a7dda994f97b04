"""The shape of a resonance in the counts: ``1 - C L``, ``L = 1 / (1 + (2 (f - f0) / w)^2)``, w the full width at half
maximum."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from trapd.scans.points import Array, Points

_LEAST = 0.01


@dataclass(frozen=True, kw_only=True)
class Line:
    """One resonance; the contrast is that of all counts, negative for a rise."""

    frequency_hz: float
    width_hz: float
    contrast: float


def shape_of(lines: Sequence[Line], points: Points) -> Array:
    """(n,) what the lines leave of the rate, never nothing."""
    taken = [line.contrast * profiles(points, line.frequency_hz, line.width_hz) for line in lines]
    shape: Array = np.maximum(1 - np.sum(taken, axis=0), _LEAST) if taken else np.ones(len(points))
    return shape


def slopes_of(lines: Sequence[Line], points: Points) -> Array:
    """(n, 3 lines) derivative of ln(shape) by f0 / w (w held), by ln w and by C of each line."""
    slopes = [_slopes(line, points) for line in lines]
    return np.hstack(slopes) / shape_of(lines, points)[:, None] if slopes else np.empty((len(points), 0))


def _slopes(line: Line, points: Points) -> Array:
    offset = np.where(points.tickled, 2 * (points.frequency_hz - line.frequency_hz) / line.width_hz, 0.0)
    profile = profiles(points, line.frequency_hz, line.width_hz)
    bend = line.contrast * profile**2
    slopes: Array = -np.stack([4 * offset * bend, 2 * offset**2 * bend, profile], axis=1)
    return slopes


def profiles(points: Points, frequency_hz: Array | float, width_hz: Array | float) -> Array:
    """(..., n) L at every point for centres and widths of shape (...); 0 where the tickle was off."""
    tickled = points.tickled
    centre, width = np.asarray(frequency_hz)[..., None], np.asarray(width_hz)[..., None]
    profile: Array = np.where(tickled, points.frequency_hz, 0.0) - centre
    profile *= 2 / width  # in place: these are the largest arrays of all
    profile *= profile
    profile += 1
    return np.divide(tickled, profile, out=profile)
