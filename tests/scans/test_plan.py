"""What a scan will do, before it does anything."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from trapd.config.records import ScanSection
from trapd.guard.model import TickleLimits
from trapd.scans.plan import Plan, plan_scan
from trapd.scans.prediction import Prediction

SECTION = ScanSection(name="x", mode="x", tickle_v=5e-4, span_hz=200e3, dwell_s=0.02, target_hz=50.0)
EXPECTED = Prediction(species="40Ca+", mode="x", frequency_hz=2_155_000.4, uncertainty_hz=10e3)
LIMITS = TickleLimits(level_max_v=0.02)


def plan(section: ScanSection = SECTION, expected: Prediction = EXPECTED, limits: TickleLimits = LIMITS) -> Plan:
    return plan_scan(section, expected, [], limits, 5e-4, floor_per_s=500.0)


def tickled(made: Plan, number: int = 1) -> list[float]:
    return [one for one in made.order(7, number) if one is not None]


def test_the_window_is_three_uncertainties_to_either_side() -> None:
    made = plan()
    assert made.low_hz == pytest.approx(2_125_000, abs=2)
    assert made.high_hz == pytest.approx(2_185_000, abs=2)


def test_it_is_eight_widths_at_least_and_the_span_at_most() -> None:
    narrow = plan(expected=replace(EXPECTED, uncertainty_hz=1.0))
    assert narrow.high_hz - narrow.low_hz == pytest.approx(8 * SECTION.width_hz, abs=2)
    wide = plan(expected=replace(EXPECTED, uncertainty_hz=1e6))
    assert wide.high_hz - wide.low_hz == pytest.approx(SECTION.span_hz, abs=2)


@pytest.mark.parametrize("resolution_hz", [0.1, 1.0, 10.0, 1000.0])
def test_every_point_is_a_frequency_the_generator_has_inside_the_envelope(resolution_hz: float) -> None:
    made = plan(limits=replace(LIMITS, frequency_resolution_hz=resolution_hz))
    for number in range(1, 40):
        told = np.array(tickled(made, number))
        assert told.min() >= made.envelope.low_hz
        assert told.max() <= made.envelope.high_hz
        assert np.abs(told / resolution_hz - np.round(told / resolution_hz)).max() < 1e-6


def test_neighbours_are_half_a_width_apart_and_a_pass_leaves_no_gap() -> None:
    made = plan()
    told = np.sort(tickled(made))
    assert len(told) == made.points
    assert np.diff(told).max() <= SECTION.width_hz / 2 + 2
    assert told[0] - made.low_hz <= made.step_hz + 1
    assert made.high_hz - told[-1] <= made.step_hz + 1


def test_each_pass_has_an_order_and_a_grid_of_its_own_and_the_seed_repeats_it() -> None:
    made = plan()
    assert made.order(7, 1) == made.order(7, 1)
    assert tickled(made, 1) != tickled(made, 2)
    assert set(tickled(made, 1)) != set(tickled(made, 2))
    assert made.order(8, 1) != made.order(7, 1)


def test_a_count_with_the_tickle_off_comes_first_and_after_every_twelve() -> None:
    order = plan().order(7, 1)
    off = [at for at, one in enumerate(order) if one is None]
    assert off == list(range(0, len(order), 13))


def test_the_burst_is_longer_than_the_count_and_the_scan_has_an_end() -> None:
    made = plan()
    assert made.envelope.burst_s == made.burst_s == SECTION.dwell_s + 0.5
    assert made.longest_s > made.passes * made.points * SECTION.dwell_s
    assert made.envelope.level_v == 5e-4


def other(frequency_hz: float, uncertainty_hz: float = 10e3) -> Prediction:
    return Prediction(species="40Ca+", mode="y", frequency_hz=frequency_hz, uncertainty_hz=uncertainty_hz)


@pytest.mark.parametrize(
    ("y_hz", "found_hz", "ambiguous"),
    [
        (2_033_000.0, 2_161_000.0, False),  # the other mode is twelve uncertainties away
        (2_140_000.0, 2_155_000.0, False),  # as predicted; the other one expected 1.5 uncertainties below
        (2_150_000.0, 2_152_000.0, True),  # between the two
        (2_140_000.0, 2_141_000.0, True),  # where the other one is expected
        (2_200_000.0, 2_185_000.0, True),
    ],
)
def test_a_line_that_another_mode_explains_as_well_is_ambiguous(y_hz: float, found_hz: float, ambiguous: bool) -> None:
    assert replace(plan(), others=(other(y_hz),)).is_ambiguous(found_hz) is ambiguous
