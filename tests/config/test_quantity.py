"""Texts with units. Expected values are definitions: the SI Brochure, 9th edition (2019), and CODATA 2022."""

from __future__ import annotations

import subprocess
import sys
from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from trapd.config.quantity import (
    Dimension,
    QuantityError,
    parse_assignments,
    parse_quantity,
    parse_setpoint_value,
    quantity,
)
from trapd.errors import BadRequest, ConfigError

DEFINITIONS: list[tuple[str, Dimension, float]] = [
    ("24.5 MHz", "frequency", 24.5e6),  # SI Brochure, table 7: prefixes
    ("20 kHz/s", "frequency rate", 20e3),
    ("300 V", "voltage", 300.0),
    ("120V", "voltage", 120.0),
    ("-10 mV", "voltage", -0.010),
    ("5 V/ms", "voltage rate", 5e3),
    ("0.50 mm", "length", 0.0005),
    ("3 µs", "time", 3e-6),
    ("3 us", "time", 3e-6),
    ("10 min", "time", 600.0),  # SI Brochure, table 8
    ("1 h", "time", 3600.0),
    ("2.1e-14 kg", "mass", 2.1e-14),
    ("1 u", "mass", 1.66053906892e-27),  # CODATA 2022, atomic mass constant [mem]
    ("1 e", "charge", 1.602176634e-19),  # SI Brochure, 2.2, exact
    ("1 eV", "energy", 1.602176634e-19),
    ("1 mbar", "pressure", 100.0),  # SI Brochure, ISO 80000-4: 1 bar = 1e5 Pa
    ("40 /s", "rate", 40.0),
    ("5 %", "share", 0.05),
    ("38 V/V", "gain", 38.0),
    ("2 mV/V", "gain", 0.002),
]

REFUSED = [
    ("24,5 MHz", "frequency", "comma"),
    ("1,000 V", "voltage", "comma"),
    ("1 000 V", "voltage", "space or mark inside"),
    ("1_000 V", "voltage", "space or mark inside"),
    ("20 + 1 MHz", "frequency", "arithmetic"),
    ("20 MHz + 1 MHz", "frequency", "arithmetic"),
    ("2*3 V", "voltage", "arithmetic"),
    ("300", "voltage", "without a unit"),
    ("", "voltage", "nothing"),
    ("V", "voltage", "no number"),
    (" 300 V", "voltage", "space around"),
    ("300 V\n", "voltage", "space around"),
    ("nan V", "voltage", "finite"),
    ("inf V", "voltage", "finite"),
    ("1e400 V", "voltage", "too large"),
    ("5. V", "voltage", "point without digits"),
    (".5 V", "voltage", "point without digits"),
    ("٣ V", "voltage", "not a number"),
    ("0x10 V", "voltage", "not a number"),
    ("21 mhz", "frequency", "unknown unit"),
    ("300 V", "frequency", "a voltage; expected a frequency"),
    ("40 Hz", "rate", "a frequency; expected a rate"),
    ("21e6 /s", "frequency", "a rate; expected a frequency"),
    ("5 %", "gain", "a share; expected a gain"),
    ("0.05 V/V", "share", "a gain; expected a share"),
    ("3 kg*m", "voltage", "another kind"),
    ("3 V/s/s", "voltage", "not a number with a unit"),
]


@pytest.mark.parametrize(("text", "dimension", "expected"), DEFINITIONS)
def test_a_quantity_is_what_the_si_brochure_says(text: str, dimension: Dimension, expected: float) -> None:
    assert quantity(text, dimension) == expected


@pytest.mark.parametrize(("text", "dimension", "fragment"), REFUSED)
def test_what_is_no_quantity_is_refused_with_what_was_found_and_expected(
    text: str, dimension: Dimension, fragment: str
) -> None:
    with pytest.raises(QuantityError) as caught:
        quantity(text, dimension)
    assert fragment in str(caught.value)
    assert f"expected a {dimension} such as" in str(caught.value)


@given(st.decimals(min_value=-1000, max_value=1000, places=6))
def test_a_quantity_is_the_float_nearest_to_what_is_written(number: Decimal) -> None:
    assert quantity(f"{number:f} mV", "voltage") == float(number * Decimal("0.001"))


BOTH: tuple[Dimension, ...] = ("voltage", "share")


@given(st.text(max_size=20), st.text(alphabet="0123456789+-.,eE VHzkM%/*^()", max_size=20))
def test_no_text_whatever_raises_anything_but_a_quantity_error(anything: str, likely: str) -> None:
    for text in (anything, likely, f"1 {anything}"):
        for dimension in BOTH:
            try:
                quantity(text, dimension)
            except QuantityError:
                continue


def test_an_energy_can_be_had_in_electron_volts_without_rounding() -> None:
    assert quantity("0.2 eV", "energy", "eV") == 0.2
    assert quantity("200 meV", "energy", "eV") == 0.2


def test_a_wrong_quantity_names_the_place_it_stands() -> None:
    with pytest.raises(ConfigError, match=r'bench\.toml: drive\.amplitude\.max = "3 A": .*expected a voltage'):
        parse_quantity("3 A", "voltage", "bench.toml: drive.amplitude.max")


def test_assignments_of_a_command_line_are_values_in_hz_and_volts() -> None:
    assert parse_assignments(["endcaps=120V", "drive.frequency=21MHz", "rods=-0.5 V"]) == {
        "endcaps": 120.0,
        "drive.frequency": 21e6,
        "rods": -0.5,
    }


@pytest.mark.parametrize(
    ("word", "fragment"),
    [
        ("endcaps=120", "without a unit; expected a voltage"),
        ("drive.frequency=21", "without a unit; expected a frequency"),
        ("drive.frequency=21V", "a voltage; expected a frequency"),
        ("endcap=120V", '"endcap" is no setpoint of this trap; did you mean "endcaps"?'),
        ("q=1V", "known here: drive.frequency, endcaps"),
        ("endcaps", "expected setpoint=value"),
        ("=5V", "expected setpoint=value"),
    ],
)
def test_a_wrong_assignment_is_a_bad_request_that_says_what_was_expected(word: str, fragment: str) -> None:
    with pytest.raises(BadRequest) as caught:
        parse_assignments([word], ["drive.frequency", "endcaps"])
    assert fragment in caught.value.message


def test_a_setpoint_given_twice_is_refused() -> None:
    with pytest.raises(BadRequest, match="twice"):
        parse_assignments(["endcaps=1V", "endcaps=2V"])


def test_a_bare_number_on_the_command_line_is_refused_naming_the_unit() -> None:
    with pytest.raises(BadRequest, match='expected a voltage such as "300 V"'):
        parse_setpoint_value("endcaps", "120")


def test_importing_the_trap_file_reader_does_not_import_pint() -> None:
    """Pint costs 0.13 s; commands that read no trap file must not pay for it."""
    code = "import sys, trapd.config.quantity; sys.exit('pint' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
