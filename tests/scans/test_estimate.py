"""What the estimator must do whatever the numbers: symmetries, verdicts, flags, and when a scan may stop."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.scans.synthetic import Sweep, Truth, expected_counts, synthetic_scan
from trapd.scans.estimate import FLAGS, Finding, Question, estimate, is_enough
from trapd.scans.points import Points

QUESTION = Question(low_hz=0.975e6, high_hz=1.025e6, width_low_hz=500.0, width_high_hz=8000.0)
TRUTH = Truth(frequency_hz=1.0031e6)


def scan(seed: int = 1, truth: Truth = TRUTH, **sweep) -> Points:
    return synthetic_scan(truth, Sweep(**sweep), np.random.default_rng(seed))


def without_noise(truth: Truth = TRUTH, **sweep) -> Points:
    points = scan(truth=truth, **sweep)
    return replace(points, counts=expected_counts(truth, points, np.random.default_rng(0)))


def test_counts_without_noise_give_the_truth():
    found = estimate(without_noise(Truth(frequency_hz=1.0031e6, rate_per_s=1e6)), QUESTION)
    assert found.state == "found"
    assert found.frequency_hz == pytest.approx(1.0031e6, abs=0.05 * found.uncertainty_hz)
    assert found.width_hz == pytest.approx(TRUTH.width_hz, rel=1e-3)
    assert found.contrast == pytest.approx(TRUTH.contrast, rel=1e-3)
    assert found.rate_per_s == pytest.approx(1e6, rel=1e-3)


def test_a_shift_of_all_frequencies_shifts_the_answer():
    points, shift = scan(), 123_456.0
    there = estimate(
        replace(points, frequency_hz=points.frequency_hz + shift),
        replace(QUESTION, low_hz=QUESTION.low_hz + shift, high_hz=QUESTION.high_hz + shift),
    )
    here = estimate(points, QUESTION)
    assert there.frequency_hz - here.frequency_hz == pytest.approx(shift, abs=1e-3 * here.uncertainty_hz)
    assert there.uncertainty_hz == pytest.approx(here.uncertainty_hz, rel=1e-3)


def test_a_mirrored_scan_has_the_mirrored_answer():
    points = scan()
    there = estimate(replace(points, frequency_hz=2e6 - points.frequency_hz), QUESTION)
    here = estimate(points, QUESTION)
    assert 2e6 - there.frequency_hz == pytest.approx(here.frequency_hz, abs=0.02 * here.uncertainty_hz)
    assert there.uncertainty_hz == pytest.approx(here.uncertainty_hz, rel=0.02)


def test_the_unit_of_the_dwell_only_changes_the_rate():
    points = scan()
    slow, quick = estimate(replace(points, dwell_s=10 * points.dwell_s), QUESTION), estimate(points, QUESTION)
    assert slow.frequency_hz == pytest.approx(quick.frequency_hz, abs=1e-3 * quick.uncertainty_hz)
    assert 10 * slow.rate_per_s == pytest.approx(quick.rate_per_s, rel=1e-6)


def test_four_times_the_counts_halve_the_uncertainty():
    once = without_noise(dwell_s=0.05)
    four = replace(once, dwell_s=4 * once.dwell_s, counts=4 * once.counts)
    few, many = estimate(once, QUESTION), estimate(four, QUESTION)
    assert many.uncertainty_hz == pytest.approx(few.uncertainty_hz / 2, rel=0.03)
    assert many.likelihood_ratio == pytest.approx(4 * few.likelihood_ratio, rel=0.1)


def test_the_order_of_the_rows_means_nothing():
    points = scan(truth=replace(TRUTH, drift=0.03))
    shuffled = points[np.random.default_rng(3).permutation(len(points))]
    assert estimate(shuffled, QUESTION) == estimate(points, QUESTION)


def test_the_order_of_measurement_means_little_when_nothing_drifts():
    points = scan()
    other = replace(points, time_s=np.random.default_rng(3).permutation(points.time_s))
    here, there = estimate(points, QUESTION), estimate(other, QUESTION)
    assert there.frequency_hz == pytest.approx(here.frequency_hz, abs=0.3 * here.uncertainty_hz)


def test_a_rise_has_a_negative_contrast():
    found = estimate(scan(truth=replace(TRUTH, contrast=-0.5)), QUESTION)
    assert found.state == "found"
    assert found.contrast == pytest.approx(-0.5, abs=0.1)
    assert "deep" not in found.flags


def test_the_frequency_belongs_to_the_time_at_which_the_line_was_crossed():
    points = scan(passes=1, upwards=True)
    crossed = np.interp(TRUTH.frequency_hz, points.frequency_hz[points.tickled], points.time_s[points.tickled])
    assert estimate(points, QUESTION).at_s == pytest.approx(crossed, abs=0.1)


def test_a_known_dark_rate_is_taken_off_rate_and_contrast():
    points = scan(truth=Truth(contrast=0.3, rate_per_s=20e3), passes=8)
    found = estimate(points, replace(QUESTION, dark_per_s=5e3))
    assert found.rate_per_s == pytest.approx(15e3, rel=0.02)
    assert found.contrast == pytest.approx(0.4, abs=0.05)  # 0.3 of 20e3 counts are 0.4 of 15e3


def test_a_shallow_line_is_found_with_low_confidence_or_not_at_all():
    findings = [estimate(scan(seed, truth=replace(TRUTH, contrast=0.15), passes=1), QUESTION) for seed in range(12)]
    found = [one for one in findings if one.state == "found"]
    assert 0 < len(found) < len(findings)
    assert all(("low_confidence" in one.flags) == (one.likelihood_ratio < 35) for one in found)


def test_a_deep_dip_is_flagged():
    assert "deep" in estimate(scan(truth=replace(TRUTH, contrast=0.6)), QUESTION).flags
    assert "deep" not in estimate(scan(truth=replace(TRUTH, contrast=0.1), passes=12), QUESTION).flags


def test_a_rate_that_drifts_is_flagged_and_one_that_does_not_is_not():
    assert "drifting_rate" in estimate(scan(truth=replace(TRUTH, drift=0.05), passes=8), QUESTION).flags
    assert "drifting_rate" not in estimate(scan(passes=8), QUESTION).flags


def noisier(points: Points, extra: float) -> Points:
    noise = np.random.default_rng(9).normal(size=len(points)) * np.sqrt(extra * points.counts)
    return replace(points, counts=np.maximum(np.round(points.counts + noise), 0))


def test_scatter_beyond_chance_widens_the_uncertainty_or_refuses():
    calm, unsteady, wild = (estimate(noisier(scan(), extra), QUESTION) for extra in (0.0, 0.5, 3.0))
    assert "poor_fit" not in calm.flags
    assert "poor_fit" in unsteady.flags
    assert unsteady.uncertainty_hz > 1.1 * calm.uncertainty_hz
    assert (wild.state, wild.frequency_hz) == ("unclear", None)
    assert "scatter" in wild.message


def test_an_unexpected_width_is_flagged():
    expecting = {"narrow": (250.0, 1600.0), "wide": (2000.0, 20e3)}
    points = scan(passes=8)
    flags = {
        name: estimate(points, replace(QUESTION, width_low_hz=low, width_high_hz=high)).flags
        for name, (low, high) in expecting.items()
    }
    assert "broadened" in flags["narrow"]
    assert "narrowed" in flags["wide"]


def test_two_far_lines_in_random_order_give_no_frequency():
    one = scan(passes=6)
    other = scan(2, truth=Truth(frequency_hz=0.99e6, contrast=0.2), passes=6)
    both = replace(other, counts=np.random.default_rng(3).poisson(together(one, other)).astype(float))
    found = estimate(both, QUESTION)
    assert (found.state, found.frequency_hz, "two_lines" in found.flags) == ("unclear", None, True)


def together(one: Points, other: Points) -> np.ndarray:
    """(n,) expected with both lines, in the other's order."""
    noiseless = np.random.default_rng(0)
    first = expected_counts(TRUTH, other, noiseless)
    second = expected_counts(Truth(frequency_hz=0.99e6, contrast=0.2), other, noiseless)
    return first + second - TRUTH.rate_per_s * one.dwell_s[0]


