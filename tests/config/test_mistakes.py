"""Every mistake in a trap file is one clear line: file, key, found, expected."""

from __future__ import annotations

import json
from contextlib import suppress
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.traps import NORTH_BENCH, RING, SCANS, TENSOR, write
from trapd.config.build import guard_of
from trapd.config.digest import as_data
from trapd.config.read import parse, read
from trapd.errors import ConfigError

FILE = Path("bench.toml")
SCANNED = NORTH_BENCH + SCANS
OFFLINE = f"""{TENSOR}
[tickle]
level_max = "20 mV"
[counter]
floor = "500 /s"
[scans.z]
mode = "z"
tickle = "5 mV"
span = "100 Hz"
width = "2 Hz"
dwell = "1 s"
target = "0.1 Hz"
"""

# what is replaced in a valid file, by what, and what the message must say
Mistake = tuple[str, str, str, tuple[str, ...]]

LATER = "known but not built yet in this version"

MISTAKES: list[Mistake] = [
    # units, types, bounds
    (NORTH_BENCH, 'max = "420 V"', "max = 420", ("drive.amplitude.max = 420", 'a voltage such as "300 V"')),
    (NORTH_BENCH, '"420 V"', '"420"', ('drive.amplitude.max = "420"', "without a unit", "a voltage")),
    (NORTH_BENCH, '"420 V"', '"420 A"', ('drive.amplitude.max = "420 A"', "another kind", "a voltage")),
    (NORTH_BENCH, '"20.90 MHz"', '"20,90 MHz"', ('drive.frequency.min = "20,90 MHz"', "comma")),
    (NORTH_BENCH, '"20.90 MHz"', '"0 MHz"', ("drive.frequency.min", "more than 0")),
    (NORTH_BENCH, '"20.90 MHz"', '"22 MHz"', ('drive.frequency.max = "21.10 MHz"', "no less than min")),
    (NORTH_BENCH, "amplitude = { max", 'amplitude = { min = "-1 V", max', ("drive.amplitude.min", "at least 0")),
    (NORTH_BENCH, '"40 V/s"', '"-40 V/s"', ('drive.amplitude.slew = "-40 V/s"', "more than 0")),
    (NORTH_BENCH, 'step = "5 V"', 'step = "-5 V"', ('electrodes.endcaps.voltage.step = "-5 V"', "more than 0")),
    (NORTH_BENCH, ', step = "5 V"', "", ("electrodes.endcaps.voltage.step is missing", "a voltage")),
    (NORTH_BENCH, 'lag = "3 ms"', 'lag = "-3 ms"', ('electrodes.endcaps.lag = "-3 ms"', "at least 0")),
    (NORTH_BENCH, "kappa = 0.29", 'kappa = "0.29"', ('trap.kappa = "0.29"', "a plain number")),
    (NORTH_BENCH, "kappa = 0.29", "kappa = nan", ("trap.kappa = NaN", "a plain number")),
    (NORTH_BENCH, "kappa = 0.29", "kappa = true", ("trap.kappa = true", "a plain number")),
    (NORTH_BENCH, "kappa = 0.29", "kappa = -0.29", ("trap.kappa = -0.29", "more than 0")),
    (NORTH_BENCH, "phases = 1", "phases = 3", ("trap.phases = 3", "1 (one rod pair driven", "2 (both")),
    (NORTH_BENCH, "phases = 1", "phases = true", ("trap.phases = true", "1 (one rod pair")),
    (NORTH_BENCH, "weight = 1.0", "weight = 0", ("electrodes.endcaps.weight = 0", "other than zero")),
    (NORTH_BENCH, "channel = 2", "channel = 0", ("electrodes.rods.channel = 0", "1 or more")),
    (NORTH_BENCH, "[310.0, 0.0, 0.0]", "[310.0, 0.0]", ("electrodes.shim_x.field", "3 plain numbers [x, y, z]")),
    (NORTH_BENCH, 'gain = "38 V/V"', 'gain = "38 %"', ("drive.resonator.gain", "a share", "a gain")),
    (NORTH_BENCH, '"2 %"', '"100 %"', ("drive.resonator.gain_uncertainty", "less than 100 %")),
    (NORTH_BENCH, "loaded_q = 200", "loaded_q = 0", ("drive.resonator.loaded_q = 0", "more than 0")),
    (NORTH_BENCH, 'name = "north bench"', 'name = ""', ('trap.name = ""', "the trap's name")),
    (NORTH_BENCH, 'margin = "5 %"', 'margin = "0 %"', ('guard.margin = "0 %"', "more than 0")),
    (NORTH_BENCH, 'margin = "5 %"', 'margin = "51 %"', ('guard.margin = "51 %"', "at most 50 %")),
    (NORTH_BENCH, 'margin = "5 %"', "", ("guard.margin is missing", "a share")),
    (TENSOR, 'mass = "2.1e-14 kg"', 'mass = "0 kg"', ("species.bead.mass", "more than 0")),
    (RING, 'warm_up = "30 s"', "warm_up = 30", ("drive.warm_up = 30", "a time")),
    (RING, 'expires = "5 min"', 'expires = "0 s"', ("loading.expires", "more than 0")),
    (RING, 'timeout = "500 ms"', 'timeout = "0 s"', ("instruments.rf.timeout", "more than 0")),
    # names
    (NORTH_BENCH, "margin =", "margn =", ("guard.margn: unknown key", 'did you mean "margin"')),
    (NORTH_BENCH, 'lag = "3 ms"', 'lagg = "3 ms"', ("electrodes.endcaps.lagg: unknown key", '"lag"')),
    (NORTH_BENCH, "[guard]", "[gaurd]", ("gaurd: unknown section", '"guard"')),
    (NORTH_BENCH, "[guard]", "[trap.guard]", ("trap.guard: unknown key", "guard is missing")),
    (NORTH_BENCH, "[electrodes.rods]", "[electrodes.drive]", ("electrodes.drive", "choose another")),
    (NORTH_BENCH, "[electrodes.rods]", '[electrodes."r ods"]', ("electrodes.r ods", "letters, digits")),
    (NORTH_BENCH, "[electrodes.rods]", "[electrodes.2rods]", ("electrodes.2rods", "beginning with a letter")),
    (NORTH_BENCH, "[instruments.rf]", '[instruments."r f"]', ("instruments.r f", "letters, digits")),
    (NORTH_BENCH, "[points.work]", '[points."a=b"]', ("points.a=b", "letters, digits")),
    # later
    (NORTH_BENCH, "[record]", "[interlocks.vacuum]\n[record]", ("interlocks.vacuum.action is missing", '"ramp down"')),
    (NORTH_BENCH, '"sine"', '"square"', ('drive.waveform = "square"', LATER)),
    (NORTH_BENCH, '"sine"', '"rotating"', ('drive.waveform = "rotating"', LATER)),
    (NORTH_BENCH, '"sine"', '"sin"', ('drive.waveform = "sin"', 'expected "sine"')),
    (NORTH_BENCH, "[record]", "[purge]\n[record]", ("purge: " + LATER,)),
    (NORTH_BENCH, "[record]", "[crystal]\n[record]", ("crystal: " + LATER,)),
    (NORTH_BENCH, "[record]", "[calibrations]\n[record]", ("calibrations: " + LATER,)),
    # geometry
    (NORTH_BENCH, '"linear"', '"lineal"', ('trap.geometry = "lineal"', '"linear" or "ring" or "tensor"')),
    (NORTH_BENCH, 'r0 = "0.50 mm"', "", ("trap.r0 is missing", "a length")),
    (NORTH_BENCH, 'z0 = "2.5 mm"', "", ("trap.z0 is missing", "a length")),
    (NORTH_BENCH, '"0.50 mm"', '"0 mm"', ('trap.r0 = "0 mm"', "from 1 um to 10 m")),
    (NORTH_BENCH, '"0.50 mm"', '"0.50 nm"', ('trap.r0 = "0.50 nm"', "from 1 um to 10 m")),
    (NORTH_BENCH, '"2.5 mm"', '"11 m"', ('trap.z0 = "11 m"', "from 1 um to 10 m")),
    (NORTH_BENCH, "kappa = 0.29", "", ("trap.kappa is missing", "a plain number")),
    (RING, 'r0 = "0.70 mm"', "", ("trap.r0 is missing", "a length")),
    (RING, 'z0 = "0.50 mm"', "kappa = 1.0", ("trap.z0 is missing", "a length")),
    (RING, 'name = "south ring"', 'name = "south ring"\nkappa = 0.3', ("trap.kappa = 0.3", "only linear")),
    (RING, 'kind = "ring"', 'kind = "rods"', ('electrodes.bias.kind = "rods"', '"ring" or "other" in ring geometry')),
    (TENSOR, 'kind = "other"', 'kind = "endcap"', ('electrodes.top.kind = "endcap"', '"other" in tensor geometry')),
    (TENSOR, 'geometry = "tensor"', 'geometry = "tensor"\nr0 = "1 mm"', ('trap.r0 = "1 mm"', "curvature instead")),
    (TENSOR, "curvature = [2.0e6", "# [2.0e6", ("drive.curvature is missing", "tensor geometry")),
    (TENSOR, "2.0e6, -0.9e6", "2.0e6, -0.8e6", ("drive.curvature", "Laplace")),
    (TENSOR, "[1.0e5, 1.0e5, -2.0e5,", "[1.0e5, 1.0e5, 2.0e5,", ("electrodes.top.curvature", "Laplace")),
    (TENSOR, "2.0e6, -0.9e6, -1.1e6, 1.0e5, 0.0, 3.0e5", "0, 0, 0, 0, 0, 0", ("drive.curvature", "not all zero")),
    (TENSOR, "2.0e6, -0.9e6, -1.1e6, 1.0e5, 0.0, 3.0e5", "1, 2, 3", ("drive.curvature", "6 plain numbers [xx, yy")),
    (TENSOR, 'margin = "5 %"', 'margin = "5 %"\nmin_depth = "1 eV"', ("guard.min_depth", "escape")),
    (TENSOR, 'geometry = "tensor"', 'geometry = "tensor"\nescape = "1 mm"', ("trap.escape", "3 times a length")),
    (
        TENSOR,
        'geometry = "tensor"',
        'geometry = "tensor"\nescape = ["1 mm", "0 mm", "1 mm"]',
        ("trap.escape", "0, each"),
    ),
    (RING, 'r0 = "0.70 mm"', 'r0 = "0.70 mm"\nescape = ["1 mm"]', ("trap.escape", "from r0 and z0")),
    (TENSOR, 'kind = "other"', 'kind = "other"\nweight = 0.5', ("electrodes.top.weight = 0.5", "ideal curvature")),
    (NORTH_BENCH, "field = [310.0, 0.0, 0.0]", "", ("electrodes.shim_x.field is missing", "curvature")),
    # drive
    (NORTH_BENCH, "[drive]", '[drive]\ngain = "1 V/V"', ('drive.gain = "1 V/V"', "[drive.resonator]")),
    (RING, 'gain = "40 V/V"', "", ("drive.gain is missing", "[drive.resonator]")),
    (NORTH_BENCH, "[drive", "[driven", ("driven: unknown section", 'did you mean "drive"')),
    (NORTH_BENCH, 'frequency = { min = "20.90 MHz"', 'frequency = "21 MHz" #', ("drive.frequency", "{ min")),
    # species
    (NORTH_BENCH, '[[species]]\nion = "40Ca+"', "", ("species is missing", "at least one table [[species]]")),
    (NORTH_BENCH, "[[species]]", "[species]", ("species = ", "at least one table [[species]]")),
    (NORTH_BENCH, '"40Ca+"', '"40Ca"', ('species.40Ca.ion = "40Ca"',)),
    (NORTH_BENCH, '"40Ca+"', '"40Xx+"', ('species.40Xx+.ion = "40Xx+"',)),
    (NORTH_BENCH, 'ion = "40Ca+"', "ion = 40", ("species.1.ion = 40", '"40Ca+"')),
    (NORTH_BENCH, 'ion = "40Ca+"', 'ion = "40Ca+"\nmass = "40 u"', ("species.40Ca+.mass", "follows from the ion")),
    (RING, '"171Yb+"', '"88Sr+"', ("species.88Sr+", "twice")),
    (TENSOR, 'charge = "900 e"', "", ("species.bead.charge is missing", "a charge")),
    (TENSOR, 'charge = "900 e"', 'charge = "0 e"', ("species.bead.charge", "other than zero")),
    (TENSOR, 'damping = "40 /s"', 'damping = "40 Hz"', ("species.bead.damping", "a rate")),
    (TENSOR, 'damping = "40 /s"', 'damping = "-40 /s"', ("species.bead.damping", "at least 0")),
    (TENSOR, 'name = "bead"', 'name = "none"', ("species.none.name", "another")),
    (TENSOR, 'name = "bead"', "", ("species.1", "or name, mass and charge")),
    # wiring
    (NORTH_BENCH, "channel = 2", "channel = 1", ("electrodes.rods.channel = 1", "electrodes.endcaps")),
    (NORTH_BENCH, 'instrument = "rf"', 'instrument = "rg"', ('drive.instrument = "rg"', "dc, rf")),
    (NORTH_BENCH, 'instrument = "rf"', "", ("drive.instrument is missing", "[instruments]")),
    (NORTH_BENCH, "[record]", '[instruments.x]\ndriver = "d"\nresource = "r"\n[record]', ("instruments.x: neither",)),
    (NORTH_BENCH, "5026", "5025", ("instruments.dc.resource", "instruments.rf has this one")),
    (NORTH_BENCH, 'driver = "scpi-dc-supply"', "", ("instruments.dc.driver is missing", "scpi-dc-supply")),
    (RING, 'instrument = "dc"', 'instrument = "rf"', ('electrodes.bias.instrument = "rf"', "the drive's")),
    (NORTH_BENCH, "channel = 3", "", ("electrodes.shim_x.channel is missing", "a channel number")),
    (SCANNED, 'instrument = "tickle"', 'instrument = "rf"', ('tickle.instrument = "rf"', "the drive's")),
    (SCANNED, 'instrument = "counter"', 'instrument = "tickle"', ('counter.instrument = "tickle"', "the tickle's")),
    (SCANNED, 'instrument = "tickle"', 'instrument = "tickel"', ('tickle.instrument = "tickel"', "counter, dc, rf")),
    (SCANNED, 'instrument = "counter"', "", ("counter.instrument is missing", "[instruments]")),
    (SCANNED, 'instrument = "dc"', 'instrument = "counter"', ('endcaps.instrument = "counter"', "the counter's")),
    (SCANNED, "[record]", '[instruments.x]\ndriver = "d"\nresource = "r"\n[record]', ("instruments.x: neither",)),
    # tickle and counter
    (SCANNED, '"20 mV"', '"0 mV"', ("tickle.level_max", "more than 0")),
    (SCANNED, 'level_max = "20 mV"', "", ("tickle.level_max is missing", "a voltage")),
    (SCANNED, 'level_max = "20 mV"', 'level = "20 mV"', ("tickle.level: unknown key", '"level_max"')),
    (SCANNED, 'floor = "500 /s"', "", ("counter.floor is missing", "a rate")),
    (SCANNED, '"500 /s"', '"500 Hz"', ('counter.floor = "500 Hz"', "a rate")),
    (SCANNED, '"500 /s"', '"0 /s"', ("counter.floor", "more than 0")),
    # scans
    (OFFLINE, '[tickle]\nlevel_max = "20 mV"\n', "", ("scans: there is no [tickle]",)),
    (OFFLINE, '[counter]\nfloor = "500 /s"\n', "", ("scans: there is no [counter]",)),
    (SCANNED, "[scans.x]", "[scans]\nx = 1\n[scans.y]", ("scans.x = 1", "a table [scans.x]")),
    (SCANNED, "[scans.x]", '[scans."x y"]', ("scans.x y", "letters, digits")),
    (SCANNED, 'mode = "x"', 'mode = "w"', ('scans.x.mode = "w"', '"x" or "y" or "z"')),
    (SCANNED, 'mode = "x"', "", ("scans.x.mode is missing",)),
    (SCANNED, 'mode = "x"', 'mode = "x"\nspecies = "40Ca"', ('scans.x.species = "40Ca"', 'did you mean "40Ca+"')),
    (SCANNED, 'mode = "x"', 'mode = "x"\nmethod = "uniform"', ("scans.x.method: unknown key",)),
    (SCANNED, '"0.5 mV"', '"21 mV"', ('scans.x.tickle = "21 mV"', "at most 0.02 V", "level_max of [tickle]")),
    (SCANNED, '"0.5 mV"', '"0 mV"', ("scans.x.tickle", "more than 0")),
    (SCANNED, '"20 ms"', '"0.9 ms"', ("scans.x.dwell", "at least 0.001")),
    (SCANNED, '"20 ms"', '"10.1 s"', ("scans.x.dwell", "at most 10 s")),
    (SCANNED, '"20 ms"', '"20 kHz"', ("scans.x.dwell", "a time")),
    (SCANNED, '"50 Hz"', '"0 Hz"', ("scans.x.target", "more than 0")),
    (SCANNED, 'target = "50 Hz"', "", ("scans.x.target is missing", "a frequency")),
    (SCANNED, '"200 kHz"', '"4 kHz"', ('scans.x.span = "4 kHz"', "more than 2 times the width, 4000 Hz")),
    (SCANNED, '"50 Hz"', '"50 Hz"\nwidth = "100 kHz"', ("scans.x.span", "2 times the width, 200000 Hz")),
    (SCANNED, '"50 Hz"', '"50 Hz"\nwidth = "0 Hz"', ("scans.x.width", "more than 0")),
    (SCANNED, '"50 Hz"', '"50 Hz"\npasses = 1', ("scans.x.passes = 1", "from 2 to 1000")),
    (SCANNED, '"50 Hz"', '"50 Hz"\npasses = 1001', ("scans.x.passes = 1001", "from 2 to 1000")),
    (SCANNED, '"50 Hz"', '"50 Hz"\npasses = 2.5', ("scans.x.passes = 2.5", "a whole number")),
    (SCANNED, '"50 Hz"', '"50 Hz"\nmin_contrast = 0.05', ("scans.x.min_contrast = 0.05", 'a share such as "5 %"')),
    (SCANNED, '"50 Hz"', '"50 Hz"\nmin_contrast = "0 %"', ("scans.x.min_contrast", "more than 0")),
    (SCANNED, '"50 Hz"', '"50 Hz"\nmodel_uncertainty = "100 %"', ("scans.x.model_uncertainty", "less than 100 %")),
    (SCANNED, '"50 Hz"', '"50 Hz"\nmin_contrast = "100 %"', ("scans.x.min_contrast", "less than 100 %")),
    # schedule
    (SCANNED, 'scan = "x"', 'scan = "y"', ('schedule.y.scan = "y"', "known here: x")),
    (SCANNED, 'scan = "x"', "", ("schedule.1.scan is missing", "the name of a scan")),
    (SCANNED, 'cron = "*/30 * * * *"', "", ("schedule.x.cron is missing", "five fields in UTC")),
    (SCANNED, 'scan = "x"', 'scan = "x"\nname = "at night"', ('schedule.at night.name = "at night"', "letters")),
    (SCANNED, "[[schedule]]", "[schedule]", ("schedule = ", "at least one table [[schedule]]")),
    (
        SCANNED,
        "[[schedule]]",
        '[[schedule]]\nscan = "x"\ncron = "0 0 * * *"\n[[schedule]]',
        ("x is in the schedule twice",),
    ),
    # points
    (NORTH_BENCH, 'endcaps = "120 V"', 'endcap = "120 V"', ("points.work.endcap: unknown setpoint", '"endcaps"')),
    (NORTH_BENCH, 'endcaps = "120 V"', 'endcaps = "901 V"', ('points.work.endcaps = "901 V"', "0 to 900 V")),
    (
        NORTH_BENCH,
        '"21.00 MHz"\n"drive.a',
        '"22 MHz"\n"drive.a',
        ("points.work.drive.frequency", "20900000 to 21100000 Hz"),
    ),
    (NORTH_BENCH, '"drive.amplitude"', "drive.amplitude", ("points.work.drive", "in quotes")),
    (RING, '"drive.frequency" = "15.00 MHz"', "", ("points.work", '"drive.frequency" is missing')),
    (
        RING,
        '"drive.amplitude" = "300 V"',
        '"drive.amplitude" = 300',
        ("points.work.drive.amplitude = 300", "a voltage"),
    ),
    # service
    (NORTH_BENCH, '"127.0.0.1:8417"', '"8417"', ('server.listen = "8417"', "host:port")),
    (NORTH_BENCH, '"127.0.0.1:8417"', '"127.0.0.1:70000"', ("server.listen", "host:port")),
    (NORTH_BENCH, "[server]", f'[server]\nsocket = "{"s" * 120}"', ("server.socket", "at most 107 bytes")),
    (NORTH_BENCH, '"north-bench.sqlite"', '"bench.toml"', ("record.file", "another file")),
    (NORTH_BENCH, '"north-bench.sqlite"', "7", ("record.file = 7", "a file name")),
]


