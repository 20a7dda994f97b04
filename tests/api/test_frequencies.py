"""Measured beside predicted, without a daemon: what is compared with what."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from tests import traps
from trapd.api.frequencies import Compared, Frequencies
from trapd.config.build import guard_of
from trapd.config.read import read
from trapd.controller import Measured, Situation
from trapd.guard.model import GuardModel
from trapd.setpoint import Contents

WORK = {"drive.frequency": 21e6, "drive.amplitude": 260.0, "endcaps": 120.0, "rods": 1.0, "shim_x": 0.0}
HELD = Contents(presence="held", ions={"40Ca+": 2})
ELSEWHERE = {**WORK, "endcaps": 200.0}


def measured(**fields: Any) -> Measured:
    given = {"entry": 7, "scan": "x", "species": "40Ca+", "mode": "x", "frequency_hz": 2_155_300.0}
    given |= {"uncertainty_hz": 30.0, "predicted_hz": 2_155_000.0, "predicted_uncertainty_hz": 40.0}
    return Measured(**{**given, "at_us": 1_772_366_400_000_000, "values": WORK, **fields})


@pytest.fixture(scope="module")
def model(tmp_path_factory: pytest.TempPathFactory) -> GuardModel:
    return guard_of(read(traps.write(tmp_path_factory.mktemp("file"), traps.NORTH_BENCH + traps.SCANS)))


@pytest.fixture
def compare(tmp_path: Path, model: GuardModel) -> Any:
    config = read(traps.write(tmp_path, traps.NORTH_BENCH + traps.SCANS))
    frequencies = Frequencies(model, tuple(config.scans.values()))

    def ask(**changes: Any) -> Compared:
        values = Situation(values=WORK, outputs={}, contents=HELD)
        (found,) = frequencies.compared(replace(values, **changes))
        return found

    return ask


def test_the_prediction_is_that_of_the_present_setpoints(compare: Any) -> None:
    """2.155 MHz there, by another method (tests/guard/test_verdict.py); beta^2 = a + q^2/2 at lowest order, so a gain that is
    known to 2 % leaves it 2 %; and the file's model 0.5 % more, in quadrature."""
    found = compare()
    assert found.predicted_hz == pytest.approx(2.155e6, abs=500)
    assert found.predicted_uncertainty_hz == pytest.approx(math.hypot(0.02, 0.005) * 2.155e6, rel=0.1)
    assert (found.scan, found.species, found.mode) == ("x", "40Ca+", "x")
    assert found.measured_hz is found.difference_hz is found.same_setpoints is None


def test_at_the_same_setpoints_the_difference_is_to_the_prediction_of_now(compare: Any) -> None:
    found = compare(measured={"x": measured()})
    assert found.same_setpoints is True
    assert found.difference_hz == found.measured_hz - found.predicted_hz
    assert found.difference_sigma == pytest.approx(
        found.difference_hz / math.hypot(30.0, found.predicted_uncertainty_hz)
    )


def test_at_other_setpoints_the_difference_is_to_what_was_predicted_there(compare: Any) -> None:
    """By hand: 300 Hz off, with 30 and 40 Hz of uncertainty: 300 / 50."""
    found = compare(measured={"x": measured(values=ELSEWHERE)})
    assert found.same_setpoints is False
    assert found.difference_hz == pytest.approx(300.0)
    assert found.difference_sigma == pytest.approx(6.0)


def test_two_exact_numbers_have_no_difference_in_sigma(compare: Any) -> None:
    exact = measured(values=ELSEWHERE, uncertainty_hz=0.0, predicted_uncertainty_hz=0.0)
    assert compare(measured={"x": exact}).difference_sigma is None


@pytest.mark.parametrize("changed", [{"drive.amplitude": 0.0}, {"drive.amplitude": 900.0}], ids=["off", "not stable"])
def test_where_nothing_is_bound_nothing_is_predicted_and_the_measurement_stands(
    compare: Any, changed: dict[str, float]
) -> None:
    """900 V is q = 1.0, beyond the edge 0.908 of the first region (McLachlan) [mem]."""
    found = compare(values={**WORK, **changed}, measured={"x": measured()})
    assert found.predicted_hz is None
    assert found.measured_hz == 2_155_300.0
    assert found.difference_hz == pytest.approx(300.0)


def test_a_value_that_is_not_known_leaves_no_prediction(compare: Any) -> None:
    values = {name: value for name, value in WORK.items() if name != "rods"}
    assert compare(values=values).predicted_hz is None


def test_a_measurement_of_another_species_is_not_compared(compare: Any) -> None:
    assert compare(measured={"x": measured(species="88Sr+")}).measured_hz is None


def test_an_empty_trap_has_the_prediction_of_the_only_species_there_could_be(compare: Any) -> None:
    assert compare(contents=Contents(presence="none")).species == "40Ca+"


def test_a_bug_in_the_model_does_not_hide_the_state(
    compare: Any, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def broken(*_: object) -> None:
        raise RuntimeError("nobody expected this")

    monkeypatch.setattr("trapd.api.frequencies.predict", broken)
    assert compare(measured={"x": measured()}).measured_hz == 2_155_300.0
    assert "no prediction of x of 40Ca+" in caplog.text


def test_a_prediction_is_reckoned_once_for_each_state(compare: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    asked: list[object] = []
    monkeypatch.setattr("trapd.api.frequencies.predict", lambda *one: asked.append(one))
    for values in (WORK, WORK, ELSEWHERE, ELSEWHERE):
        compare(values=values)
    assert len(asked) == 2
