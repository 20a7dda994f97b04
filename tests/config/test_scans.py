"""Scans and when they are due, as a trap file says it."""

from __future__ import annotations

import json
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from tests.traps import NORTH_BENCH, RING, SCANS, TENSOR, write
from trapd.config.cron import wanted_instead
from trapd.config.digest import as_data
from trapd.config.read import parse, read
from trapd.config.records import CounterSection, DueSection, ScanSection, TickleSection
from trapd.errors import ConfigError

FILE = Path("/bench/trap.toml")
X = ScanSection(name="x", mode="x", tickle_v=0.5e-3, span_hz=200e3, dwell_s=0.02, target_hz=50.0)


def test_the_example_is_read_in_si_and_the_rest_has_its_defaults(tmp_path: Path) -> None:
    config = read(write(tmp_path, NORTH_BENCH + SCANS, tickle=40003, counter=40004))
    assert config.tickle == TickleSection(instrument="tickle", level_max_v=0.02)
    assert config.counter == CounterSection(instrument="counter", floor_per_s=500.0)
    assert config.scans == {"x": X}
    assert (X.species, X.width_hz, X.passes, X.min_contrast, X.method) == (None, 2000.0, 12, 0.05, "uniform")
    assert config.schedule == (DueSection(name="x", scan="x", cron="*/30 * * * *"),)
    assert config.instruments["counter"].resource == "TCPIP::127.0.0.1::40004::SOCKET"


def test_everything_about_a_scan_may_be_said() -> None:
    more = 'species = "171Yb+"\nwidth = "500 Hz"\npasses = 25\nmin_contrast = "10 %"\n'
    config = parse(RING + SCANS.replace('mode = "x"\n', 'mode = "z"\n' + more), FILE)
    (scan,) = config.scans.values()
    assert (scan.mode, scan.species, scan.width_hz, scan.passes, scan.min_contrast) == ("z", "171Yb+", 500.0, 25, 0.1)


def test_a_file_without_scans_is_as_it_was() -> None:
    config = parse(NORTH_BENCH, FILE)
    assert (config.tickle, config.counter, config.scans, config.schedule) == (None, None, {}, ())


def test_tickle_and_counter_need_no_scan() -> None:
    config = parse(NORTH_BENCH + SCANS.split("[scans.x]")[0], FILE)
    assert config.tickle is not None
    assert (config.scans, config.schedule) == ({}, ())


def test_offline_neither_tickle_nor_counter_needs_an_instrument() -> None:
    text = SCANS.replace('instrument = "tickle"\n', "").split("[instruments")[0] + "[scans" + SCANS.split("[scans")[1]
    config = parse(TENSOR + text, FILE)
    assert config.tickle == TickleSection(instrument=None, level_max_v=0.02)
    assert config.counter == CounterSection(instrument="counter", floor_per_s=500.0)
    assert list(config.scans) == ["x"]


def test_a_scan_without_tickle_and_counter_is_told_of_both() -> None:
    with pytest.raises(ConfigError) as caught:
        parse(TENSOR + "[scans.x]" + SCANS.split("[scans.x]")[1], FILE)
    assert [line.removeprefix(f"{FILE}: ") for line in caught.value.message.splitlines()] == [
        "scans: there is no [tickle]; expected one, which every scan needs",
        "scans: there is no [counter]; expected one, which every scan needs",
    ]


def test_a_scan_may_be_due_at_several_times_under_names_of_their_own() -> None:
    config = parse(NORTH_BENCH + SCANS + '[[schedule]]\nname = "nightly"\nscan = "x"\ncron = "0 3 * * mon-fri"\n', FILE)
    assert [(due.name, due.scan) for due in config.schedule] == [("x", "x"), ("nightly", "x")]


def test_the_bounds_themselves_are_allowed() -> None:
    text = SCANS.replace('"0.5 mV"', '"20 mV"').replace('"20 ms"', '"1 ms"').replace('"50 Hz"', '"50 Hz"\npasses = 2')
    scan = parse(NORTH_BENCH + text, FILE).scans["x"]
    assert (scan.tickle_v, scan.dwell_s, scan.passes) == (0.02, 0.001, 2)
    assert parse(NORTH_BENCH + text.replace('"1 ms"', '"10 s"'), FILE).scans["x"].dwell_s == 10.0


def test_the_record_is_told_of_scans_and_schedule() -> None:
    data = as_data(parse(NORTH_BENCH + SCANS, FILE))
    assert json.loads(json.dumps(data, allow_nan=False)) == data
    assert data["tickle"] == {"instrument": "tickle", "level_max_v": 0.02}
    assert data["counter"] == {"instrument": "counter", "floor_per_s": 500.0}
    assert (data["scans"]["x"]["span_hz"], data["scans"]["x"]["dwell_s"]) == (200e3, 0.02)
    assert data["schedule"] == [{"name": "x", "scan": "x", "cron": "*/30 * * * *"}]


