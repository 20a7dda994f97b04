"""Numbers, times and states as words."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from trapd.cli.amounts import amount, assignment, duration, ends_of
from trapd.cli.entries import sentence
from trapd.cli.status import state_sentence
from trapd.cli.words import read_contents, read_moment
from trapd.config.quantity import parse_assignments
from trapd.errors import BadRequest
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents

NOON = datetime(2026, 3, 1, 12, tzinfo=UTC)
VOLTS = st.floats(min_value=1e-3, max_value=1e3)


@pytest.mark.parametrize(
    ("value", "unit", "words"),
    [
        (2.155e6, "Hz", "2.155 MHz"),
        (825_260.0, "Hz", "825.26 kHz"),
        (49.5, "Hz", "49.5 Hz"),
        (-0.0, "V", "0 V"),
        (8.18, "eV", "8.18 eV"),
        (1.0, "1", "1"),
        (None, "V", "-"),
    ],
)
def test_amounts_have_their_unit(value: float | None, unit: str, words: str) -> None:
    assert amount(value, unit) == words


@pytest.mark.parametrize(("seconds", "words"), [(0.003, "3 ms"), (0.8, "0.8 s"), (42.2, "42 s"), (200.0, "3 min 20 s")])
def test_durations_are_short(seconds: float, words: str) -> None:
    assert duration(seconds) == words


@given(nearest=VOLTS, beyond=VOLTS)
def test_what_is_pasted_lies_on_the_allowed_side_of_the_nearest_value(nearest: float, beyond: float) -> None:
    """Allowed is everything away from what was asked; a part in 1e8 is given up for a short number."""
    for asked in (nearest + beyond, nearest - beyond):
        (pasted,) = parse_assignments([assignment("endcaps", nearest, asked)]).values()
        inwards = (nearest - pasted) * (1 if asked > nearest else -1)
        assert -1e-12 * nearest <= inwards <= 1e-8 * nearest


@given(st.floats(min_value=1e3, max_value=1e9))
def test_a_frequency_survives_pasting(frequency: float) -> None:
    (pasted,) = parse_assignments([assignment(FREQUENCY, frequency)]).values()
    assert pasted == pytest.approx(frequency, rel=1e-11)


@given(VOLTS)
def test_ends_of_intervals_are_shortened_inwards(volts: float) -> None:
    lower, upper = (float(end.split()[0]) for end in ends_of(AMPLITUDE, {"low": volts, "high": volts}))
    assert upper <= volts * (1 + 1e-12)
    assert lower >= volts * (1 - 1e-12)
    assert lower - upper <= 2e-5 * volts


@pytest.mark.parametrize(
    ("words", "contents"),
    [
        (["40Ca+=2"], Contents(presence="held", ions={"40Ca+": 2})),
        (["40Ca+=2,88Sr+"], Contents(presence="held", ions={"40Ca+": 2, "88Sr+": 1})),
        (["none"], Contents(presence="none")),
        (["unknown"], Contents(presence="unknown")),
        (["loading", "40Ca+", "88Sr+"], Contents(presence="loading", incoming=("40Ca+", "88Sr+"))),
    ],
)
def test_contents_are_read(words: list[str], contents: Contents) -> None:
    assert read_contents(words) == contents


@pytest.mark.parametrize("words", [[], ["40Ca+=-1"], ["40Ca+=1", "40Ca+=1"], ["none", "40Ca+"], ["loading"], ["=3"]])
def test_contents_that_mean_nothing_are_refused(words: list[str]) -> None:
    with pytest.raises(BadRequest):
        read_contents(words)


@pytest.mark.parametrize(
    ("text", "moment"),
    [
        ("90s", datetime(2026, 3, 1, 11, 58, 30, tzinfo=UTC)),
        ("1h", datetime(2026, 3, 1, 11, tzinfo=UTC)),
        ("1.5 d", datetime(2026, 2, 28, 0, tzinfo=UTC)),
        ("2026-03-01T10:00:00+02:00", datetime(2026, 3, 1, 8, tzinfo=UTC)),
    ],
)
def test_moments_are_read(text: str, moment: datetime) -> None:
    assert read_moment(text, NOON) == moment


@pytest.mark.parametrize("text", ["", "soon", "h", "-1h", "1 h ago", "9999999999999d", "2026-13-01"])
def test_moments_that_are_none_are_refused(text: str) -> None:
    with pytest.raises(BadRequest, match="expected a while such as 1h"):
        read_moment(text, NOON)


def situation(**changes: Any) -> dict[str, Any]:
    held = {"presence": "held", "ions": {"40Ca+": 2}, "incoming": []}
    return {"outputs": {"drive.output": True}, "contents": held, "moving": None, "off_pending": [], **changes}


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, "Holding 2 40Ca+."),
        (
            {"moving": {"setpoint": "endcaps", "step": 12, "steps": 40}},
            "Moving endcaps, step 12 of 40; holding 2 40Ca+.",
        ),
        (
            {"outputs": {"drive.output": False}, "contents": {"presence": "none", "ions": {}, "incoming": []}},
            "Off.",
        ),
        (
            {"contents": {"presence": "none", "ions": {}, "incoming": []}},
            "On; nothing is in the trap.",
        ),
        (
            {"contents": {"presence": "unknown", "ions": {}, "incoming": []}},
            "On; what is in the trap is unknown, every species of the file guarded.",
        ),
        ({"off_pending": ["dc"]}, "Off was asked for and is not confirmed by dc."),
    ],
)
def test_the_state_is_one_sentence(changes: dict[str, Any], words: str) -> None:
    assert state_sentence(situation(**changes)) == words


def test_an_entry_of_another_version_is_shown_as_it_is() -> None:
    assert sentence({"kind": "verdict", "data": {"verdict": "fine"}}) == '{"verdict": "fine"}'
    assert sentence({"kind": "weather", "data": {"rain": True}}) == '{"rain": true}'
