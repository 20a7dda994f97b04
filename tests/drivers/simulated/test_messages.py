"""Program messages against the text of IEEE 488.2-1992 and SCPI-1999 (clauses beside each check, all [mem])."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trapd_simulated import ManualClock, RfSourceSettings
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.rf_source import RfSource


def error_code(instrument: RfSource | DcSupply) -> int:
    reply = instrument.execute("SYST:ERR?")
    assert reply is not None
    return int(reply.split(",")[0])


def number(reply: str | None) -> float:
    assert reply is not None
    return float(reply)


# SCPI-1999 vol. 1, 6.2.1: a mnemonic is its short or its long form, in any case, nothing between; 6.2.3 optional nodes.
@pytest.mark.parametrize(
    "header",
    [
        "FREQ",
        "frequency",
        "Freq:Cw",
        "FREQ:FIX",
        "FREQuency:FIXed",
        ":FREQ",
        "SOUR:FREQ",
        ":source:frequency:cw",
        "SOURCE1:FREQ:CW",
        "SOUR1:FREQ1",
    ],
)
def test_every_legal_spelling_reaches_the_same_command(rf: RfSource, header: str) -> None:
    assert rf.execute(f"{header} 21E6") is None
    assert number(rf.execute(f"{header}?")) == 21e6
    assert error_code(rf) == 0


@pytest.mark.parametrize("header", ["FRE", "FREQU", "FREQUENC", "FREQ:CWX", "SOURC:FREQ", "CW:FREQ", "FREQ:CW:FIX"])
def test_a_spelling_between_short_and_long_is_an_undefined_header(rf: RfSource, header: str) -> None:
    rf.execute(f"{header} 21E6")
    assert error_code(rf) == -113


# IEEE 488.2 7.7.2 (NRf: forgiving decimal numeric) and 7.7.3 (suffix); table 7-1: MHZ is megahertz, MAHZ is too.
@pytest.mark.parametrize(
    ("text", "hertz"),
    [
        ("21000500", 21000500),
        ("+21000500.", 21000500),
        ("2.10005E7", 21000500),
        ("2.10005e+7", 21000500),
        (".210005 E +8", 21000500),
        ("210005E+02", 21000500),
        ("21.0005MHZ", 21000500),
        ("21.0005 mhz", 21000500),
        ("21.0005 MAHZ", 21000500),
        ("21000.5 KHZ", 21000500),
        ("0.0210005GHZ", 21000500),
        ("21000500 HZ", 21000500),
        ("21000500E3 MAHZ", None),
    ],
)
def test_numbers_are_read_in_every_form_the_standard_allows(rf: RfSource, text: str, hertz: float | None) -> None:
    rf.execute(f"FREQ {text}")
    if hertz is None:
        assert error_code(rf) == -222
    else:
        assert error_code(rf) == 0
        assert number(rf.execute("FREQ?")) == hertz


def test_millivolts_are_millivolts_although_megahertz_are_mega(rf: RfSource) -> None:
    rf.execute("VOLT 2500 MV")
    assert number(rf.execute("VOLT?")) == 2.5


# SCPI-1999 vol. 2, 21.8.9: the number that belongs to each mistake.
@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("FREQ 1E6\x80", -101),
        ("FREQ 1E6;;VOLT 1", -102),
        ("5 VOLT", -102),
        ("VOLT 1,", -102),
        ("VOLT A B", -103),
        ("VOLT 1,2", -108),
        ("*CLS 1", -108),
        ("*ESR? 1", -108),
        ("VOLT", -109),
        ("*ESE", -109),
        ('VOLT"5"', -111),
        ("VOLT,5", -111),
        ("FREQUENCYOFTHE 1", -112),
        ("POWER 1", -113),
        ("*XYZ", -113),
        ("VOLT:PROT:CLE?", -113),
        ("MEAS:VOLT:AC 3", -113),
        ("SOUR2:VOLT 1", -114),
        ("VOLT3 1", -114),
        ("VOLT 1.2.3", -121),
        ("VOLT 1E40000", -123),
        ("VOLT " + "1" * 256, -124),
        ("OUTP (@1)", -178),
        ("VOLT 1 HZ", -131),
        ("FREQ 1 FURLONGS", -131),
        ("FREQ 1 ABCDEFGHIJKLM", -134),
        ("*ESE 1 V", -138),
        ("OUTP 1 V", -138),
        ("VOLT MOST", -141),
        ("OUTP MAYBE", -141),
        ("VOLT ABCDEFGHIJKLM", -144),
        ("*ESE ON", -148),
        ("VOLT 'open", -151),
        ("VOLT '5'", -158),
        ("VOLT #15hello", -168),
        ("VOLT (1+2)", -171),
        ("VOLT 12.6", -222),
        ("FREQ 999999", -222),
        ("*ESE 256", -222),
        ("*SRE -1", -222),
        ("VOLT NAN", -141),
    ],
)
def test_each_mistake_has_its_number_and_changes_nothing(rf: RfSource, message: str, code: int) -> None:
    before = rf.execute("FREQ?;VOLT?;:OUTP?;*ESE?;*SRE?")
    rf.execute(message)
    assert error_code(rf) == code
    assert error_code(rf) == 0
    assert rf.execute("FREQ?;VOLT?;:OUTP?;*ESE?;*SRE?") == before


def test_an_empty_message_is_no_mistake(rf: RfSource) -> None:  # 488.2 7.3.2
    assert rf.execute("") is None
    assert rf.execute(" \t ") is None
    assert error_code(rf) == 0


# SCPI-1999 vol. 1, 6.2.4: without a leading colon the header continues where the last one's branch was.
def test_the_header_path_is_the_last_header_without_its_last_node(rf: RfSource) -> None:
    rf.execute("SOUR:FREQ 21 MHZ;VOLT 3")
    assert rf.execute("SOUR:VOLT:LEV 3;PROT:TRIP?") == "0"
    rf.execute("OUTP:STAT ON;VOLT 4")
    assert error_code(rf) == -113
    rf.execute("OUTP:STAT ON;:VOLT 4;FREQ 22E6")
    assert error_code(rf) == 0
    assert [float(part) for part in (rf.execute("VOLT?;FREQ?") or "").split(";")] == [4.0, 22e6]


def test_a_common_command_leaves_the_header_path_alone(rf: RfSource) -> None:
    assert rf.execute("VOLT:PROT:CLE;*WAI;*OPC?;TRIP?") == "1;0"
    assert error_code(rf) == 0


def test_an_omitted_optional_node_is_not_in_the_header_path(rf: RfSource) -> None:
    rf.execute("FREQ:CW 21E6;FIX 22E6")
    assert number(rf.execute("FREQ?")) == 22e6
    rf.execute("FREQ 21E6;FIX 23E6")
    assert error_code(rf) == -113


def test_each_message_begins_at_the_root(rf: RfSource) -> None:
    rf.execute("SOUR:VOLT:LEV 3")
    assert number(rf.execute("VOLT?")) == 3.0
    rf.execute("PROT:CLE")
    assert error_code(rf) == -113


# 488.2 6.1.7.1.1 and 11.5.1.1.4: units are executed in order; a command error ends the message.
def test_units_before_a_command_error_stand_and_those_behind_it_are_lost(rf: RfSource) -> None:
    rf.execute("FREQ 21E6;FOO 1;VOLT 5")
    assert error_code(rf) == -113
    assert [float(part) for part in (rf.execute("FREQ?;VOLT?") or "").split(";")] == [21e6, 0.0]


def test_an_execution_error_does_not_end_the_message(rf: RfSource) -> None:
    rf.execute("VOLT 99;FREQ 21E6")
    assert error_code(rf) == -222
    assert number(rf.execute("FREQ?")) == 21e6


def test_answers_of_one_message_come_in_one_line_between_semicolons(rf: RfSource) -> None:  # 488.2 8.4.1
    reply = rf.execute("FREQ 21E6;FREQ?;VOLT 5;VOLT?;:OUTP?") or ""
    assert [float(part) for part in reply.split(";")] == [21e6, 5.0, 0.0]


def test_a_query_behind_the_identity_is_unterminated(rf: RfSource) -> None:  # 488.2 6.3.2.2, SCPI -440
    assert (rf.execute("*IDN?;VOLT?") or "").count(",") == 3
    assert error_code(rf) == -440
    assert int(rf.execute("*ESR?") or 0) & 4


# SCPI-1999 vol. 1, 7.2.1.2: MINimum and MAXimum, in commands and queries.
@pytest.mark.parametrize(("word", "volts"), [("MIN", 0.0), ("MINimum", 0.0), ("max", 12.5), ("MAXIMUM", 12.5)])
def test_minimum_and_maximum_set_and_tell_the_bounds(rf: RfSource, word: str, volts: float) -> None:
    rf.execute("VOLT 3")
    assert number(rf.execute(f"VOLT? {word}")) == volts
    assert number(rf.execute("VOLT?")) == 3.0
    rf.execute(f"VOLT {word}")
    assert number(rf.execute("VOLT?")) == volts


# SCPI-1999 vol. 1, 7.3: boolean data is rounded to an integer; not zero is ON; the query answers 1 or 0.
@pytest.mark.parametrize(
    ("text", "state"), [("ON", "1"), ("off", "0"), ("1", "1"), ("0", "0"), ("0.4", "0"), ("0.6", "1"), ("-7", "1")]
)
def test_boolean_data_is_on_off_or_a_rounded_number(rf: RfSource, text: str, state: str) -> None:
    rf.execute(f"OUTP {'OFF' if state == '1' else 'ON'}")
    rf.execute(f"OUTP {text}")
    assert rf.execute("OUTP?") == state


# SCPI-1999 vol. 1, 8.3.2: channel lists keep their order, ranges may run down; 6.2.5.2: a missing suffix is 1.
def test_channel_lists_and_suffixes_name_channels(dc: DcSupply, clock: ManualClock) -> None:
    dc.execute("VOLT 100;:SOUR2:VOLT 2;:SOUR3:VOLT 3;:SOUR4:VOLT 4")
    dc.execute("OUTP1 ON;OUTP2 ON;OUTP3 ON;OUTP4 ON")
    clock.advance(1.0)
    reply = dc.execute("MEAS:VOLT:DC? (@1, 4:2)") or ""
    assert [float(part) for part in reply.split(",")] == pytest.approx([100.0, 4.0, 3.0, 2.0], abs=0.1)
    assert number(dc.execute("SOUR1:VOLT?")) == number(dc.execute("VOLT?")) == 100.0
    assert error_code(dc) == 0


@pytest.mark.parametrize(
    ("message", "code"),
    [
        ("SOUR5:VOLT 1", -114),
        ("OUTP0 ON", -114),
        ("MEAS:VOLT?", -109),
        ("MEAS:VOLT? 1", -128),
        ("MEAS:VOLT? (@5)", -222),
        ("MEAS:VOLT? (@1", -171),
        ("MEAS:VOLT? (@)", -171),
        ("MEAS:VOLT? (@1:)", -171),
        ("SOUR2:VOLT 25.1", -222),
        ("VOLT 1,(@2)", -108),
        ("INST:NSEL 2", -113),
    ],
)
def test_a_channel_that_is_not_there_is_refused(dc: DcSupply, message: str, code: int) -> None:
    assert dc.execute(message) is None
    assert error_code(dc) == code


@settings(max_examples=300, deadline=None)
@given(st.text(st.characters(max_codepoint=255), max_size=60) | st.from_regex(r"[A-Z:*?]{1,9} [-+0-9.E,@():;]{0,12}"))
def test_no_message_whatever_breaks_the_parser(message: str) -> None:
    rf = RfSource("rf", RfSourceSettings(), ManualClock(), seed=0)
    rf.execute(message.replace("\n", ""))
    assert number(rf.execute("*CLS;*ESR?")) == 0
