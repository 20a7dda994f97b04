"""The 22 simulated data sets that the project was given, each with its truth, the bound on its uncertainty and the
verdict it expects."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from trapd.scans.estimate import Finding, Question, estimate
from trapd.scans.points import Points

SETS = {one["name"]: one for one in json.loads((Path(__file__).parent / "scan_cases.json").read_text())["sets"]}
FOUND = [name for name, one in SETS.items() if one["kind"] in ("easy", "medium", "hard")]


def points_of(one: dict) -> Points:
    return Points(
        frequency_hz=np.array([np.nan if f is None else f for f in one["freq_hz"]], dtype=float),
        dwell_s=np.array(one["dwell_s"], dtype=float),
        counts=np.array(one["counts"], dtype=float),
        time_s=np.array(one["t_mid_s"], dtype=float),
    )


def question_of(one: dict) -> Question:
    (low, high), (narrow, wide), dark = one["window_hz"], one["width_prior_hz"], one["dark_counts_cal"]
    return Question(
        low_hz=low, high_hz=high, width_low_hz=narrow, width_high_hz=wide, dark_per_s=dark["counts"] / dark["dwell_s"]
    )


@cache
def finding_of(name: str) -> Finding:
    return estimate(points_of(SETS[name]), question_of(SETS[name]))


def true_hz(name: str, at_s: float) -> float:
    truth = SETS[name]["truth"]
    line = truth["resonances"][0]
    return line["f0_hz"] + truth["f0_drift_hz_per_s"] * (at_s - line["f0_at_time_s"])


def pulls_and_bound(name: str) -> tuple[float, float]:
    """Error in units of the uncertainty stated, and that uncertainty in units of the Cramér-Rao bound."""
    found = finding_of(name)
    error = found.frequency_hz - true_hz(name, found.at_s)
    return error / found.uncertainty_hz, found.uncertainty_hz / SETS[name]["crb_sigma_hz"]


def test_there_are_22_sets():
    assert len(SETS) == 22
    assert len(FOUND) == 10


@pytest.mark.parametrize("name", FOUND)
def test_a_line_is_found_where_it_is_and_as_well_as_the_bound_allows(name):
    assert finding_of(name).state == "found"
    pull, excess = pulls_and_bound(name)
    assert abs(pull) < 4
    assert 0.8 < excess < 2


@pytest.mark.parametrize("name", FOUND)
def test_width_and_contrast_are_those_of_the_truth(name):
    found, truth = finding_of(name), SETS[name]["truth"]["resonances"][0]
    assert found.width_hz == pytest.approx(truth["fwhm_hz"], rel=0.7)
    assert found.contrast == pytest.approx(truth["contrast_of_signal"], rel=0.25)


def test_few_counts_are_found_with_the_likelihood_ratio_expected():
    assert 20 < finding_of("hard_1_low_counts").likelihood_ratio < 60


@pytest.mark.parametrize("name", [name for name, one in SETS.items() if one["kind"] == "none"])
def test_nothing_is_found_where_nothing_is(name):
    found = finding_of(name)
    assert (found.state, found.frequency_hz) == ("none", None)
    assert found.contrast_limit > 0
    assert "excluded" in found.message


@pytest.mark.parametrize("name", [name for name, one in SETS.items() if one["kind"] == "two"])
def test_two_lines_give_no_frequency(name):
    found = finding_of(name)
    assert (found.state, found.frequency_hz) == ("unclear", None)
    assert "two_lines" in found.flags


def test_blended_lines_are_flagged_as_broad():
    assert "broadened" in finding_of("two_3_blended").flags


def test_a_line_just_inside_the_window_is_found_and_flagged():
    found = finding_of("edge_1_inside")
    assert (found.state, "at_the_edge" in found.flags) == ("found", True)
    assert abs(pulls_and_bound("edge_1_inside")[0]) < 4


def test_a_line_outside_the_window_gives_no_frequency():
    found = finding_of("edge_2_outside")
    assert (found.state, found.frequency_hz) == ("unclear", None)
    assert "at_the_edge" in found.flags
    assert "widen" in found.message


@pytest.mark.parametrize("name", ["lost_1_before", "lost_3_on_dip"])
def test_an_ion_lost_before_or_on_the_line_leaves_no_frequency(name):
    found = finding_of(name)
    assert (found.state, found.frequency_hz) == ("vanished", None)
    assert "counts_vanished" in found.flags


def test_an_ion_lost_after_the_line_leaves_a_marked_frequency():
    found = finding_of("lost_2_after")
    assert (found.state, "counts_vanished" in found.flags) == ("vanished", True)
    pull, excess = pulls_and_bound("lost_2_after")
    assert abs(pull) < 4
    assert 0.8 < excess < 2


@pytest.mark.parametrize("name", ["lost_1_before", "lost_2_after", "lost_3_on_dip"])
def test_the_loss_is_noticed_when_it_happens(name):
    one = SETS[name]
    lost = one["truth"]["ion_lost_at_s"]
    before = points_of(one)[np.array(one["t_mid_s"]) < lost - 0.02]
    assert estimate(before, question_of(one)).state != "vanished"
    soon = points_of(one)[np.array(one["t_mid_s"]) < lost + 0.15]
    assert estimate(soon, question_of(one)).state == "vanished"
