"""A scan as text: where its blocks and marks stand. Widths and heights by hand."""

from __future__ import annotations

from typing import Any

import pytest

from trapd.cli.spectrum import COLUMNS, MARGIN, Picture, rates_by_column, spectrum

PLAN = {
    "scan": "x",
    "mode": "x",
    "species": "40Ca+",
    "low_hz": 2_100_000.0,
    "high_hz": 2_164_000.0,
    "predicted_hz": 2_120_500.0,
    "predicted_uncertainty_hz": 4_000.0,
    "level_v": 0.5e-3,
    "dwell_s": 0.02,
    "points": 64,
    "passes": 12,
}
"""64 columns of 1 kHz; the prediction stands in column 20, from 16 to 24."""


def point(frequency_hz: float | None, counts: int, **more: Any) -> dict[str, Any]:
    return {"frequency_hz": frequency_hz, "counts": counts, "dwell_s": 0.02, "pass_number": 1, **more}


def dipped(columns: int = 64) -> list[dict[str, Any]]:
    """One point in the middle of each column: 200 counts, in column 21 only 100."""
    return [point(2_100_500.0 + 1000 * n, 100 if n == 21 else 200) for n in range(columns)]


def test_the_rate_of_a_column_is_that_of_all_its_points_with_the_tickle_on() -> None:
    """(100 + 300) counts in 0.04 s; the end of the window belongs to the last column."""
    points = [point(2_100_100.0, 100), point(2_100_900.0, 300), point(2_164_000.0, 20), point(None, 999)]
    assert rates_by_column(points, PLAN, 64) == pytest.approx({0: 10_000.0, 63: 1_000.0})


def test_a_dip_is_a_gap_in_the_blocks_where_it_stands() -> None:
    plot = [line[MARGIN:] for line in spectrum(dipped(), PLAN, None)[:8]]
    assert plot[0] == "█" * 21 + " " + "█" * 42
    # From 5000 - 5000/4 to 10000 /s in 8 rows: 5000 /s is 1.6 rows high, 13 eighths.
    assert plot[7] == "█" * 64
    assert plot[6] == "█" * 21 + "▅" + "█" * 42


def test_rates_stand_at_the_plot_and_frequencies_beneath() -> None:
    lines = spectrum(dipped(), PLAN, None)
    assert lines[0].startswith(" 10 000 /s ┤")
    assert lines[7].startswith("  3 750 /s ┤")
    assert lines[8].split() == ["└2.1", "MHz", "2.164", "MHz"]


def test_the_prediction_and_the_estimate_are_letters_with_their_uncertainty() -> None:
    estimate = {"state": "found", "frequency_hz": 2_121_200.0, "uncertainty_hz": 100.0}
    *_, predicted, estimated = spectrum(dipped(), PLAN, estimate)
    assert predicted == " predicted  " + " " * 16 + "├───P───┤"
    assert estimated == " estimated  " + " " * 21 + "E"


def test_an_uncertainty_wider_than_the_window_has_no_ends_in_it() -> None:
    wide = spectrum([], {**PLAN, "predicted_uncertainty_hz": 1e6}, None)[-2]
    assert wide == " predicted  " + "─" * 20 + "P" + "─" * 43


def test_what_lies_outside_the_window_is_said() -> None:
    estimate = {"state": "found", "frequency_hz": 2_200_000.0, "uncertainty_hz": 100.0}
    assert spectrum([], PLAN, estimate)[-1].endswith("E is outside, at 2.2 MHz")


def test_nothing_counted_and_dark_counts_are_drawn_too() -> None:
    assert len(spectrum([], PLAN, None)) == len(spectrum([point(2_110_000.0, 0)], PLAN, None)) == 11


def test_steady_counts_are_not_drawn_as_if_they_varied() -> None:
    """49,950 /s of 50,000: at least 2 % fills three quarters and more of the plot. 250 and 300 of 1250 in 64 eighths."""
    points = [point(2_100_500.0 + 1000 * n, 999 if n == 21 else 1000) for n in range(64)]
    plot = [line[MARGIN:] for line in spectrum(points, PLAN, None)[:8]]
    assert plot == [""] * 6 + ["▇" * 21 + "▅" + "▇" * 42, "█" * 64]


def feed(picture: Picture, *entries: tuple[str, dict[str, Any]]) -> None:
    for kind, data in entries:
        picture.note({"kind": kind, "data": data})


def test_a_picture_fits_a_terminal_of_80_columns() -> None:
    picture = Picture(PLAN)
    feed(picture, *(("scan_point", one) for one in dipped()), ("scan_point", point(None, 210)))
    feed(picture, ("estimate", {"state": "found", "frequency_hz": 2_121_021.0, "uncertainty_hz": 48.0, "message": ""}))
    lines = picture.lines(COLUMNS)
    assert max(map(len, lines)) <= 80
    assert lines[-2] == "pass 1 of 12, 65 points; tickle off 10 500 /s"
    assert lines[-1] == "f = 2.121021 MHz ± 48 Hz, +521 Hz from the prediction"


def test_each_pass_is_a_line() -> None:
    picture = Picture(PLAN)
    assert picture.line() == "pass 1 of 12: no estimate yet"
    feed(picture, ("scan_point", point(2_110_000.0, 5, pass_number=2)), ("intent", {"request": 1}))
    feed(picture, ("estimate", {"frequency_hz": None, "uncertainty_hz": None, "message": "No resonance seen."}))
    assert picture.line() == "pass 2 of 12: No resonance seen."


def test_counts_that_vanished_leave_no_number() -> None:
    picture = Picture(PLAN)
    seen = {"frequency_hz": 2_121_021.0, "uncertainty_hz": 48.0, "message": "The counts vanished."}
    feed(picture, *(("scan_point", one) for one in dipped()), ("finding", {"state": "vanished", **seen}))
    assert picture.line() == "pass 1 of 12: The counts vanished."
    assert picture.lines(COLUMNS)[-3] == " estimated  -"


def test_half_a_pass_is_no_pass() -> None:
    picture = Picture(PLAN)
    feed(picture, *(("scan_point", one) for one in dipped()[:-1]), ("scan_point", point(None, 210)))
    assert not picture.passed
    feed(picture, ("scan_point", dipped()[-1]))
    assert picture.passed
    feed(picture, ("scan_point", point(2_110_000.0, 5, pass_number=2)))
    assert not picture.passed
