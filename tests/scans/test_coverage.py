"""Whether the stated uncertainties are true: seeded scans whose answer is known."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.stats import binom

from tests.scans.synthetic import Sweep, Truth, synthetic_scan
from trapd.scans.estimate import Finding, Question, estimate

SCANS = 150
SURPRISE = 1e-3  # chance that a right estimator fails one of the bounds below

# The best any order and dwell can do: sigma >= kappa w / (|C| sqrt(rate x dwell)); kappa of the project's scan notes.
CONTRASTS = [-0.3, 0.1, 0.3, 0.6, 0.8]
KAPPAS = [0.85, 0.74, 0.68, 0.56, 0.47]


def drawn(random: np.random.Generator, drift: float) -> tuple[Truth, Sweep, Question]:
    half = random.uniform(20e3, 30e3)
    width = np.exp(random.uniform(np.log(500), np.log(3000)))
    truth = Truth(
        frequency_hz=1e6 + random.uniform(-1, 1) * (half - 2 * width),
        width_hz=width,
        contrast=random.uniform(0.15, 0.6) * random.choice([-1, 1]),
        rate_per_s=np.exp(random.uniform(np.log(5e3), np.log(30e3))),
        drift=drift,
        drift_time_s=random.uniform(10, 20),
    )
    sweep = Sweep(
        low_hz=1e6 - half, high_hz=1e6 + half, step_hz=random.choice([400.0, 500.0]), passes=int(random.integers(3, 5))
    )
    question = Question(low_hz=sweep.low_hz, high_hz=sweep.high_hz, width_low_hz=500.0, width_high_hz=8000.0)
    return truth, sweep, question


@cache
def judged(drift: float) -> list[tuple[Truth, float, Finding]]:
    """Truth, dwell in all, and finding of every scan."""
    results = []
    for index in range(SCANS):
        random = np.random.default_rng([index, round(100 * drift)])
        truth, sweep, question = drawn(random, drift)
        points = synthetic_scan(truth, sweep, random)
        results.append((truth, points.dwell_s.sum(), estimate(points, question)))
    return results


def found(drift: float) -> list[tuple[Truth, float, Finding]]:
    return [one for one in judged(drift) if one[2].state == "found"]


@pytest.mark.long
@pytest.mark.parametrize("drift", [0.0, 0.03])
@pytest.mark.parametrize("share", [0.68, 0.95])
def test_intervals_hold_the_truth_as_often_as_they_say(drift, share):
    results = found(drift)
    assert len(results) > 0.9 * SCANS
    intervals = [finding.interval_68_hz if share == 0.68 else finding.interval_95_hz for _, _, finding in results]
    inside = sum(
        low <= truth.frequency_hz <= high for (truth, _, _), (low, high) in zip(results, intervals, strict=True)
    )
    least, most = binom.ppf([SURPRISE / 2, 1 - SURPRISE / 2], len(results), share)
    assert least <= inside <= most


@pytest.mark.long
@pytest.mark.parametrize("drift", [0.0, 0.03])
def test_no_answer_is_grossly_wrong(drift):
    errors = [abs(one.frequency_hz - truth.frequency_hz) / one.uncertainty_hz for truth, _, one in found(drift)]
    assert max(errors) < 5


@pytest.mark.long
@pytest.mark.parametrize("drift", [0.0, 0.03])
def test_the_bound_is_never_beaten_on_average(drift):
    truths = [(truth, dwell) for truth, dwell, _ in found(drift)]
    bound = np.array(
        [
            np.interp(truth.contrast, CONTRASTS, KAPPAS)
            * truth.width_hz
            / (abs(truth.contrast) * np.sqrt(truth.rate_per_s * dwell))
            for truth, dwell in truths
        ]
    )
    errors = np.array([one.frequency_hz - truth.frequency_hz for truth, _, one in found(drift)])
    stated = np.array([one.uncertainty_hz for _, _, one in found(drift)])
    assert np.sqrt(np.mean((errors / bound) ** 2)) > 1
    assert (stated > bound).all()


@pytest.mark.long
@pytest.mark.parametrize("drift", [0.0, 0.03])
def test_nothing_is_found_in_an_empty_window(drift):
    for index in range(60):
        random = np.random.default_rng([index, 7])
        truth, sweep, question = drawn(random, drift)
        empty = Truth(contrast=0.0, rate_per_s=truth.rate_per_s, drift=drift, drift_time_s=truth.drift_time_s)
        assert estimate(synthetic_scan(empty, sweep, random), question).state == "none"
