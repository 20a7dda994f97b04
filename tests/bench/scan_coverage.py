"""Whether a scan states its uncertainty truly: seeded scans of the simulated ion, beside a least-squares fit of its points.

Each scan has a rack of its own; the truth is the spectrum of its ion's orbit. ``TRAPD_SCANS`` scans (1,000) under each
condition, in every core; the goals are for 1,000.
"""

from __future__ import annotations

import multiprocessing
import os
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from scipy.optimize import curve_fit
from threadpoolctl import threadpool_limits

from tests.scans.simulated import SECTION, SimulatedBench
from trapd.scans.points import Array, Points

SCANS = int(os.environ.get("TRAPD_SCANS", "1000"))
DRIFT = 0.03
AWAY_HZ = 300e3
"""From the line of x: above all three modes."""

GROSS = 5.0  # standard uncertainties
_CHUNK = 5


@dataclass(frozen=True, kw_only=True)
class Condition:
    name: str
    intensity_rms: float = 0.0
    away_hz: float = 0.0


CONDITIONS = (
    Condition(name="quiet light"),
    Condition(name="light drifts 3 %", intensity_rms=DRIFT),
    Condition(name="empty window, quiet light", away_hz=AWAY_HZ),
    Condition(name="empty window, light drifts 3 %", away_hz=AWAY_HZ, intensity_rms=DRIFT),
)


@dataclass(frozen=True, kw_only=True)
class Judged:
    """One scan: what was found, how far from the truth, and the same of a least-squares fit (NaN where it failed)."""

    seed: int
    state: str
    flags: tuple[str, ...]
    points: int
    error_hz: float
    uncertainty_hz: float
    is_within_68: bool
    is_within_95: bool
    fit_error_hz: float
    fit_uncertainty_hz: float


def measure() -> Iterator[dict[str, Any]]:
    for condition in CONDITIONS:
        results = judged(condition)
        yield _states(condition, results)
        yield from _nothing(condition, results) if condition.away_hz else _line(condition, results)


def judged(condition: Condition) -> list[Judged]:
    """Every scan of one condition, by seed."""
    with multiprocessing.get_context("spawn").Pool(initializer=_one_thread) as pool:
        return pool.map(partial(_scanned, condition), range(SCANS), chunksize=_CHUNK)


def _one_thread() -> None:
    threadpool_limits(limits=1, user_api="blas")


def _scanned(condition: Condition, seed: int) -> Judged:
    bench = SimulatedBench(seed, intensity_rms=condition.intensity_rms)
    scanned = bench.scan(seed, away_hz=condition.away_hz)
    finding, truth_hz = scanned.finding, scanned.truth_hz
    fit_hz, fit_uncertainty_hz = (np.nan, np.nan) if condition.away_hz else _least_squares(scanned.points)
    return Judged(
        seed=seed,
        state=finding.state,
        flags=finding.flags,
        points=len(scanned.points),
        error_hz=np.nan if finding.frequency_hz is None else finding.frequency_hz - truth_hz,
        uncertainty_hz=np.nan if finding.uncertainty_hz is None else finding.uncertainty_hz,
        is_within_68=scanned.is_within_68,
        is_within_95=scanned.is_within_95,
        fit_error_hz=fit_hz - truth_hz,
        fit_uncertainty_hz=fit_uncertainty_hz,
    )


def _least_squares(points: Points) -> tuple[float, float]:
    """Centre and standard uncertainty, Hz, of a Lorentzian on a constant rate; it starts where five points in a row are
    farthest from the median and knows the width that the scan expects."""
    tickled = points[np.flatnonzero(points.tickled)]
    tickled = tickled[np.argsort(tickled.frequency_hz)]
    rates = tickled.counts / tickled.dwell_s
    smooth, base = np.convolve(rates, np.ones(5) / 5, "valid"), np.median(rates)
    place = int(np.abs(smooth - base).argmax())
    start = (tickled.frequency_hz[place + 2], SECTION.width_hz, smooth[place] - base, base)
    errors = np.sqrt(np.maximum(tickled.counts, 1.0)) / tickled.dwell_s
    try:
        best, covariance = curve_fit(_lorentzian, tickled.frequency_hz, rates, start, errors, absolute_sigma=True)
    except RuntimeError:
        return np.nan, np.nan
    return float(best[0]), float(np.sqrt(covariance[0, 0]))


def _lorentzian(frequency_hz: Array, centre_hz: float, width_hz: float, height: float, base: float) -> Array:
    return base + height / (1.0 + (2.0 * (frequency_hz - centre_hz) / width_hz) ** 2)


def _states(condition: Condition, results: list[Judged]) -> dict[str, Any]:
    counts = Counter(one.state for one in results)
    told = ", ".join(f"{counts[state]} {state}" for state in ("found", "none", "unclear", "vanished"))
    return _row(f"{condition.name}: points a scan ({told})", np.mean([one.points for one in results]), "points")


def _nothing(condition: Condition, results: list[Judged]) -> Iterator[dict[str, Any]]:
    false, most = sum(one.state == "found" for one in results), max(1, SCANS // 1000)
    yield _row(f"{condition.name}: false detections", false, f"of {SCANS}", goal=f"at most {most}", met=false <= most)


def _line(condition: Condition, results: list[Judged]) -> Iterator[dict[str, Any]]:
    found = [one for one in results if one.state == "found"]
    errors, fits = np.array([one.error_hz for one in found]), np.array([one.fit_error_hz for one in found])
    stated, fit_stated = (
        np.array([one.uncertainty_hz for one in found]),
        np.array([one.fit_uncertainty_hz for one in found]),
    )
    for share, inside, factor, low, high in (
        (68, np.mean([one.is_within_68 for one in found]), 0.9945, 64, 72),
        (95, np.mean([one.is_within_95 for one in found]), 1.9600, 93, 97),
    ):
        yield _row(
            f"{condition.name}: {share} % intervals that hold the truth",
            100 * inside,
            "%",
            100 * np.mean(np.abs(fits) <= factor * fit_stated),
            goal=f"{low}..{high}",
            met=bool(low <= 100 * inside <= high),
        )
    gross = int((np.abs(errors) > GROSS * stated).sum())
    fit_gross = int((~(np.abs(fits) <= GROSS * fit_stated)).sum())
    name = f"{condition.name}: found and wrong by more than {GROSS:g} standard uncertainties"
    yield _row(name, gross, f"of {len(found)}", fit_gross, goal="0", met=gross == 0)
    yield _row(f"{condition.name}: rms of error over uncertainty", _rms(errors / stated), "", _rms(fits / fit_stated))
    yield _row(f"{condition.name}: mean uncertainty", stated.mean(), "Hz", np.nanmean(fit_stated))
    yield _row(f"{condition.name}: rms error", _rms(errors), "Hz", _rms(fits))


def _rms(values: Array) -> float:
    return float(np.sqrt(np.nanmean(values**2)))


def _row(
    name: str, value: float, unit: str, peer: float | None = None, *, goal: str = "none", met: bool | None = None
) -> dict[str, Any]:
    return {
        "name": name,
        "value": float(value),
        "unit": unit,
        "peer": None if peer is None else float(peer),
        "ratio": float(value / peer) if peer else None,
        "goal": goal,
        "met": met,
    }
