from __future__ import annotations

import hashlib
import json
import math
from pathlib import Path
from types import MappingProxyType

import pytest

from tests.record.samples import BOOT, NOON_US, StandingClock, intent, note, plain, request
from trapd.errors import Bug
from trapd.record import NO_DIGEST, Draft, Record, SameCommit, rfc3339, verify
from trapd.record.entry import canonical, digest_of


def test_the_digest_of_nothing_is_the_published_leaf_hash() -> None:
    # RFC 6962 section 2.1, leaf hash of an empty entry: SHA-256 of one zero byte. The value is that of the test
    # vectors in public use for certificate transparency [mem].
    assert digest_of(b"") == "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d"


def test_a_stored_digest_is_the_leaf_hash_of_the_stored_bytes(record: Record, path: Path) -> None:
    record.append(note("µ and 10⁻⁹"), note()).result()
    rows = plain(path).execute("SELECT CAST(body AS BLOB), digest FROM entries").fetchall()
    assert [digest for _, digest in rows] == [hashlib.sha256(b"\x00" + body).hexdigest() for body, _ in rows]


def test_a_body_is_canonical_json_of_every_column_and_the_digest_before(record: Record, path: Path) -> None:
    first, second = record.append(note(), request()).result()
    (body,) = plain(path).execute("SELECT body FROM entries WHERE seq = 2").fetchone()
    expected = {"seq": 2, "previous": first.digest, "time_us": NOON_US, "monotonic_ns": NOON_US * 1000}
    expected |= {"boot_id": BOOT, "kind": "request", "actor": "ada", "data": request().data}
    assert body == json.dumps(expected, sort_keys=True, separators=(",", ":"))
    assert second.data == request().data


def test_the_first_entry_follows_sixty_four_zeros(record: Record, path: Path) -> None:
    assert (record.last_seq, record.head) == (0, "0" * 64)
    (entry,) = record.append(note()).result()
    (previous,) = plain(path).execute("SELECT json_extract(body, '$.previous') FROM entries").fetchone()
    assert previous == NO_DIGEST == "0" * 64
    assert (record.last_seq, record.head) == (1, entry.digest)


def test_text_of_any_script_and_control_characters_survive(record: Record) -> None:
    text = '"quoted" \\ µ 束縛 \x00 \u2028 \n'
    (entry,) = record.append(Draft(kind=text, actor=text, data={text: text})).result()
    assert (entry.kind, entry.actor, entry.data) == (text, text, {text: text})


@pytest.mark.parametrize("number", [math.inf, -math.inf, math.nan])
def test_numbers_that_are_not_finite_are_refused_before_anything_is_written(record: Record, number: float) -> None:
    for draft in (Draft(kind="found", actor="a", data={"x": [number]}), intent(number)):
        assert isinstance(record.append(note(), draft).exception(), Bug)
    assert record.last_seq == 0


@pytest.mark.parametrize(
    "draft",
    [
        Draft(kind="", actor="a", data={}),
        Draft(kind="note", actor="", data={}),
        Draft(kind="note", actor="a", data={"x": object()}),
        Draft(kind="note", actor="a", data={"x": "\ud800"}),
        Draft(kind="note", actor="a", data={"x": SameCommit(1)}),
        Draft(kind="note", actor="a", data={"x": SameCommit(-1)}),
        Draft(kind="note", actor="a", data=["a list"]),  # type: ignore[arg-type]
        intent(setpoint=None),
        intent(value="260"),
        intent(value=True),
        intent(channel=1.5),
        intent(channel=2**63),
        intent(value=10**400),
        Draft(kind="intent", actor="a", data={}),
    ],
)
def test_what_cannot_be_recorded_fails_its_own_append_and_no_other(record: Record, draft: Draft) -> None:
    before, bad, after = record.append(note()), record.append(note(), draft), record.append(note())
    assert isinstance(bad.exception(), Bug)
    assert [before.result()[0].seq, after.result()[0].seq] == [1, 2]


def test_a_draft_refers_to_earlier_drafts_of_its_commit(record: Record) -> None:
    record.append(note()).result()
    entries = record.append(note(), note(), Draft(kind="x", actor="a", data={"of": [SameCommit(0), SameCommit(1)]}))
    assert entries.result()[2].data == {"of": [2, 3]}


def test_any_mapping_and_any_sequence_are_recorded_as_plain_json(record: Record) -> None:
    data = MappingProxyType({"values": MappingProxyType({"rods": 1.0}), "ions": ("40Ca+",)})
    assert record.append(Draft(kind="note", actor="a", data=data)).result()[0].data == {
        "values": {"rods": 1.0},
        "ions": ["40Ca+"],
    }


def test_columns_hold_what_reads_back_whatever_the_caller_says_it_with(record: Record, path: Path) -> None:
    class Volts(float):
        def __eq__(self, other: object) -> bool:
            return False

        __hash__ = None  # type: ignore[assignment]

    (asked,) = record.append(intent(Volts(260.5), level=7)).result()
    assert type(asked.data["value"]) is float
    assert plain(path).execute("SELECT value, level, typeof(level) FROM intents").fetchall() == [(260.5, 7.0, "real")]
    assert verify(path).ok


def test_what_the_caller_changes_after_the_append_is_not_recorded(record: Record) -> None:
    data = {"x": 1}
    future = record.append(Draft(kind="note", actor="a", data=data))
    data["x"] = 2
    assert future.result()[0].data == {"x": 1}


def test_times_out_are_rfc_3339(record: Record, clock: StandingClock) -> None:
    # The example instants of RFC 3339 section 5.8, in seconds since the epoch by `date -u -d ... +%s`.
    assert rfc3339(482_196_050_520_000) == "1985-04-12T23:20:50.520000Z"
    assert rfc3339(851_042_397_000_000) == "1996-12-20T00:39:57.000000Z"
    clock.time_us = 482_196_050_520_000
    assert record.append(note()).result()[0].time == "1985-04-12T23:20:50.520000Z"


def test_numbers_read_back_as_the_very_numbers_written() -> None:
    for number in (0.1, 1e-310, 5e-324, 1.7976931348623157e308, -0.0, 20.9e6, 1 / 3):
        assert json.loads(canonical([number])) == [number]
