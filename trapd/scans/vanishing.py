"""Whether the counts fell to about the dark rate and stayed there: looked for before anything is fitted."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from trapd.scans.points import Array, Points

_FEWEST = 3  # points in a row that are dark
_FEW = 8  # points in a row that tell the usual rate
_CERTAIN = 12.0  # log likelihood ratio
_DARK, _DIM = 0.5, 1.7  # of the limit: the rates that are told apart
_UNKNOWN_LIMIT = 0.1  # of the usual rate, where neither floor nor dark rate is known
_APART = 2.0  # widest widths; no single line darkens points farther apart


def first_lost(points: Points, floor_per_s: float, dark_per_s: float, width_high_hz: float) -> int | None:
    """Index of the first point without an ion's counts; None while they are there.

    ``points`` in order of time. A dark stretch counts when it lasts to the end, or holds what no single line can darken:
    tickle-off counts, or frequencies far apart.
    """
    limit = _limit(points, floor_per_s, dark_per_s)
    darkness = limit * points.dwell_s * (_DIM - _DARK) - points.counts * np.log(_DIM / _DARK)
    for first, last in _stretches(darkness):
        if _is_lost(points[first : last + 1], last == len(points) - 1, width_high_hz):
            return first
    return None


def _limit(points: Points, floor_per_s: float, dark_per_s: float) -> float:
    """Counts per second below which nobody is home."""
    usual = _usual(points)
    if floor_per_s > 0:
        return floor_per_s
    if dark_per_s > 0:
        return min(2 * dark_per_s, (dark_per_s + max(usual, dark_per_s)) / 2)
    return max(_UNKNOWN_LIMIT * usual, 1e-9)


def _usual(points: Points) -> float:
    """Counts per second in the brightest few points in a row: there were an ion's counts, if ever."""
    few = min(_FEW, len(points))
    return float(
        (np.convolve(points.counts, np.ones(few), "valid") / np.convolve(points.dwell_s, np.ones(few), "valid")).max()
    )


def _stretches(darkness: Array) -> list[tuple[int, int]]:
    """First and last index of every stretch whose summed darkness is certain (cumulative sums, restarted below 0)."""
    found, total, first, best, last = [], 0.0, 0, 0.0, 0
    for index, step in enumerate([*darkness, -np.inf]):
        if total <= 0:
            total, first, best = 0.0, index, 0.0
        total += step
        if total > best:
            best, last = total, index
        if total <= 0 < best or total < best - _CERTAIN:
            if best > _CERTAIN and last - first + 1 >= _FEWEST:
                found.append((first, last))
            total = best = 0.0
    return found


def _is_lost(dark: Points, to_the_end: bool, width_high_hz: float) -> bool:
    tickled: NDArray[np.bool_] = dark.tickled
    if to_the_end or not tickled.all():
        return True
    return float(np.ptp(dark.frequency_hz)) > _APART * width_high_hz
