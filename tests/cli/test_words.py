"""Numbers, times and states as words."""

from __future__ import annotations

import time
from datetime import UTC, datetime
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trapd.cli.amounts import amount, assignment, duration, ends_of, hertz, rate, with_uncertainty
from trapd.cli.entries import sentence
from trapd.cli.finding import finding_words
from trapd.cli.status import plan_lines, state_sentence
from trapd.cli.words import read_contents, read_moment, read_until, utc
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


@pytest.mark.parametrize(
    ("value_hz", "uncertainty_hz", "words"),
    [
        (2_155_021.3, 48.0, "2.155021 MHz ± 48 Hz"),
        (2_155_021.3, 9.96, "2.155021 MHz ± 10 Hz"),
        (2_155_021.3, 0.84, "2.15502130 MHz ± 0.84 Hz"),
        (2_155_021.3, 12_345.0, "2.155 MHz ± 12 kHz"),
        (825_261.0, 120.0, "825.26 kHz ± 120 Hz"),
        (412.3, 3.0, "412.3 Hz ± 3 Hz"),
        (825_261.0, 0.0, "825.261 kHz"),
    ],
)
def test_a_frequency_has_as_many_digits_as_its_uncertainty_leaves_it(
    value_hz: float, uncertainty_hz: float, words: str
) -> None:
    """Two digits of uncertainty, as the GUM has it (JCGM 100:2008, 7.2.6) [mem]."""
    assert with_uncertainty(value_hz, uncertainty_hz) == words


@given(st.floats(min_value=1e2, max_value=1e8), st.floats(min_value=1e-3, max_value=1e6))
def test_a_frequency_is_never_rounded_by_more_than_a_tenth_of_its_uncertainty(
    value_hz: float, uncertainty_hz: float
) -> None:
    shown, unit = with_uncertainty(value_hz, uncertainty_hz).split(" ± ")[0].split()
    factor = {"Hz": 1.0, "kHz": 1e3, "MHz": 1e6}[unit]
    assert abs(float(shown) * factor - value_hz) <= 0.051 * uncertainty_hz + 1e-9 * value_hz


@pytest.mark.parametrize(
    ("value_hz", "words"), [(21.4, "+21.4 Hz"), (-1234.0, "-1.23 kHz"), (999.6, "+1 kHz"), (0.0, "+0 Hz")]
)
def test_a_difference_has_its_sign_and_no_exponent(value_hz: float, words: str) -> None:
    assert hertz(value_hz, signed=True) == words


def test_a_rate_can_be_read() -> None:
    assert rate(12_345.4) == "12 345 /s"


@pytest.mark.parametrize(("seconds", "words"), [(0.003, "3 ms"), (0.8, "0.8 s"), (42.2, "42 s"), (200.0, "3 min 20 s")])
def test_durations_are_short(seconds: float, words: str) -> None:
    assert duration(seconds) == words


@settings(deadline=None)
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


@pytest.mark.parametrize(
    ("text", "moment"),
    [
        ("30min", datetime(2026, 3, 1, 12, 30, tzinfo=UTC)),
        ("2d", datetime(2026, 3, 3, 12, tzinfo=UTC)),
        ("2026-03-01T18:00Z", datetime(2026, 3, 1, 18, tzinfo=UTC)),
        ("2026-03-01T18:00+02:00", datetime(2026, 3, 1, 16, tzinfo=UTC)),
        ("18:00", datetime(2026, 3, 1, 17, tzinfo=UTC)),
        ("9:30", datetime(2026, 3, 2, 8, 30, tzinfo=UTC)),
        ("13:00", datetime(2026, 3, 2, 12, tzinfo=UTC)),
    ],
)
def test_an_end_is_read_and_a_time_of_day_is_the_next_one_here(
    monkeypatch: pytest.MonkeyPatch, text: str, moment: datetime
) -> None:
    monkeypatch.setenv("TZ", "UTC-1")  # POSIX: one hour east of Greenwich
    time.tzset()
    try:
        assert read_until(text, NOON) == moment
    finally:
        monkeypatch.undo()
        time.tzset()


@pytest.mark.parametrize("text", ["", "soon", "25:00", "12:60", "-1h", "2026-13-01"])
def test_an_end_that_is_none_is_refused(text: str) -> None:
    with pytest.raises(BadRequest, match="expected a while such as 30min"):
        read_until(text, NOON)


@pytest.mark.parametrize("text", ["2026-03-01T12:00:00Z", "2026-03-01T11:00Z", "0s"])
def test_an_end_that_has_passed_is_refused(text: str) -> None:
    with pytest.raises(BadRequest, match="has passed"):
        read_until(text, NOON)


def test_a_time_is_shown_in_utc() -> None:
    assert utc(1_772_366_400_000_000) == "2026-03-01 12:00:00 UTC"


