"""What fuzzing has found, each as small as it could be made, so that it is tried each time and not by luck."""

from __future__ import annotations

import io
import re
from pathlib import Path

import pytest

from tests.drivers.peer import Peer, answering
from tests.fuzz.test_trap_file import assert_read_or_told
from tests.record.samples import BOOT, StandingClock, plain, write_day
from tests.traps import NORTH_BENCH
from trapd.errors import RecordFailed
from trapd.record import Reader, Record, export, verify
from trapd_drivers.errors import DriverError, Malformed, ProfileError
from trapd_drivers.scpi.rf_source import ScpiRfSource

OTHER = (Path(__file__).parent.parent / "drivers" / "other.toml").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("[trap]", '"two\\nlines" = 1\n[trap]'),
        ("[trap]", '"\\u001b[2J" = 1\n[trap]'),
        ("[electrodes.rods]", '[electrodes."r\\nods"]'),
        ("[points.work]", '[points."wo\\u2028rk"]'),
        ('"sine"', '"si\\u0085ne"'),
        ('"sine"', '"si\\u009b2Jne"'),
    ],
)
def test_what_a_trap_file_quotes_cannot_break_the_line_that_tells_of_it(tmp_path: Path, old: str, new: str) -> None:
    assert not assert_read_or_told(tmp_path / "trap.toml", NORTH_BENCH.replace(old, new, 1).encode())


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ('"2.5 mm"', '"1e-308 mm"'),
        ('"2.5 mm"', '"1e308 mm"'),
        ('"0.50 mm"', '"1e-308 mm"'),
        ('"0.50 mm"', '"1e308 mm"'),
    ],
)
def test_a_length_whose_square_no_number_holds_is_told(tmp_path: Path, old: str, new: str) -> None:
    assert not assert_read_or_told(tmp_path / "trap.toml", NORTH_BENCH.replace(old, new, 1).encode())


def source(tmp_path: Path, peer: Peer, old: str = "", new: str = "") -> ScpiRfSource:
    """An RF source in dBm."""
    text = re.sub(r"(write_end|read_end) = .*", r'\1 = "\\n"', OTHER)
    text = text.replace("spacing_s = 0.02", "spacing_s = 0.0").replace(
        "longest_reply_bytes = 512", "longest_reply_bytes = 9000"
    )
    assert old in text
    (tmp_path / "ours.toml").write_text(text.replace(old, new), encoding="utf-8")
    return ScpiRfSource.open(peer.resource, profile=str(tmp_path / "ours.toml"), timeout_s=0.3)


SOUND = {"*idn?": "MAKER,MODEL,1,1.0", ":SYSTEM:ERROR:NEXT?": '0,"No error"'}
ASKED_LIMITS = ("low = -50.0\nhigh = 25.0", 'low = "POW? MIN"\nhigh = "POW? MAX"')


def test_more_decibels_than_a_number_can_hold_are_malformed(tmp_path: Path) -> None:
    with Peer(answering(SOUND | {"POW:AMPL?": "VOLT 7000"})) as peer, pytest.raises(Malformed):
        source(tmp_path, peer).read_level_v()


def test_a_highest_level_beyond_all_numbers_is_malformed(tmp_path: Path) -> None:
    limits = {"POW? MIN": "VOLT -50", "POW? MAX": "VOLT 7000"}
    with Peer(answering(SOUND | limits)) as peer, pytest.raises(Malformed):
        source(tmp_path, peer, *ASKED_LIMITS)


def test_a_lowest_level_that_is_nothing_at_all_is_no_obstacle_or_a_driver_error(tmp_path: Path) -> None:
    """-9000 dBm is 0 V to the last bit, and 0 V is minus infinity in dBm."""
    limits = {"POW? MIN": "VOLT -9000", "POW? MAX": "VOLT 20"}
    with Peer(answering(SOUND | limits)) as peer:
        try:
            source(tmp_path, peer, *ASKED_LIMITS).set_level_v(1.0)
        except DriverError:
            return
        # 1 V peak at 50 ohm, twice what the instrument displays: 10 lg((0.5 V)^2 / (2 * 50 ohm * 1 mW)) = 3.979 dBm
        assert peer.received[-2:] == ["POW:AMPL 4.00", ":SYSTEM:ERROR:NEXT?"]


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("high = 25.0", "high = 7000.0"),
        ("low = -50.0", "low = -9000.0"),
        ("resolution = 0.05", "resolution = 7000.0"),
        ("boundaries = [0.0]", "boundaries = [7000.0]"),
    ],
)
def test_a_profile_with_levels_beyond_all_numbers_is_told(tmp_path: Path, old: str, new: str) -> None:
    with Peer(answering(SOUND)) as peer, pytest.raises(ProfileError):
        source(tmp_path, peer, old, new)