def dark_from(points: Points, first: int, last: int | None = None) -> Points:
    counts = points.counts.copy()
    counts[first:last] = np.random.default_rng(4).poisson(200 * points.dwell_s[first:last])
    return replace(points, counts=counts)


@pytest.mark.parametrize("known", [{}, {"dark_per_s": 200.0}, {"floor_per_s": 1000.0}])
def test_vanished_counts_are_noticed_within_five_points(known):
    points = dark_from(scan(), 150)
    question = replace(QUESTION, **known)
    assert estimate(points[:155], question).state == "vanished"
    assert estimate(points[:150], question).state != "vanished"


def test_counts_that_came_back_vanished_all_the_same():
    found = estimate(dark_from(scan(), 200, 230), QUESTION)
    assert (found.state, "counts_vanished" in found.flags) == ("vanished", True)


def test_counts_that_were_never_there_have_vanished():
    points = dark_from(scan(), 0)
    assert estimate(points, replace(QUESTION, floor_per_s=1000.0)).state == "vanished"


def test_a_deep_dip_crossed_slowly_is_not_a_loss():
    found = estimate(scan(truth=replace(TRUTH, contrast=0.95), passes=1, upwards=True, step_hz=200.0), QUESTION)
    assert found.state == "found"


def test_too_few_points_are_said_to_be_too_few():
    found = estimate(scan()[:9], QUESTION)
    assert (found.state, found.flags) == ("unclear", ("too_few_points",))
    assert estimate(scan()[:0], QUESTION).state == "unclear"


