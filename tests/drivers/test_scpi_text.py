"""The text on the wire against the standards: IEEE 488.2-1992 and SCPI-1999, not against the simulated rack.

Clause numbers and examples [mem] unless another source is named.
"""

from __future__ import annotations

import re

import pytest

from tests.drivers.rack import PLAIN, resource
from trapd_drivers.errors import Malformed
from trapd_drivers.scpi import answers
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_simulated import Rack

# IEEE 488.2 7.6.1: a program mnemonic is a letter and up to eleven letters, digits or underscores.
MNEMONIC = r"[A-Za-z][A-Za-z0-9_]{0,11}"
HEADER = rf"(?:\*{MNEMONIC}|:?{MNEMONIC}(?::{MNEMONIC})*)\??"
# 7.7.2 decimal numeric (NRf), 7.7.1 character; SCPI-1999 volume 1, 8.3.2 channel list.
DATUM = rf"(?:[+-]?(?:\d+\.?\d*|\.\d+)(?:[Ee][+-]?\d+)?|{MNEMONIC}|\(@\d+(?:,\d+)*\))"
UNIT = rf"{HEADER}(?: +{DATUM}(?: *, *{DATUM})*)?"
MESSAGE = re.compile(rf"{UNIT}(?:;{UNIT})*")

# SCPI-1999 volume 2: the long forms of the mnemonics that plain sends.
LONG_FORMS = (
    *("SYSTem", "ERRor", "FREQuency", "VOLTage", "OUTPut", "MEASure", "PROTection", "TRIPped", "SOURce"),
    *("MINimum", "MAXimum", "AC", "ON", "OFF", "STATe", "INITiate", "ABORt", "FETCh"),
    *("STATus", "OPERation", "CONDition", "PRESsure", "TIME", "GATE"),
    # Of an instrument's own, as SCPI-1999 lets it: volume 1, 6.2.1 holds for them too.
    *("BURSt", "DURation", "ACTive", "TOTalize"),
)


def short_form(long: str) -> str:
    """SCPI-1999 volume 1, 6.2.1: the first four letters; three when the fourth is a vowel and there are more."""
    upper = long.upper()
    return upper if len(upper) <= 4 else upper[: 3 if upper[3] in "AEIOU" else 4]


@pytest.fixture(scope="module")
def sent() -> list[str]:
    """Everything that the drivers send in the plain dialect."""
    with Rack(PLAIN) as rack:
        rf, dc = ScpiRfSource.open(resource(rack, "rf")), ScpiDcSupply.open(resource(rack, "dc"))
        rf.set_frequency_hz(21.000123e6)
        rf.set_level_v(7.1234)
        rf.set_output(True)
        rf.set_output(False)
        dc.set_voltage_v(2, -3.25)
        dc.set_output(2, True)
        dc.set_output(2, False)
        for read in (rf.read_status, rf.read_frequency_hz, rf.read_level_v, rf.measure_level_v, rf.read_output):
            read()
        dc.read_status()
        for ask in (dc.read_voltage_v, dc.measure_voltage_v, dc.read_output):
            ask(2)
        counter = ScpiPhotonCounter.open(resource(rack, "counter"))
        rf.start_burst(0.0123)
        rf.read_burst()
        counter.start_count(1e-3)
        while counter.read_count() is None:
            pass
        ScpiGauge.open(resource(rack, "vacuum")).read_value()
        return [one.text for one in rack.received]


def test_every_message_is_a_program_message_of_ieee_488_2(sent: list[str]) -> None:
    assert len(set(sent)) > 20
    for text in sent:
        assert MESSAGE.fullmatch(text), text


def test_every_mnemonic_is_the_short_form_of_a_scpi_keyword(sent: list[str]) -> None:
    allowed = {short_form(long) for long in LONG_FORMS}
    for text in sent:
        for unit in text.split(";"):
            words = re.findall(r"(?<![*A-Za-z0-9])[A-Za-z]+", unit)
            assert {word for word in words if f"*{word}" not in unit} <= allowed, text


def test_a_query_whose_reply_has_no_end_mark_of_its_own_stands_last(sent: list[str]) -> None:
    """IEEE 488.2 10.14: *IDN? answers arbitrary text, so nothing may follow it in its message."""
    assert all(text == "*IDN?" for text in sent if "*IDN?" in text)