def test_an_error_code_of_more_digits_than_python_converts_is_malformed(tmp_path: Path) -> None:
    """Python's limit is 4300 digits (sys.int_info.default_max_str_digits); plain's replies end before, others' need not."""
    with Peer(answering(SOUND | {":SYSTEM:ERROR:NEXT?": f'-{"1" * 4400},"x"'})) as peer, pytest.raises(Malformed):
        source(tmp_path, peer)


@pytest.fixture
def closed(tmp_path: Path) -> Path:
    record = Record.open(tmp_path / "trap.sqlite", clock=StandingClock(), boot_id=BOOT)
    write_day(record)
    assert record.close(timeout_s=10)
    return tmp_path / "trap.sqlite"


def behind_its_back(path: Path, old: bytes, new: bytes) -> None:
    content = path.read_bytes()
    assert old in content
    assert len(old) == len(new)
    path.write_bytes(content.replace(old, new))


@pytest.mark.parametrize("body", ["NULL", "x'7b7d'"])
def test_a_body_that_is_no_text_is_reported(closed: Path, body: str) -> None:
    """Nothing but damage puts it there: the table is STRICT."""
    with_any_type(closed)
    connection = plain(closed)
    connection.execute(f"UPDATE entries SET body = {body} WHERE seq = 3")
    connection.close()
    as_before(closed)
    assert (3, "entries") in [(one.seq, one.table) for one in verify(closed).problems]
    with pytest.raises(RecordFailed):
        Record.open(closed, clock=StandingClock(), boot_id=BOOT)


def with_any_type(path: Path) -> None:
    """Without triggers and types, so that anything can be put in."""
    connection = plain(path)
    connection.execute("CREATE TABLE kept AS SELECT * FROM sqlite_schema WHERE type = 'trigger' OR name = 'entries'")
    for (name,) in connection.execute("SELECT name FROM kept WHERE type = 'trigger'").fetchall():
        connection.execute(f"DROP TRIGGER {name}")
    connection.execute("PRAGMA writable_schema = ON")
    sql = "replace(replace(sql, ' NOT NULL', ''), 'STRICT', '')"
    connection.execute(f"UPDATE sqlite_schema SET sql = {sql} WHERE name = 'entries'")
    connection.close()


def as_before(path: Path) -> None:
    connection = plain(path)
    connection.execute("PRAGMA writable_schema = ON")
    entries = "(SELECT sql FROM kept WHERE name = 'entries')"
    connection.execute(f"UPDATE sqlite_schema SET sql = {entries} WHERE name = 'entries'")
    for (sql,) in connection.execute("SELECT sql FROM kept WHERE type = 'trigger'").fetchall():
        connection.execute(sql)
    connection.execute("DROP TABLE kept")
    connection.close()


@pytest.mark.parametrize("change", ["INSERT INTO alembic_version VALUES ('0001')", "DELETE FROM alembic_version"])
def test_a_record_of_two_schemas_or_none_is_damaged(closed: Path, change: str) -> None:
    connection = plain(closed)
    connection.execute(change)
    connection.close()
    with pytest.raises(RecordFailed):
        verify(closed)


def test_a_schema_that_sqlite_cannot_even_quote_is_damaged(closed: Path) -> None:
    """sqlite3 raises UnicodeDecodeError when SQLite's own message quotes bytes that are no text."""
    behind_its_back(closed, b"CREATE TABLE entries", b"CREATE \xffABLE entries")
    with pytest.raises(RecordFailed):
        verify(closed)


@pytest.mark.parametrize("damage", [b'"val\xffe":', b'"value"x', b'"val\x00e":'])
def test_a_question_that_meets_a_damaged_body_is_told_so(closed: Path, damage: bytes) -> None:
    behind_its_back(closed, b'"value":', damage)
    with Reader.open(closed) as reader, pytest.raises(RecordFailed):
        reader.entries()
    with pytest.raises(RecordFailed):
        export(closed, io.StringIO(), "jsonl")