def test_none_says_which_contrast_it_excludes():
    empty = replace(TRUTH, contrast=0.0)
    soon = estimate(scan(truth=empty, passes=1), QUESTION)
    late = estimate(scan(truth=empty, passes=12, dwell_s=0.1), QUESTION)
    assert soon.state == late.state == "none"
    assert "not_excluded" in soon.flags
    assert "not_excluded" not in late.flags
    assert late.contrast_limit < QUESTION.min_contrast < soon.contrast_limit
    assert f"{late.contrast_limit:.1%}" in late.message


def test_a_line_of_the_contrast_excluded_is_rarely_there():
    """Of 40 scans with a line too shallow to be found, at most 5 state a limit below its contrast: 95 % allow 6 in 0.2 %
    of cases (binomial)."""
    shallow = replace(TRUTH, contrast=0.08)
    limits = [estimate(scan(seed, truth=shallow, passes=2), QUESTION).contrast_limit for seed in range(40)]
    limits = [limit for limit in limits if limit is not None]
    assert len(limits) > 30
    assert sum(limit < shallow.contrast for limit in limits) <= 5


def test_every_flag_raised_is_explained():
    raised = {
        flag
        for points in (scan(), scan(passes=1), noisier(scan(), 3.0), dark_from(scan(), 150), scan()[:5])
        for flag in estimate(points, QUESTION).flags
    }
    assert raised
    assert raised <= FLAGS.keys()
    assert all(name == name.lower() and text.endswith(".") for name, text in FLAGS.items())


FOUND = Finding(state="found", message="", frequency_hz=1e6, uncertainty_hz=40.0, likelihood_ratio=100.0)
TARGET = replace(QUESTION, target_hz=50.0)


@pytest.mark.parametrize(
    ("finding", "question", "passes", "enough"),
    [
        (FOUND, TARGET, 3, True),
        (FOUND, TARGET, 2, False),
        (FOUND, QUESTION, 9, False),
        (replace(FOUND, uncertainty_hz=51.0), TARGET, 9, False),
        (replace(FOUND, likelihood_ratio=26.0), TARGET, 9, False),
        (Finding(state="none", message="", contrast_limit=0.04), TARGET, 3, True),
        (Finding(state="none", message="", contrast_limit=0.06), TARGET, 9, False),
        (Finding(state="unclear", message=""), TARGET, 9, False),
        (Finding(state="vanished", message=""), TARGET, 1, True),
    ],
)
def test_a_scan_may_stop_when_its_answer_is_good_enough(finding, question, passes, enough):
    assert is_enough(finding, question, passes) is enough


def test_columns_of_different_lengths_are_refused():
    points = scan()
    with pytest.raises(ValueError, match="one length"):
        replace(points, counts=points.counts[:-1])
    with pytest.raises(ValueError, match="positive dwell"):
        replace(points, dwell_s=0 * points.dwell_s)
    with pytest.raises(ValueError, match="low to high"):
        replace(QUESTION, low_hz=2e6)
