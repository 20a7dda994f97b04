"""A string or a boolean is no number, a number is finite, and a refused body sends nothing."""

from __future__ import annotations

import httpx2
import pytest

from tests.api.test_errors import JSON, assert_shape
from tests.running import RunningTrap


@pytest.mark.parametrize(
    "number",
    [
        "true",
        '"120"',
        "null",
        "[120]",
        '{"v": 120}',
        "NaN",
        "Infinity",
        "-Infinity",
        "1e999",
        "9" * 400,
        "9" * 5000,
        "1e13",
    ],
)
@pytest.mark.parametrize("path", ["/v1/set", "/v1/judge", "/v1/window"])
def test_what_is_no_finite_number_is_a_422(trap: RunningTrap, local: httpx2.Client, path: str, number: str) -> None:
    before = len(trap.rack.received)
    why = ', "why": "a test"' if path == "/v1/set" else ""
    raw = f'{{"values": {{"endcaps": {number}}}{why}}}'.encode()
    assert_shape(local.post(path, content=raw, headers=JSON), 422, "bad_request")
    assert len(trap.rack.received) == before


@pytest.mark.parametrize("hertz", ["0", "-1", "1e-300", "0.999"])
@pytest.mark.parametrize("path", ["/v1/judge", "/v1/window"])
def test_a_drive_that_does_not_oscillate_is_a_422(local: httpx2.Client, path: str, hertz: str) -> None:
    raw = f'{{"values": {{"drive.frequency": {hertz}}}}}'.encode()
    assert_shape(local.post(path, content=raw, headers=JSON), 422, "bad_request")


@pytest.mark.parametrize(
    ("name", "value"),
    [(name, sign * 1e12) for name in ("drive.amplitude", "endcaps") for sign in (1, -1)]
    + [("drive.frequency", 1e12), ("drive.frequency", 10.0)],
)
def test_a_state_far_beyond_every_limit_has_a_verdict(local: httpx2.Client, name: str, value: float) -> None:
    answer = local.post("/v1/judge", json={"values": {name: value}})
    assert answer.status_code == 200, answer.text
    assert ("limit", name) in [(one["rule"], one["quantity"]) for one in answer.json()["reasons"]]


@pytest.mark.parametrize("why", ["", "  ", "a\nb", "a\x1b[2Jb", "x" * 501, 5, None, ["x"]])
def test_a_reason_is_one_printable_line(local: httpx2.Client, why: object) -> None:
    answer = local.post("/v1/set", json={"values": {"endcaps": 120.0}, "why": why})
    assert_shape(answer, 422, "bad_request")


def test_a_reason_that_is_no_unicode_is_a_422(local: httpx2.Client) -> None:
    raw = b'{"values": {"endcaps": 120}, "why": "\\ud800"}'
    assert_shape(local.post("/v1/set", content=raw, headers=JSON), 422, "bad_request")


def test_a_move_without_a_reason_or_a_setpoint_is_a_422(local: httpx2.Client) -> None:
    assert_shape(local.post("/v1/set", json={"values": {"endcaps": 120.0}}), 422, "bad_request")
    assert_shape(local.post("/v1/set", json={"values": {}, "why": "a test"}), 422, "bad_request")


@pytest.mark.parametrize("number", [0, -1, 1.5, True, "2", 10**9])
def test_ions_are_counted_in_whole_numbers(local: httpx2.Client, number: object) -> None:
    body = {"presence": "held", "ions": {"40Ca+": number}, "why": "a test"}
    assert_shape(local.post("/v1/ions", json=body), 422, "bad_request")


def test_the_message_names_the_place_what_was_found_and_what_was_expected(local: httpx2.Client) -> None:
    found = local.post("/v1/set", json={"values": {"endcaps": "120 V"}, "why": "a test"}).json()
    assert found["details"]["mistakes"] == [
        {"at": "values.endcaps", "found": "'120 V'", "expected": "Input should be a valid number"}
    ]
    assert found["message"] == "values.endcaps: Input should be a valid number, found '120 V'; nothing was sent"
    blank = local.post("/v1/set", json={"values": {"endcaps": 120}, "why": " "}).json()
    assert blank["message"] == "why: expected printable text on one line, not blank, found ' '; nothing was sent"


def test_a_name_that_is_no_setpoint_or_species_is_told_with_those_that_are(local: httpx2.Client) -> None:
    unknown = assert_shape(local.post("/v1/judge", json={"values": {"endcap": 1.0}}), 422, "bad_request")
    assert "endcaps, rods, shim_x" in unknown["message"]
    unknown = assert_shape(local.post("/v1/judge", json={"values": {}, "ions": {"41Ca+": 1}}), 404, "not_found")
    assert "40Ca+" in unknown["message"]