@pytest.mark.parametrize(("valid", "old", "new", "fragments"), MISTAKES, ids=[f"{m[3][0]}-{m[2]}" for m in MISTAKES])
def test_a_mistake_is_told_with_file_key_found_and_expected(
    valid: str, old: str, new: str, fragments: tuple[str, ...]
) -> None:
    assert old in valid
    with pytest.raises(ConfigError) as caught:
        parse(valid.replace(old, new, 1), FILE)
    for fragment in ("bench.toml: ", *fragments):
        assert fragment in caught.value.message


def test_all_mistakes_are_listed_one_a_line_and_each_only_once() -> None:
    text = NORTH_BENCH.replace("kappa = 0.29", "").replace('"420 V"', "420").replace('"5 %"', '"5 V"')
    with pytest.raises(ConfigError) as caught:
        parse(text, FILE)
    keys = [line.split()[1] for line in caught.value.message.splitlines()]
    assert keys == ["trap.kappa", "drive.amplitude.max", "guard.margin"]


def test_of_many_mistakes_ten_are_shown_and_the_rest_counted() -> None:
    with pytest.raises(ConfigError) as caught:
        parse("\n".join(f"wrong{number} = 1" for number in range(20)) + "\n" + NORTH_BENCH, FILE)
    lines = caught.value.message.splitlines()
    assert lines[10:] == ["bench.toml: and 10 more"]
    assert len(caught.value.details["mistakes"]) == 20


