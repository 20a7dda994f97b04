"""The settings file, and the wall around the package."""

from __future__ import annotations

import ast
import json
import sys
from pathlib import Path

import pytest

from trapd_simulated import DcSupplySettings, Rack, RackSettings, RfSourceSettings, SettingsError, load
from trapd_simulated.settings import Dialect

PACKAGE = Path(__file__).resolve().parents[3] / "drivers" / "trapd_simulated"

FILE = """
control_port = 0
[resonator]
instrument = "drive"
center_hz = 24e6
loaded_q = 150
[instruments.drive]
kind = "rf-source"
level_min_v = 0.01
range_boundaries_v = [1, 5]
[instruments.drive.dialect]
amplitude_unit = "DBM"
error_codes = { "-222" = 501 }
commands = { level = ["[SOURce#]:POWer"] }
[instruments.plates]
kind = "dc-supply"
channels = [{ low_v = 0, high_v = 100 }, {}]
dialect = { addressing = "list" }
"""


def test_a_file_says_what_the_records_say(tmp_path: Path) -> None:
    path = tmp_path / "rack.toml"
    path.write_text(FILE)
    found = load(path)
    drive, plates = found.instruments["drive"], found.instruments["plates"]
    assert isinstance(drive, RfSourceSettings)
    assert isinstance(plates, DcSupplySettings)
    assert drive.range_boundaries_v == (1.0, 5.0)
    assert drive.dialect == Dialect(
        amplitude_unit="DBM", error_codes={-222: 501}, commands={"level": ("[SOURce#]:POWer",)}
    )
    assert [one.high_v for one in plates.channels] == [100.0, 25.0]
    assert found.resonator.center_hz == 24e6
    with Rack(found) as rack:
        assert list(rack.ports) == ["drive", "plates"]


def test_json_of_the_same_shape_is_read_too(tmp_path: Path) -> None:
    path = tmp_path / "rack.json"
    path.write_text(json.dumps({"instruments": {"rf": {"kind": "rf-source", "level_max_v": 3}}}))
    one = load(path).instruments["rf"]
    assert isinstance(one, RfSourceSettings)
    assert one.level_max_v == 3.0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("control_port = 'x'", "control_port = 'x': expected int"),
        ("colour = 1", "colour: unknown; expected one of"),
        ("instruments = 3", "instruments = 3: expected a table"),
        ("[instruments.rf]\nkind = 'laser'", "instruments.rf.kind = 'laser': expected one of rf-source, dc-supply"),
        ("[instruments.rf]\nkind = 'rf-source'\nlevel_max = 3", "instruments.rf.level_max: unknown"),
        ("[instruments.rf]\nkind = 'rf-source'\nlevel_max_v = true", "instruments.rf.level_max_v = True"),
        ("[instruments.rf]\nkind = 'rf-source'\nlevel_resolution = 0", "instruments.rf: 0, level_resolution"),
        ("[instruments.rf]\nkind = 'rf-source'\ndialect = {amplitude_unit = 'W'}", "amplitude_unit = 'W': expected"),
        ("[instruments.rf]\nkind = 'rf-source'\ndialect = {amplitude_unit = 'DBM'}", "level_min_v"),
        ("[instruments.rf]\nkind = 'rf-source'\ndialect = {error_codes = {x = 1}}", "key 'x': expected int"),
        ("[resonator]\ninstrument = 'dc'", "expected the name of an RF source"),
        ("[instruments.dc]\nkind = 'dc-supply'\nchannels = [{low_v = 5, high_v = 5}]", "channels"),
        ("= 1", "line 1"),
    ],
)
def test_each_mistake_in_a_file_is_one_clear_error(tmp_path: Path, text: str, message: str) -> None:
    path = tmp_path / "rack.toml"
    path.write_text(text)
    with pytest.raises(SettingsError) as error:
        load(path)
    assert message in str(error.value)
    assert str(error.value).startswith(str(path))
    assert str(error.value).endswith("no rack was started")


def test_a_header_pattern_for_no_command_is_refused() -> None:
    dialect = Dialect(commands={"power": ("POWer",)})
    with pytest.raises(SettingsError, match="'power'"):
        Rack(RackSettings(instruments={"rf": RfSourceSettings(dialect=dialect)}))


def test_the_package_imports_itself_numpy_and_the_standard_library_only() -> None:
    found = set()
    for path in PACKAGE.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Import):
                found |= {one.name.split(".")[0] for one in node.names}
            elif isinstance(node, ast.ImportFrom):
                assert node.level == 0
                found.add((node.module or "").split(".")[0])
    assert "trapd_simulated" in found
    assert found - {"trapd_simulated", "numpy"} <= set(sys.stdlib_module_names)
