"""``trapd check``: what a file means, what is wrong with it, and who answers at its addresses."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests import traps
from tests.cli.typed import trapd
from trapd.instrument_lock import InstrumentLocks
from trapd_simulated import Rack


def test_a_good_file_is_explained(file: Path) -> None:
    ended = trapd(f"check {file}")
    assert ended.code == 0
    for words in ("north bench", "21.1 MHz", "20 kHz/s", "3 ms", "margin 5 %", "point work: accepted", "825.26 kHz"):
        assert words in ended.out


def test_scans_and_schedule_are_explained(tmp_path: Path) -> None:
    file = traps.write(tmp_path, traps.NORTH_BENCH + traps.SCANS)
    out = trapd(f"check {file}").out
    scan = next(line for line in out.splitlines() if line.startswith("x  ")).split("  ")
    cells = [cell.strip() for cell in scan if cell]
    assert cells == ["x", "x of what is held", "0.5 mV", "200 kHz", "2 kHz", "20 ms", "50 Hz", "12", "5 %"]
    assert "tickle at most 20 mV, none below 500 /s counted" in out
    assert "*/30 * * * *" in out
    answer = trapd(f"check {file} --json").json
    assert answer["scans"]["x"]["tickle_v"] == 0.5e-3
    assert answer["counter"]["floor_per_s"] == 500.0
    assert answer["schedule"] == [{"name": "x", "scan": "x", "cron": "*/30 * * * *"}]


def test_a_mass_is_that_of_the_tables_less_the_electron(file: Path) -> None:
    """AME2020: 40Ca 39.96259085 u; the electron 0.00054858 u (CODATA) [mem]."""
    mass_kg = trapd(f"check {file} --json").json["species"]["40Ca+"]["mass_kg"]
    assert mass_kg / 1.66053906892e-27 == pytest.approx(39.96259085 - 0.00054858, abs=1e-7)


@pytest.mark.parametrize("toml", [traps.NORTH_BENCH, traps.RING, traps.TENSOR], ids=["linear", "ring", "tensor"])
def test_json_has_a_verdict_for_every_point(tmp_path: Path, toml: str) -> None:
    answer = trapd(f"check {traps.write(tmp_path, toml)} --json").json
    assert answer["points"]["work"]["accepted"] is True
    assert set(answer["points"]["work"]["values"]) == set(answer["setpoints"])


def test_every_mistake_of_a_file_is_told_with_its_key(tmp_path: Path) -> None:
    wrong = traps.NORTH_BENCH.replace('r0 = "0.50 mm"', "r0 = 0.5").replace('max = "420 V"', 'max = "420 kHz"')
    ended = trapd(f"check {traps.write(tmp_path, wrong)}")
    assert ended.code == 2
    assert ended.out == ""
    assert "trap.r0 = 0.5" in ended.err
    assert "drive.amplitude.max" in ended.err


def test_instruments_are_named_and_not_touched(tmp_path: Path) -> None:
    with Rack() as rack:
        file = traps.write(tmp_path, traps.NORTH_BENCH, **rack.ports)
        ended = trapd(f"check {file} --instruments")
        assert ended.code == 0
        assert "RF SOURCE" in ended.out
        assert "simulated" in ended.out
        told = [unit for one in rack.received for unit in one.text.split(";") if "?" not in unit]
        assert told == []


def test_an_instrument_that_does_not_answer_is_named_beside_those_that_do(tmp_path: Path) -> None:
    with Rack() as rack:
        ports = {**rack.ports, "dc": 9}  # the discard port: nobody listens there
        file = traps.write(tmp_path, traps.NORTH_BENCH, **ports)
        ended = trapd(f"check {file} --instruments --json")
        assert ended.code == 5
        assert ended.json["instruments"]["rf"]["error"] is None
        assert ended.json["instruments"]["dc"]["identity"] is None
        assert "127.0.0.1::9::" in ended.json["instruments"]["dc"]["error"]


def test_instruments_of_a_running_daemon_are_left_alone(tmp_path: Path) -> None:
    with Rack() as rack:
        file = traps.write(tmp_path, traps.NORTH_BENCH, **rack.ports)
        with InstrumentLocks([f"TCPIP::127.0.0.1::{rack.ports['dc']}::SOCKET"]):
            ended = trapd(f"check {file} --instruments")
        assert ended.code == 3
        assert "is owned by another process" in ended.err
        assert "trapd status" in ended.err
        assert not rack.received


def test_a_channel_that_the_instrument_does_not_have_is_a_mistake_of_the_file(tmp_path: Path) -> None:
    with Rack() as rack:
        toml = traps.NORTH_BENCH.replace("channel = 3", "channel = 9")
        ended = trapd(f"check {traps.write(tmp_path, toml, **rack.ports)} --instruments")
        assert ended.code == 2
        assert "electrodes.shim_x.channel = 9" in ended.err


def test_without_instruments_in_the_file_there_is_nothing_to_open(tmp_path: Path) -> None:
    ended = trapd(f"check {traps.write(tmp_path, traps.TENSOR)} --instruments")
    assert ended.code == 2
    assert "[instruments] is missing; nothing was opened" in ended.err
