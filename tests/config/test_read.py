"""What a right trap file becomes."""

from __future__ import annotations

import json
from decimal import Decimal
from pathlib import Path

import pytest

from tests.traps import NORTH_BENCH, RING, TENSOR, write
from trapd.config.digest import as_data
from trapd.config.keys import KEYS, SECTIONS
from trapd.config.read import parse, read
from trapd.config.records import InstrumentSection, LoadingSection, ResonatorSection, Sweep
from trapd.physics.species import Species, ion

FILE = Path("/bench/trap.toml")


def test_the_linear_example_is_read_in_si(tmp_path: Path) -> None:
    config = read(write(tmp_path, NORTH_BENCH))
    assert (config.trap.name, config.trap.geometry) == ("north bench", "linear")
    assert (config.trap.r0_m, config.trap.z0_m, config.trap.kappa, config.trap.phases) == (0.0005, 0.0025, 0.29, 1)
    assert config.species == {"40Ca+": ion("40Ca+")}
    assert config.drive.frequency == Sweep(low=20.9e6, high=21.1e6, slew_per_s=20e3, step=1e3)
    assert config.drive.amplitude == Sweep(low=0.0, high=420.0, slew_per_s=40.0, step=2.0)
    assert config.drive.resonator == ResonatorSection(
        gain=38.0,
        gain_uncertainty=0.02,
        center_hz=21e6,
        center_uncertainty_hz=2e3,
        loaded_q=200.0,
        level_max_v=12.0,
    )
    assert list(config.electrodes) == ["endcaps", "rods", "shim_x"]
    assert config.electrodes["endcaps"].lag_s == 0.003
    assert config.electrodes["shim_x"].field == (310.0, 0.0, 0.0)
    assert (config.electrodes["rods"].instrument, config.electrodes["rods"].channel) == ("dc", 2)
    assert (config.guard.margin, config.guard.min_secular_frequency_hz, config.guard.min_depth_ev) == (0.05, 1e5, 0.2)
    assert config.points == {"work": {"drive.frequency": 21e6, "drive.amplitude": 260.0, "endcaps": 120.0, "rods": 1.0}}
    assert config.record_file == tmp_path / "north-bench.sqlite"
    assert (config.server.host, config.server.port) == ("127.0.0.1", 8417)
    assert config.server.socket is None


def test_the_ring_example_has_its_warm_up_its_timeouts_and_a_flat_gain() -> None:
    config = parse(RING, FILE)
    assert (config.trap.r0_m, config.trap.z0_m, config.trap.kappa) == (0.0007, 0.0005, None)
    assert list(config.species) == ["88Sr+", "171Yb+"]
    assert config.drive.warm_up_s == 30.0
    assert config.drive.resonator == ResonatorSection(gain=40.0, gain_uncertainty=0.01, level_max_v=12.0)
    assert config.loading == LoadingSection(expires_s=300.0)
    assert config.instruments["rf"] == InstrumentSection(
        name="rf", driver="scpi-rf-source", resource="TCPIP::127.0.0.1::5025::SOCKET", profile="plain", timeout_s=0.5
    )
    assert config.record_file == Path("/bench/trap.sqlite")


def test_the_tensor_example_has_symmetric_curvatures_and_a_damped_particle() -> None:
    config = parse(TENSOR, FILE)
    # [xx, yy, zz, yz, xz, xy]
    assert config.drive.curvature == ((2.0e6, 3.0e5, 0.0), (3.0e5, -0.9e6, 1.0e5), (0.0, 1.0e5, -1.1e6))
    charge_c = float(900 * Decimal("1.602176634e-19"))  # SI Brochure, 9th edition, 2.2: e is exact
    assert config.species["bead"] == Species(name="bead", mass_kg=2.1e-14, charge_c=charge_c, damping_per_s=40.0)
    assert config.instruments == {}
    assert config.drive.instrument is None


def test_without_any_instruments_the_names_of_instruments_may_dangle() -> None:
    text = NORTH_BENCH.split("[instruments.rf]")[0] + "[guard]" + NORTH_BENCH.split("[guard]")[1]
    config = parse(text, FILE)
    assert config.instruments == {}
    assert config.drive.instrument == "rf"


def test_an_ion_may_be_damped_and_a_trap_may_have_no_electrodes_or_points() -> None:
    head, tail = RING.split("[electrodes.bias]")
    text = head.replace('ion = "88Sr+"', 'ion = "88Sr+"\ndamping = "5 /s"').replace('instrument = "rf"', "")
    config = parse(text + "[guard]" + tail.split("[guard]")[1].split("[points.work]")[0], FILE)
    assert config.species["88Sr+"].damping_per_s == 5.0
    assert (config.electrodes, config.points) == ({}, {})


def test_an_escape_distance_makes_a_depth_rule_possible_in_tensor_geometry() -> None:
    text = TENSOR.replace('"tensor"', '"tensor"\nescape = ["1 mm", "1 mm", "2 mm"]')
    config = parse(text.replace('margin = "5 %"', 'margin = "5 %"\nmin_depth = "1 eV"'), FILE)
    assert config.trap.escape_m == (0.001, 0.001, 0.002)
    assert config.guard.min_depth_ev == 1.0


def test_paths_are_beside_the_trap_file_unless_absolute() -> None:
    text = RING + '[record]\nfile = "/data/r.sqlite"\n[server]\nlisten = "[::1]:0"\nsocket = "run.sock"\n'
    text = text.replace('timeout = "500 ms"', 'profile = "ours.toml"')
    config = parse(text, FILE)
    assert config.record_file == Path("/data/r.sqlite")
    assert config.server.socket == Path("/bench/run.sock")
    assert (config.server.host, config.server.port) == ("::1", 0)
    assert config.instruments["rf"].profile == "/bench/ours.toml"


@pytest.mark.parametrize("text", [NORTH_BENCH, RING, TENSOR])
def test_a_config_as_data_is_strict_json_and_holds_the_file_as_written(text: str) -> None:
    data = as_data(parse(text, FILE))
    assert json.loads(json.dumps(data, allow_nan=False)) == data
    assert data["text"] == text
    assert data["source"] == "/bench/trap.toml"


def test_as_data_shows_values_in_si_under_names_with_their_unit() -> None:
    data = as_data(parse(NORTH_BENCH, FILE))
    assert data["trap"]["r0_m"] == 0.0005
    assert data["drive"]["frequency"]["low"] == 20.9e6
    assert data["points"]["work"]["endcaps"] == 120.0


def test_resource_ports_are_replaced_by_name(tmp_path: Path) -> None:
    config = read(write(tmp_path, NORTH_BENCH, rf=40001, dc=40002))
    assert config.instruments["rf"].resource == "TCPIP::127.0.0.1::40001::SOCKET"
    assert config.instruments["dc"].resource == "TCPIP::127.0.0.1::40002::SOCKET"


def test_every_key_is_listed_once_with_its_section() -> None:
    assert len(set(KEYS)) == len(KEYS)
    for key in ("trap.kappa", "drive.amplitude.slew", "electrodes.NAME.voltage.min", "points.NAME.SETPOINT"):
        assert key in KEYS
    assert {key.rsplit(".", 1)[0] for key in KEYS} == {name for name, keys in SECTIONS.items() if keys != ("NAME",)}