# expression, and its first three times after 2026-03-01T12:00Z, a Sunday (cal 3 2026), worked out by hand from crontab(5)
TIMES: list[tuple[str, tuple[str, str, str]]] = [
    ("* * * * *", ("03-01 12:01", "03-01 12:02", "03-01 12:03")),
    ("*/30 * * * *", ("03-01 12:30", "03-01 13:00", "03-01 13:30")),
    ("0,20 3 * * *", ("03-02 03:00", "03-02 03:20", "03-03 03:00")),
    ("5 9-17/4 * * *", ("03-01 13:05", "03-01 17:05", "03-02 09:05")),
    ("0 0 1,31 jan-mar *", ("03-31 00:00", "01-01 00:00", "01-31 00:00")),
    ("0 0 29 2 *", ("02-29 00:00", "02-29 00:00", "02-29 00:00")),
    ("59 23 * 3,apr mon", ("03-02 23:59", "03-09 23:59", "03-16 23:59")),
    ("0 6 * * sat,sun", ("03-07 06:00", "03-08 06:00", "03-14 06:00")),
    ("0 6 * * mon-wed,fri", ("03-02 06:00", "03-03 06:00", "03-04 06:00")),
    ("00 06 1-7 */6 *", ("07-01 06:00", "07-02 06:00", "07-03 06:00")),
]


@pytest.mark.parametrize(("cron", "times"), TIMES)
def test_what_is_taken_means_to_the_scheduler_what_crontab_means(cron: str, times: tuple[str, str, str]) -> None:
    from apscheduler.triggers.cron import CronTrigger

    assert wanted_instead(cron) is None
    trigger, moment, found = CronTrigger.from_crontab(cron, timezone=UTC), datetime(2026, 3, 1, 12, tzinfo=UTC), []
    for _ in times:
        moment = trigger.get_next_fire_time(None, moment + timedelta(seconds=1))
        found.append(f"{moment:%m-%d %H:%M}")
    assert tuple(found) == times


# what is refused, and what the message must say; names with steps are silently taken apart by some programs
REFUSED: list[tuple[str, str]] = [
    ("*/30 * * *", "five fields in UTC"),
    ("*/30 * * * * *", "five fields in UTC"),
    ("@daily", "five fields in UTC"),
    ("60 * * * *", 'as the minute "*" or 0 to 59'),
    ("-1 * * * *", 'as the minute "*" or 0 to 59'),
    ("5-1 * * * *", 'not "5-1"'),
    ("*/0 * * * *", 'not "*/0"'),
    ("*/60 * * * *", 'not "*/60"'),
    ("5/15 * * * *", 'not "5/15"'),
    ("5-5/1 * * * *", 'not "5-5/1"'),
    ("5,,6 * * * *", 'not "5,,6"'),
    ("1.5 * * * *", 'not "1.5"'),
    ("٣ * * * *", 'not "٣"'),
    ("² * * * *", 'not "²"'),
    ("+5 * * * *", 'not "+5"'),
    ("100 * * * *", 'not "100"'),
    ("* 24 * * *", 'as the hour "*" or 0 to 23'),
    ("0 0 0 * *", 'as the day of the month "*" or 1 to 31'),
    ("0 0 last * *", 'as the day of the month "*" or 1 to 31'),
    ("0 0 ? * *", 'not "?"'),
    ("0 0 * 13 *", 'as the month "*" or 1 to 12 or jan to dec'),
    ("0 0 * jan-6 *", 'not "jan-6"'),
    ("0 0 * jan-jun/2 *", 'not "jan-jun/2"'),
    ("0 0 * mon *", "as the month"),
    ("0 0 * * sat-mon", "which begins the week"),
    ("0 0 * * monday", "mon to sun"),
    ("0 0 * * jan", "as the weekday"),
    *((f"0 0 * * {day}", "programs disagree whether 0 is Monday or Sunday") for day in "01234567"),
    ("0 0 * * 1-5", "programs disagree whether 0 is Monday or Sunday"),
    ("0 0 * * */2", "weekdays by name"),
    ("0 0 1 * mon", "whether one of the two is enough or both must hold"),
    ("0 0 30 2 *", "a day that one of its months has"),
    ("0 0 31 4,jun *", "a day that one of its months has"),
]


@pytest.mark.parametrize(("cron", "said"), REFUSED)
def test_what_is_wrong_or_read_differently_elsewhere_is_refused(cron: str, said: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(NORTH_BENCH + SCANS.replace("*/30 * * * *", cron), FILE)
    assert "trap.toml: schedule.x.cron = " in caught.value.message
    assert said in caught.value.message