def situation(**changes: Any) -> dict[str, Any]:
    held = {"presence": "held", "ions": {"40Ca+": 2}, "incoming": []}
    return {
        "outputs": {"drive.output": True},
        "contents": held,
        "moving": None,
        "scanning": None,
        "off_pending": [],
    } | changes


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
        (
            {
                "scanning": {
                    "scan": "radial",
                    "mode": "x",
                    "species": "40Ca+",
                    "author": "ada",
                    "pass_number": 3,
                    "passes": 12,
                }
            },
            "Scanning radial (x of 40Ca+) for ada, pass 3 of 12; holding 2 40Ca+.",
        ),
        ({"off_pending": ["dc"]}, "Off was asked for and is not confirmed by dc."),
    ],
)
def test_the_state_is_one_sentence(changes: dict[str, Any], words: str) -> None:
    assert state_sentence(situation(**changes)) == words


def test_a_tickle_that_does_not_confirm_does_not_hide_what_is_held() -> None:
    """Nobody asked for off: RF is on still. Off would have it off, or among those that do not confirm."""
    pending = {"off_pending": ["awg"]}
    words = "Holding 2 40Ca+; the tickle (awg) is not confirmed off."
    assert state_sentence(situation(**pending), "awg") == words
    asked = "Off was asked for and is not confirmed by "
    assert state_sentence(situation(**pending), "other") == f"{asked}awg."
    assert state_sentence(situation(off_pending=["rf", "awg"]), "awg") == f"{asked}rf, awg."
    assert state_sentence(situation(outputs={"drive.output": False}, **pending), "awg") == f"{asked}awg."


NOON_US = 1_772_366_400_000_000


def told(**changes: Any) -> list[str]:
    claim = {"who": "ada", "why": "aligning", "until_us": NOON_US + 10}
    pause = {"who": "ben", "why": "visitors", "until_us": NOON_US + 60_000_000}
    upcoming = [{"schedule": "x", "due_us": NOON_US + 30_000_000}, {"schedule": "y", "due_us": NOON_US + 60_000_000}]
    lines = plan_lines({"claim": claim, "pause": pause} | changes, upcoming, NOON_US)
    return ["".join(part if isinstance(part, str) else part[0] for part in line) for line in lines]


def test_a_claim_and_a_pause_are_shown_until_they_end_and_what_is_due_meanwhile_is_marked() -> None:
    assert told() == [
        "claimed  by ada until 2026-03-01 12:00:00 UTC: aligning",
        "paused  the schedule, by ben until 2026-03-01 12:01:00 UTC: visitors",
        "next due: x 2026-03-01 12:00:30 UTC (paused), y 2026-03-01 12:01:00 UTC",
    ]
    over = {"who": "ada", "why": "aligning", "until_us": NOON_US}
    assert told(claim=over, pause=over) == ["next due: x 2026-03-01 12:00:30 UTC, y 2026-03-01 12:01:00 UTC"]
    assert told(claim={**over, "until_us": None}, pause=None)[0] == "claimed  by ada: aligning"


def test_a_finding_without_a_number_is_a_message_to_which_something_can_be_added() -> None:
    vanished = {"state": "vanished", "message": "The counts vanished.", "frequency_hz": 2e6, "uncertainty_hz": 48.0}
    assert finding_words(vanished) == "The counts vanished"


FOUND = {"differences": [], "unreachable": {}, "open_intents": [], "open_scan": None, "tickling": False}


@pytest.mark.parametrize(
    ("kind", "data", "words"),
    [
        (
            "alarm",
            {"condition": "counts vanished", "request": 7, "message": "The ion may be lost."},
            "counts vanished: The ion may be lost. (request 7)",
        ),
        ("found", {"unreachable": {"dc": "no answer in 1 s"}}, "dc does not answer: no answer in 1 s"),
        ("found", {"unreachable": {}}, "every instrument answers"),
        ("found", {"differences": ["endcaps is 5 V"], "values": {}, "programmed": {}}, "endcaps is 5 V"),
        (
            "found",
            {**FOUND, "open_intents": [8, 9], "open_scan": 3, "tickling": True},
            "nobody knows what came of intent 8, 9; the scan of request 3 was cut off; the tickle was on",
        ),
        ("found", FOUND, "every instrument answers"),
        (
            "identity",
            {
                "instrument": "rf",
                "manufacturer": "Plain",
                "model": "RF-1",
                "serial": "7",
                "firmware": "1.0",
                "simulated": True,
            },
            "rf: Plain RF-1 7 1.0 (simulated)",
        ),
        ("stop", {}, "the daemon stopped in order"),
        ("clock", {"step_s": -3600.5}, "the wall clock stepped by -3600.5 s"),
    ],
)
def test_every_kind_of_entry_is_a_sentence(kind: str, data: dict[str, Any], words: str) -> None:
    assert sentence({"kind": kind, "data": data}) == words


def test_an_entry_of_another_version_is_shown_as_it_is() -> None:
    assert sentence({"kind": "verdict", "data": {"verdict": "fine"}}) == '{"verdict": "fine"}'
    assert sentence({"kind": "weather", "data": {"rain": True}}) == '{"rain": true}'
