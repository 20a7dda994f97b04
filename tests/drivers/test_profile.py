"""Profiles: what they mean in SI, and that no mistake in one gets as far as an instrument."""

from __future__ import annotations

import math
import tomllib
from pathlib import Path

import pytest

from tests.drivers.rack import HERE
from trapd_drivers.errors import ProfileError
from trapd_drivers.profile import load_profile, shipped_profiles
from trapd_drivers.quantity import Unit
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource

PLAIN = Path(str(load_profile.__code__.co_filename)).parent / "profiles" / "plain.toml"
OTHER = str(HERE / "other.toml")


@pytest.mark.parametrize(
    ("unit", "number", "volts"),
    [
        # 10 dBm is 10 mW: V_peak = sqrt(2 R P) = sqrt(2 * 50 * 0.01) = 1 V; 1 mW into 600 ohm is 0.7746 V rms, the
        # definition of 0 dBu (IEC 60027-3).
        (Unit(name="dBm"), 10.0, 1.0),
        (Unit(name="dBm", impedance_ohm=600.0), 0.0, 0.774597 * math.sqrt(2.0)),
        (Unit(name="dBm", load_factor=2.0), 10.0, 2.0),
        (Unit(name="Vpp"), 3.0, 1.5),
        (Unit(name="Vrms"), 1.0, 1.414214),
        (Unit(name="Vpk", load_factor=2.0), 1.0, 2.0),
        (Unit(name="mV"), -5.0, -0.005),
        (Unit(name="kHz"), 2.5, 2500.0),
        (Unit(name="GHz"), 1.0, 1e9),
        (Unit(name="ms"), 250.0, 0.25),
        (Unit(name="us"), 10.0, 1e-5),
        (Unit(name="mbar"), 1.0, 100.0),  # SI Brochure, 9th edition, table 8 and appendix [mem]
        (Unit(name="Torr"), 760.0, 101325.0),  # the definition of the standard atmosphere
        (Unit(name="hPa"), 1013.25, 101325.0),
        (Unit(name="degC"), 0.01, 273.16),  # the triple point of water
        (Unit(name="uW"), 5.0, 5e-6),
    ],
)
def test_a_number_on_the_wire_is_so_many_volts_or_hertz(unit: Unit, number: float, volts: float) -> None:
    assert unit.to_si(number) == pytest.approx(volts, rel=1e-6)
    assert unit.from_si(volts) == pytest.approx(number, rel=1e-6, abs=1e-5)


@pytest.mark.parametrize(
    ("unit", "si"), [("mbar", "Pa"), ("Torr", "Pa"), ("degC", "K"), ("K", "K"), ("mW", "W"), ("mV", "V"), ("mA", "A")]
)
def test_a_gauge_reads_in_the_si_unit(unit: str, si: str) -> None:
    assert Unit(name=unit).si == si


def test_the_scales_that_a_profile_states_need_no_instrument() -> None:
    scales = ScpiRfSource.scales("plain")
    assert scales["frequency", 0].resolution == 1.0
    assert scales["level", 0].resolution == 1e-4
    assert (scales["level", 0].low, scales["level", 0].high) == (-math.inf, math.inf)  # plain asks the instrument
    dc = ScpiDcSupply.scales(OTHER)
    assert (dc["voltage", 1].low, dc["voltage", 1].high, dc["voltage", 1].resolution) == (0.0, 900.0, 0.05)
    assert (dc["voltage", 3].low, dc["voltage", 3].high, dc["voltage", 3].resolution) == (-20.0, 20.0, 0.005)
    assert dc["voltage", 1].boundaries == (100.0,)
    assert dc["voltage", 3].accuracy(-10.0) == pytest.approx(0.02 + 0.005)


def test_a_level_in_decibel_is_quantised_in_decibel() -> None:
    level = ScpiRfSource.scales(OTHER)["level", 0]
    assert level.quantise(2.0) == pytest.approx(2.0)  # 10 dBm into 50 ohm, displayed; twice that at high impedance
    assert level.quantise(2.0 * 10 ** (0.02 / 20)) == pytest.approx(2.0)  # 0.02 dB of a 0.05 dB grid
    assert level.quantise(2.0 * 10 ** (0.03 / 20)) == pytest.approx(2.0 * 10 ** (0.05 / 20))
    assert level.boundaries == pytest.approx((0.632456,))  # 0 dBm: sqrt(2 * 50 * 1e-3) V, displayed