def test_a_missing_section_is_told_once_and_its_keys_are_not() -> None:
    with pytest.raises(ConfigError) as caught:
        parse(NORTH_BENCH.replace("[guard]", "[loading]").replace('margin = "5 %"', ""), FILE)
    assert [line for line in caught.value.message.splitlines() if "guard" in line] == [
        "bench.toml: guard is missing; expected a table [guard]"
    ]


def test_a_file_that_is_not_there_is_told(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"none\.toml: does not exist; expected a trap file"):
        read(tmp_path / "none.toml")


def test_a_folder_is_no_trap_file(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="is a folder; expected a trap file"):
        read(tmp_path)


def test_a_device_is_no_trap_file() -> None:
    with pytest.raises(ConfigError, match="/dev/zero: is no ordinary file"):
        read("/dev/zero")


def test_bytes_that_are_not_utf8_are_told_with_their_line(tmp_path: Path) -> None:
    file = tmp_path / "latin.toml"
    file.write_bytes("[trap]\nname = 'Nordtür'\n".encode("latin-1"))
    with pytest.raises(ConfigError, match=r"latin\.toml: byte 0xfc in line 2 is not UTF-8"):
        read(file)


def test_a_slip_in_the_syntax_is_told_with_its_line(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"trap\.toml: not TOML: .*line 2.*; expected a trap file"):
        read(write(tmp_path, "[trap]\nname = north bench\n"))