def test_a_compound_message_returns_to_the_root_before_the_error_query(sent: list[str]) -> None:
    """SCPI-1999 volume 1, 6.2.4: a unit after ``;`` continues in the path of the one before unless ``:`` leads it."""
    compounds = [text for text in sent if ";" in text]
    assert compounds
    assert all(re.fullmatch(r"[^;]+(;:[^;]+)*;:SYST:ERR\?", text) for text in compounds)


def test_nothing_ever_resets_the_instrument(sent: list[str]) -> None:
    assert not any("*RST" in text or "*CLS" in text for text in sent)


def test_values_are_sent_with_the_digits_of_the_resolution(sent: list[str]) -> None:
    assert "FREQ 21000123.0;:SYST:ERR?" in sent
    assert "VOLT 7.1234;:SYST:ERR?" in sent
    assert "SOUR2:VOLT -3.25;:SYST:ERR?" in sent
    assert "ABOR;:BURS:STAT ON;:BURS:DUR 0.012300;:SYST:ERR?" in sent
    assert "ABOR;:TOT:GATE:TIME 0.001000;:SYST:ERR?" in sent


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("123", 123.0),  # NR1, 8.7.2
        ("+123", 123.0),
        ("-12345", -12345.0),
        ("12.3", 12.3),  # NR2, 8.7.3
        ("+1.234", 1.234),
        ("-0.123", -0.123),
        ("1.23E+6", 1.23e6),  # NR3, 8.7.4
        ("123.4E-54", 123.4e-54),
        ("-1234.567E+3", -1234567.0),
        ("7.", 7.0),  # NR2 as instruments also write it
        (".5", 0.5),
    ],
)
def test_response_numbers_are_read(text: str, value: float) -> None:
    assert answers.number(text) == value


@pytest.mark.parametrize(
    "text",
    [
        "",
        "1 0",
        *["1,0", "1.0.0", "#H1F", "0x10", "NAN", "INF", "1e", "--1", "1.0V", "1_000", "9.91E+37", "9.9E37", "-9.9E37"],
    ],
)
def test_what_is_no_number_is_malformed(text: str) -> None:
    """The last three are SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5: not a number, infinity, negative infinity."""
    with pytest.raises(Malformed):
        answers.number(text)


@pytest.mark.parametrize(
    ("text", "value"),
    # A count or a register in NR1, and as instruments that know only NR2 or NR3 write it: 8.7.2 to 8.7.4.
    [("0", 0), ("16", 16), ("+1024", 1024), ("007", 7), ("12.0", 12), ("1.23E+03", 1230)],
)
def test_whole_numbers_are_read(text: str, value: int) -> None:
    found = answers.whole_number(text)
    assert (type(found), found) == (int, value)


@pytest.mark.parametrize("text", ["-1", "12.5", "1.23E+01", "", "9.91E+37", "NAN", "#H1F", "12 counts", "1,2", "1e-3"])
def test_a_count_that_is_no_whole_number_from_0_is_malformed(text: str) -> None:
    with pytest.raises(Malformed):
        answers.whole_number(text)


@pytest.mark.parametrize("text", ["9.91E37", "9.91E+37", "9.9E37", "-9.9E37", "+9.9000000E+37"])
def test_not_a_number_and_infinity_are_known(text: str) -> None:
    """SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5."""
    assert answers.is_no_number(text)
    assert not answers.is_no_number("1E-9")
    assert not answers.is_no_number("NAN")


def test_an_identity_has_four_fields() -> None:
    """IEEE 488.2 10.14: manufacturer, model, serial number (0 if none), firmware level (0 if none)."""
    found = answers.identity("MAKER,MODEL 1,0,1.0,beta")
    assert (found.manufacturer, found.model, found.serial, found.firmware) == ("MAKER", "MODEL 1", "0", "1.0,beta")
    assert not found.simulated
    assert answers.identity("TRAPD SIMULATED RACK,M,1,1").simulated
    for text in ("", "MAKER", "MAKER,MODEL,0", ",MODEL,0,0"):
        with pytest.raises(Malformed):
            answers.identity(text)


def test_an_error_queue_entry_is_a_number_and_a_string() -> None:
    """SCPI-1999 volume 2, 21.8: ``0,"No error"`` when the queue is empty; -222 is "Data out of range"."""
    assert answers.error_entry('0,"No error"') is None
    assert answers.error_entry('+0,"No error"') is None
    assert answers.error_entry('-222,"Data out of range;level"') == (-222, "Data out of range;level")
    for text in ("", "0", "No error", "-222", "-222,Data out of range"):
        with pytest.raises(Malformed):
            answers.error_entry(text)