@pytest.mark.parametrize(
    ("found", "written", "says"),
    [
        ("[wire]", "[wires]", "wires: unknown key; expected one of"),
        ("spacing_s = 0.0 ", "pacing_s = 0.0 ", "wire.pacing_s: unknown key"),
        ("spacing_s = 0.0 ", "spacing_s = '0' ", "wire.spacing_s = '0'; expected a number"),
        ("spacing_s = 0.0 ", "spacing_s = -1.0 ", "expected a number of at least 0"),
        ("spacing_s = 0.0 ", "spacing_s = true ", "expected a number"),
        ("spacing_s = 0.0 ", "spacing_s = nan ", "expected a number"),
        ('write_end = "\\n"', 'write_end = ";"', "expected one of"),
        ("error_joined = true", "error_joined = 1", "expected true or false"),
        ("ignored = []", "ignored = [1.5]", "expected a list of whole numbers"),
        ('unit = "Vpk" ', 'unit = "V" ', "expected one of Vpk, Vpp, Vrms, dBm"),
        ('set = "FREQ {value}"', 'set = "FREQ"', "expected text with {value} in it"),
        ('set = "FREQ {value}"', 'set = "FREQ {value:.3f}"', "no braces but {value} and {channel}"),
        ('set = "FREQ {value}"', 'set = "FREQ {hertz}"', "no braces but {value} and {channel}"),
        ('set = "FREQ {value}"', 'set = "*RST;:FREQ {value}"', "*RST, which is never sent"),
        ('set = "FREQ {value}"', 'set = "FREQ {value"', "rf_source.frequency.set"),
        ('set = "FREQ {value}"', 'set = "FREQ\\n{value}"', "printable ASCII"),
        ('set = "FREQ {value}"', "", "rf_source.frequency.set: missing; expected a string"),
        ('on = "OUTP{channel} ON"', 'on = "OUTP ON"', "expected text with {channel} in it"),
        ('off_words = ["0", "OFF"]', 'off_words = ["1"]', "words that do not also mean on"),
        ("channels = [1, 2, 3, 4]", "channels = [1, 1]", "different channel numbers"),
        ("channels = [1, 2, 3, 4]", "channels = []", "different channel numbers"),
        ("[dc_supply.output]", "[dc_supply.channel.9]\nhigh = 1.0\n[dc_supply.output]", "channel.9"),
        ("resolution = 1.0", "resolution = 0", "expected a number above 0"),
        ('low = "FREQ? MIN"\nhigh = "FREQ? MAX"', "low = 2.0\nhigh = 1.0", "expected a number above low = 2"),
        ("[wire]", "[wire", "not TOML"),
        ('start = "OUTP ON;:INIT"', "", "rf_source.burst.start: missing; expected a string"),
        ('set = "ABOR;:BURS:STAT ON;:BURS:DUR {value}"', 'set = "BURS:STAT ON"', "rf_source.burst.set = "),
        ("[rf_source.burst.running]", "[rf_source.burst.runs]", "rf_source.burst.running: missing; expected a table"),
        ('query = "BURS:ACT?"', "", "rf_source.burst.running.query: missing; expected a string"),
        ('off_words = ["0"]', 'off_words = ["1"]', "rf_source.burst.running.off_words"),
        ("bits = [4]", "bits = 16", "photon_counter.gate.running.bits = 16; expected a list of whole numbers"),
        ("bits = [4]", "bits = []", "expected bit numbers from 0"),
        ("bits = [4]", "bits = [-1]", "expected bit numbers from 0"),
        ("bits = [4]", 'bits = [4]\non_words = ["16"]', "photon_counter.gate.running.on_words: unknown key"),
        ("[photon_counter.count]", "[photon_counter.counts]", "photon_counter.count: missing; expected a table"),
        (
            "[photon_counter.gate]",
            "[photon_counter.gates]",
            "photon_counter.gate.unit: missing; expected one of s, ms, us",
        ),
        ('query = "FETC?"', 'query = "FETC?"\nunit = "counts"', "photon_counter.count.unit: unknown key"),
        ('unit = "mbar"', 'unit = "bar"', "gauge.unit = 'bar'; expected one of Pa, hPa, mbar, Torr"),
        ('query = "MEAS:PRES?"', 'query = "*RST;:MEAS:PRES?"', "*RST, which is never sent"),
        ("[rf_source.output]", "[rf_source.outputs]", "rf_source.output: missing; expected a table"),
    ],
)
def test_a_mistake_in_a_profile_is_one_error_naming_file_key_found_and_expected(
    tmp_path: Path, found: str, written: str, says: str
) -> None:
    text = PLAIN.read_text(encoding="utf-8")
    assert found in text
    file = tmp_path / "bench.toml"
    file.write_text(text.replace(found, written, 1), encoding="utf-8")
    with pytest.raises(ProfileError) as caught:
        load_profile(str(file))
    assert str(file) in str(caught.value)
    assert says in str(caught.value)
    assert str(caught.value).endswith("nothing was opened")


