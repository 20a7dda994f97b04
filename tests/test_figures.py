"""Figures of scans: what stands in them, that the same scan gives the same text, and their arithmetic."""

from __future__ import annotations

import re
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from typing import Any

import numpy as np
import pytest
from scipy.stats import chi2

from trapd.figures import MOST_MARKERS, poisson_interval, scan_figure, sums
from trapd.scans.flags import FLAGS

PLAN = {"low_hz": 2_100_000.0, "high_hz": 2_200_000.0, "predicted_hz": 2_150_000.0, "predicted_uncertainty_hz": 1e4}
FOUND = {
    "state": "found",
    "scan": "x",
    "mode": "x",
    "species": "40Ca+",
    "request": 88,
    "at_us": 1_772_366_400_000_000,  # 2026-03-01T12:00:00Z
    "message": "Resonance at 2155021 Hz, standard uncertainty 48 Hz.",
    "flags": ["deep", "broadened"],
    "frequency_hz": 2_155_021.0,
    "uncertainty_hz": 48.0,
    "predicted_hz": 2_150_000.0,
    "difference_sigma": 0.502,
    "width_hz": 2000.0,
    "contrast": 0.3,
    "rate_per_s": 10_000.0,
}
NONE = {**FOUND, "state": "none", "message": "No resonance.", "flags": [], "difference_sigma": None}
NONE |= dict.fromkeys(("frequency_hz", "uncertainty_hz", "width_hz", "contrast"))


def points(number: int = 50) -> list[dict[str, Any]]:
    tickled = [
        {"frequency_hz": 2_100_500.0 + 1e5 * n / number, "counts": 200 - n % 7, "dwell_s": 0.02} for n in range(number)
    ]
    return [*tickled, {"frequency_hz": None, "counts": 201, "dwell_s": 0.02}]


def words(svg: str) -> list[str]:
    """Its pieces of text, as whoever reads the file finds them."""
    texts = [one for one in ElementTree.fromstring(svg).iter() if one.tag.endswith("}text")]
    return ["".join(one.itertext()).strip() for one in texts]


def test_trap_scan_time_entry_result_and_units_stand_in_it_as_text() -> None:
    found = words(scan_figure(points(), FOUND, PLAN, trap="north $bench$"))
    assert "north $bench$, scan x (x of 40Ca+), 2026-03-01 12:00:00 UTC, entry 88" in found
    assert "Resonance at 2155021 Hz, standard uncertainty 48 Hz. +5021 Hz, +0.5 σ from the prediction." in found
    for flag in FOUND["flags"]:
        assert f"{flag}: {FLAGS[flag]}" in " ".join(found)
    assert max(map(len, found)) < 100
    assert {"frequency of the tickle (MHz)", "count rate (1/s)", "2.10", "2.20"} <= set(found)
    assert {"counted, ±1 σ (Poisson)", "fitted line", "measured, ±1 σ", "tickle off, ±1 σ"} <= set(found)


def test_without_a_resonance_there_is_no_line_and_no_measured_frequency() -> None:
    found = words(scan_figure(points(), NONE, PLAN, trap="north bench"))
    assert "No resonance." in found
    assert "predicted, ±1 σ hatched" in found
    assert not {"fitted line", "measured, ±1 σ"} & set(found)


def test_a_scan_that_vanished_shows_no_number_whatever_it_had_seen() -> None:
    lost = {**FOUND, "state": "vanished", "message": "The counts vanished.", "flags": ["counts_vanished"]}
    found = words(scan_figure(points(), lost, PLAN, trap="north bench"))
    assert "The counts vanished." in found
    assert not {"fitted line", "measured, ±1 σ"} & set(found)
    assert not [one for one in found if "prediction" in one]


def test_a_point_without_a_count_has_an_error_bar_and_the_measured_band_is_filled() -> None:
    """A bar is an upright stretch of its own path; that of no counts ends above the axis it begins on. The band: a shape
    with a fill and an edge of some width, as 48 Hz of 100 kHz would not be seen."""
    empty = [{"frequency_hz": 2_120_000.0, "counts": 0, "dwell_s": 0.02}, points()[5]]
    svg = scan_figure(empty, FOUND, PLAN, trap="north bench")
    bars = ElementTree.fromstring(svg).findall(".//*[@id='LineCollection_1']/{*}path")
    ends = [[float(y) for y in re.findall(r"[ML] [0-9.]+ ([0-9.]+)", bar.attrib["d"])] for bar in bars]
    assert len(ends) == 2
    assert all(len(set(end)) == 2 for end in ends)
    assert re.search(r"fill: #87cefa; stroke: #87cefa; stroke-width: 3", svg)


def test_a_scan_that_counted_nothing_can_be_drawn() -> None:
    assert "No resonance." in words(scan_figure([], NONE, PLAN, trap="north bench"))


def test_the_same_scan_gives_the_same_text_with_no_date_of_today() -> None:
    """In processes of their own: hashes of text differ between them."""
    draw = (
        "from tests.test_figures import *; import sys; "
        "sys.stdout.write(scan_figure(points(), FOUND, PLAN, trap='north bench'))"
    )
    drawn = [
        subprocess.run([sys.executable, "-c", draw], capture_output=True, text=True, check=True).stdout
        for _ in range(2)
    ]
    assert drawn[0] == drawn[1]
    assert re.findall(r"20[0-9]{2}-[0-9]{2}-[0-9]{2}", drawn[0]) == ["2026-03-01"]


def test_an_error_bar_is_the_exact_interval_of_poissons_distribution() -> None:
    """Garwood's limits by chi-squared quantiles: Particle Data Group, Statistics, eq. 40.78 [mem]. The tails are those of one
    standard deviation."""
    counts = np.array([0.0, 1.0, 4.0, 200.0])
    tail = 0.15865525393145705
    low, high = poisson_interval(counts)
    assert low[0] == 0.0
    assert low[1:] == pytest.approx(chi2.ppf(tail, 2 * counts[1:]) / 2, rel=1e-4)
    assert high == pytest.approx(chi2.ppf(1 - tail, 2 * (counts + 1)) / 2, rel=1e-4)


def test_few_points_stand_alone_and_many_are_added_up_without_losing_a_count() -> None:
    few = [one for one in points() if one["frequency_hz"] is not None]
    frequency_hz, counts, _ = sums(points(), 2.1e6, 2.2e6)
    assert frequency_hz.tolist() == [one["frequency_hz"] for one in few]
    assert counts.tolist() == [one["counts"] for one in few]
    many = points(1000)
    frequency_hz, counts, time_s = sums(many, 2.1e6, 2.2e6)
    assert len(frequency_hz) <= MOST_MARKERS
    assert counts.sum() == sum(one["counts"] for one in many[:-1])
    assert time_s.sum() == pytest.approx(1000 * 0.02)


def test_matplotlib_is_loaded_only_to_draw() -> None:
    check = "import sys, trapd.figures, trapd.cli.scan; sys.exit('matplotlib' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", check], check=False).returncode == 0
