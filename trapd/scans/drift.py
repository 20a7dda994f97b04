"""A count rate that wanders by a few percent while the scan lasts: its logarithm as cosines over the scan's time.

The prior is that of an Ornstein-Uhlenbeck process: on an interval T, cosine j of angular frequency ``omega = pi j / T`` has
the variance ``4 s^2 tau / T / (1 + (omega tau)^2)``, s the relative size and tau the memory (Wiener-Khinchin [mem]). Over
times shorter than tau only s^2/tau matters, so one tau serves.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import pi

import numpy as np

from trapd.scans.points import Array, Points

SIZES = (0.0, 0.007, 0.015, 0.03, 0.06)  # relative; the data choose
_MEMORY_S = 15.0
_FREE = 10.0  # spread of the constant: the rate itself is not known
_MOST_WAVES = 40


@dataclass(frozen=True, kw_only=True)
class Wander:
    """What the rate may do: ``waves`` (n, k), the first constant; ``spreads`` (sizes, k), their standard deviations."""

    waves: Array
    spreads: Array

    def basis(self, size: int) -> Array:
        """(n, k) waves in units of their spread; without drift only the constant."""
        spread = self.spreads[size]
        basis: Array = (self.waves * spread)[:, spread > 0]
        return basis

    def evidence(self, counts: Array, mean: Array) -> Array:
        """(sizes,) ln of how well each size of drift explains ``counts`` (n,) against ``mean`` (n,), drift integrated over."""
        pull = self.waves.T @ (counts - mean)
        stiffness = self.waves.T @ (mean[:, None] * self.waves)
        return np.array([_gain(spread * pull, _whitened(spread, stiffness)) for spread in self.spreads])


def wander(points: Points) -> Wander:
    """The waves of this scan."""
    start = points.time_s.min()
    duration = max(float(points.time_s.max() - start), 1e-9)
    j = np.arange(1 + min(len(points) // 4, _MOST_WAVES))
    waves = np.cos(pi * j * ((points.time_s - start) / duration)[:, None])
    spreads = np.sqrt(4 * _MEMORY_S / duration / (1 + (pi * j * _MEMORY_S / duration) ** 2)) * np.array(SIZES)[:, None]
    spreads[:, 0] = _FREE
    return Wander(waves=waves, spreads=spreads)


def _whitened(spread: Array, stiffness: Array) -> Array:
    whitened: Array = np.eye(len(spread)) + spread[:, None] * stiffness * spread
    return whitened


def _gain(pull: Array, stiffness: Array) -> float:
    return float(pull @ np.linalg.solve(stiffness, pull) - np.linalg.slogdet(stiffness)[1]) / 2
