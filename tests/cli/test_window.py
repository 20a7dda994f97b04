"""``trapd window``, and the one function behind it and /v1/window."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from tests.cli.typed import trapd


def test_json_is_the_contract(file: Path) -> None:
    answer = trapd(f"window {file} --json").json
    setpoints = {"drive.frequency", "drive.amplitude", "endcaps", "rods", "shim_x"}
    assert set(answer) == {"stable", "allowed"}
    assert set(answer["stable"]) == set(answer["allowed"]) == setpoints
    reach = answer["allowed"]["drive.amplitude"]
    assert reach["unit"] == "V"
    (interval,) = reach["intervals"]
    assert set(interval) == {"low", "high", "low_by", "high_by"}
    assert set(interval["low_by"]) == {"kind", "species", "mode", "edge", "rule"}


def test_the_gain_s_uncertainty_limits_the_amplitude(file: Path) -> None:
    """420 V / 1.02."""
    allowed = trapd(f"window {file} --json").json["allowed"]["drive.amplitude"]["intervals"][-1]
    assert allowed["high"] == pytest.approx(420 / 1.02, rel=1e-12)
    assert allowed["high_by"]["kind"] == "limit"


def test_the_synthesizer_s_level_limits_the_frequency(file: Path) -> None:
    """260 V from 12 V needs a gain of 21.67 V/V: 38 / sqrt(1 + (2 Q df / f0)^2), so |df| is at most 75.6 kHz."""
    reach_hz = 21e6 / (2 * 200) * math.sqrt((38 * 12 / 260) ** 2 - 1)
    (interval,) = trapd(f"window {file} --json").json["allowed"]["drive.frequency"]["intervals"]
    assert interval["low"] == pytest.approx(21e6 - reach_hz, abs=0.1)
    assert interval["high"] == pytest.approx(21e6 + reach_hz, abs=0.1)
    assert interval["low_by"]["rule"] == interval["high_by"]["rule"] == "level"


def test_allowed_lies_inside_stable(file: Path) -> None:
    answer = trapd(f"window {file} endcaps=300V --json").json
    for name, allowed in answer["allowed"].items():
        for interval in allowed["intervals"]:
            assert any(
                one["low"] <= interval["low"] and interval["high"] <= one["high"]
                for one in answer["stable"][name]["intervals"]
            ), name


def test_what_is_read_from_the_table_can_be_asked_for(file: Path) -> None:
    """Ends are shortened inwards: 411.764 V, where rounding would say 411.765 V and the guard would refuse it."""
    table = trapd(f"window {file}").out
    assert "411.764 V" in table
    assert trapd(f"judge {file} drive.amplitude=411.764V").code == 0
    assert trapd(f"judge {file} drive.amplitude=411.765V").code == 3


def test_each_end_says_what_it_is_caused_by(file: Path) -> None:
    out = trapd(f"window {file}").out
    assert "beta = 0 of 40Ca+ y" in out
    assert "min_secular_frequency of 40Ca+ z" in out
    assert "level" in out


def test_an_empty_trap_has_the_limits_alone(file: Path) -> None:
    answer = trapd(f"window {file} --ions none --json").json["allowed"]["endcaps"]["intervals"]
    assert [(one["low"], one["high"]) for one in answer] == [(0, 900)]


def test_where_nothing_is_allowed_it_says_nowhere(file: Path) -> None:
    ended = trapd(f"window {file} drive.amplitude=5V endcaps=300V")
    assert ended.code == 0
    assert "nowhere" in ended.out