def test_an_unknown_name_and_a_missing_file_say_so(tmp_path: Path) -> None:
    with pytest.raises(ProfileError, match="unknown; expected one of plain"):
        load_profile("plane")
    with pytest.raises(ProfileError, match="cannot be read"):
        load_profile(str(tmp_path / "none.toml"))


def test_a_profile_without_the_part_for_a_driver_says_so(tmp_path: Path) -> None:
    file = tmp_path / "rf-only.toml"
    file.write_text(PLAIN.read_text(encoding="utf-8").split("[dc_supply]")[0], encoding="utf-8")
    assert ScpiRfSource.scales(str(file))
    with pytest.raises(ProfileError, match=r"has no \[dc_supply\]"):
        ScpiDcSupply.open("TCPIP::127.0.0.1::1::SOCKET", profile=str(file))


@pytest.mark.parametrize(
    ("driver", "table"), [(ScpiPhotonCounter, "[photon_counter.gate]"), (ScpiGauge, "[gauge]"), (ScpiRfSource, None)]
)
def test_a_profile_needs_only_the_table_of_its_instrument(
    tmp_path: Path, driver: type[ScpiPhotonCounter | ScpiGauge | ScpiRfSource], table: str | None
) -> None:
    text = PLAIN.read_text(encoding="utf-8")
    file = tmp_path / "one.toml"
    part = text[text.index(table or "[rf_source]") :]
    end = {"[photon_counter.gate]": "[gauge]", None: "[dc_supply]"}.get(table)
    file.write_text(part.split(end)[0] if end else part, encoding="utf-8")
    assert set(driver.scales(str(file))) == set(driver.scales("plain"))
    with pytest.raises(ProfileError, match=r"has no \[dc_supply\]"):
        ScpiDcSupply.scales(str(file))


def test_plain_is_shipped_and_shows_every_key_that_any_profile_uses() -> None:
    assert shipped_profiles() == ("plain",)
    shown = PLAIN.read_text(encoding="utf-8")
    for name in ("other", "third"):
        for line in (HERE / f"{name}.toml").read_text(encoding="utf-8").splitlines():
            key = line.split("=")[0].strip()
            if "=" in line and not line.startswith("#"):
                assert f"{key} = " in shown, key


def test_other_differs_from_plain_in_every_key() -> None:
    def flat(table: dict[str, object], path: str = "") -> dict[str, object]:
        found: dict[str, object] = {}
        for key, value in table.items():
            found |= flat(value, f"{path}{key}.") if isinstance(value, dict) else {f"{path}{key}": value}
        return found

    plain = flat(tomllib.loads(PLAIN.read_text(encoding="utf-8")))
    other = flat(tomllib.loads(Path(OTHER).read_text(encoding="utf-8")))
    same = {key for key in plain.keys() & other.keys() if plain[key] == other[key]}
    # These three the rack cannot say differently; `Unit` is tested by itself above, `error_reply` in test_scpi_drivers.
    assert same == {"status.error_reply", "rf_source.level.impedance_ohm", "dc_supply.voltage.reply_unit"}