def test_a_file_of_absurd_size_is_refused_without_being_parsed(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="more than 1000000 bytes"):
        read(write(tmp_path, "#" * 1_000_001))


@pytest.mark.parametrize(
    "text", ["x = " + "[" * 20_000, "a." * 2_000 + "a = 1", "x = " + "9" * 9000, "x = 0x" + "f" * 9000]
)
def test_absurd_toml_is_a_config_error(text: str) -> None:
    with pytest.raises(ConfigError):
        parse(text, FILE)


LINES = sorted({line for text in (SCANNED, RING, TENSOR) for line in text.splitlines() if line})
VALUES = st.sampled_from(
    ["-1", "nan", "1e400", "true", '""', '"0 V"', '"1 V"', "[]", "{}", "[[1]]", "1979-05-27", "0xffff"]
)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(content=st.binary(max_size=200))
def test_arbitrary_bytes_raise_nothing_but_a_config_error(content: bytes, tmp_path: Path) -> None:
    file = tmp_path / "fuzz.toml"
    file.write_bytes(content)
    with pytest.raises(ConfigError):
        read(file)


@settings(max_examples=200, deadline=None)
@given(
    valid=st.sampled_from([NORTH_BENCH, RING, TENSOR, SCANNED, OFFLINE]),
    edits=st.lists(st.tuples(st.integers(0, 120), st.sampled_from(["drop", "copy", "value"]), VALUES), max_size=6),
    inserted=st.lists(st.sampled_from(LINES), max_size=3),
)
def test_a_mangled_trap_file_is_a_config_error_or_whole_enough_for_guard_and_record(
    valid: str, edits: list[tuple[int, str, str]], inserted: list[str]
) -> None:
    lines = valid.splitlines()
    for place, edit, value in edits:
        place %= len(lines)
        key, equals, _ = lines[place].partition(" = ")
        if edit == "value" and equals:
            lines[place] = f"{key} = {value}"
        elif edit == "copy":
            lines.insert(place, lines[place])
        elif len(lines) > 1:
            del lines[place]
    with suppress(ConfigError):
        config = parse("\n".join(lines + inserted), FILE)
        json.dumps(as_data(config), allow_nan=False)
        guard_of(config)
