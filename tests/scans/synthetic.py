"""Scans that never happened: counts of a known line, for tests of what judges or draws scans."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from trapd.scans.points import Array, Points

OVERHEAD_S = 0.01
OFF_EVERY = 12


@dataclass(frozen=True, kw_only=True)
class Truth:
    """A line (contrast 0: none; negative: a rise), the rate it stands on, and how that wanders (Ornstein-Uhlenbeck)."""

    frequency_hz: float = 1e6
    width_hz: float = 2000.0
    contrast: float = 0.3
    rate_per_s: float = 15e3
    drift: float = 0.0  # relative, rms
    drift_time_s: float = 15.0


@dataclass(frozen=True, kw_only=True)
class Sweep:
    """How the scan is taken: every pass in a new random order, or upwards."""

    low_hz: float = 0.975e6
    high_hz: float = 1.025e6
    step_hz: float = 500.0
    dwell_s: float = 0.02
    passes: int = 4
    upwards: bool = False


def synthetic_scan(truth: Truth, sweep: Sweep, random: np.random.Generator) -> Points:
    """All points of all passes; three counts with the tickle off first, then one after every twelve."""
    frequency = np.concatenate([[np.nan] * 3, *(_one_pass(sweep, random) for _ in range(sweep.passes))])
    time = (np.arange(len(frequency)) + 0.5) * (sweep.dwell_s + OVERHEAD_S)
    empty = Points(frequency_hz=frequency, dwell_s=np.full(len(time), sweep.dwell_s), counts=0 * time, time_s=time)
    return replace(empty, counts=random.poisson(expected_counts(truth, empty, random)).astype(float))


def expected_counts(truth: Truth, points: Points, random: np.random.Generator) -> Array:
    """(n,) before the photons' own statistics."""
    offset = 2 * (points.frequency_hz - truth.frequency_hz) / truth.width_hz
    seen = 1 - truth.contrast * np.nan_to_num(1 / (1 + offset**2))
    return points.dwell_s * truth.rate_per_s * (1 + _wandering(truth, points.time_s, random)) * seen


def _one_pass(sweep: Sweep, random: np.random.Generator) -> Array:
    grid = np.arange(sweep.low_hz, sweep.high_hz + sweep.step_hz / 2, sweep.step_hz)
    order = grid if sweep.upwards else random.permutation(grid)
    return np.insert(order, np.arange(OFF_EVERY, len(order), OFF_EVERY), np.nan)


def _wandering(truth: Truth, time_s: Array, random: np.random.Generator) -> Array:
    noise = random.normal(size=len(time_s)) * truth.drift
    keep = np.exp(-np.diff(time_s, prepend=time_s[0]) / truth.drift_time_s)
    wandering = np.empty(len(time_s))
    now = noise[0]
    for index, (share, kick) in enumerate(zip(keep, noise, strict=True)):
        now = share * now + np.sqrt(1 - share**2) * kick if index else now
        wandering[index] = now
    return wandering


def passes_of(points: Points, passes: int, of: int) -> Points:
    """What was measured by the end of the given pass."""
    return points[: 3 + (len(points) - 3) * passes // of]
