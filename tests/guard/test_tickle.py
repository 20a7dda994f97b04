"""The verdict on a scan: what its envelope may hold, at limits and a hair beyond."""

from __future__ import annotations

from dataclasses import replace

import pytest

from tests.traps import NORTH_BENCH, SCANS, write
from trapd.config.build import guard_of
from trapd.config.read import read
from trapd.guard.model import GuardModel, TickleLimits
from trapd.guard.tickle import judge_tickle, tickle_reasons
from trapd.setpoint import Contents, Envelope

WORK = {"drive.frequency": 21e6, "drive.amplitude": 260.0, "endcaps": 120.0, "rods": 1.0, "shim_x": 0.0}
ONE = Contents(presence="held", ions={"40Ca+": 1})
GOOD = Envelope(low_hz=2.1e6, high_hz=2.2e6, level_v=5e-4, burst_s=0.5, longest_s=600.0)


@pytest.fixture(scope="module")
def model(tmp_path_factory: pytest.TempPathFactory) -> GuardModel:
    model = guard_of(read(write(tmp_path_factory.mktemp("file"), NORTH_BENCH + SCANS)))
    limits = TickleLimits(level_max_v=0.02, frequency_hz=(1e4, 30e6), burst_s=(1e-3, 1e3))
    return replace(model, tickle=limits)


def rules(model: GuardModel, envelope: Envelope) -> list[str]:
    return [reason.rule for reason in tickle_reasons(model, WORK, envelope)]


def test_a_weak_tickle_around_a_secular_frequency_is_accepted(model: GuardModel) -> None:
    verdict = judge_tickle(model, ONE, WORK, GOOD)
    assert verdict.accepted, verdict.reasons


def test_a_state_that_breaks_a_rule_is_not_tickled(model: GuardModel) -> None:
    verdict = judge_tickle(model, ONE, {**WORK, "drive.amplitude": 80.0}, GOOD)
    assert not verdict.accepted
    assert not [reason for reason in verdict.reasons if reason.rule.startswith("tickle")]


@pytest.mark.parametrize(
    ("envelope", "rule"),
    [
        (replace(GOOD, level_v=0.02), None),
        (replace(GOOD, level_v=0.0201), "tickle_level"),
        (replace(GOOD, level_v=0.0), "tickle_level"),
        (replace(GOOD, low_hz=1e4), None),
        (replace(GOOD, low_hz=0.9e4), "tickle_band"),
        (replace(GOOD, high_hz=10.5e6), None),  # half the drive frequency: no secular frequency lies beyond
        (replace(GOOD, high_hz=10.6e6), "tickle_band"),
        (replace(GOOD, low_hz=2.3e6), "tickle_band"),  # from high to low
        (replace(GOOD, burst_s=1e3), None),
        (replace(GOOD, burst_s=1.1e3), "tickle_burst"),
        (replace(GOOD, burst_s=0.5e-3), "tickle_burst"),
    ],
)
def test_each_limit_holds_up_to_itself(model: GuardModel, envelope: Envelope, rule: str | None) -> None:
    assert rules(model, envelope) == ([] if rule is None else [rule])


def test_a_generator_without_bursts_tickles_nothing(model: GuardModel) -> None:
    assert model.tickle is not None
    assert rules(replace(model, tickle=replace(model.tickle, burst_s=None)), GOOD) == ["tickle_burst"]


def test_a_trap_without_a_tickle_tickles_nothing(model: GuardModel) -> None:
    assert "tickle_level" in rules(replace(model, tickle=None), GOOD)


def test_a_reason_names_what_was_found_and_its_bound(model: GuardModel) -> None:
    (reason,) = tickle_reasons(model, WORK, replace(GOOD, level_v=0.05))
    assert (reason.quantity, reason.unit, reason.found, reason.bound) == ("tickle", "V", 0.05, 0.02)
    assert "0.05 V is over 0.02 V" in reason.message
