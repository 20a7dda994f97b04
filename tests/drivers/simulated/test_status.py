"""Registers and error queue against IEEE 488.2-1992 clauses 10 and 11 and SCPI-1999 volume 2, 21.8 (all [mem])."""

from __future__ import annotations

import pytest

from trapd_simulated import Dialect, ManualClock, RfSourceSettings
from trapd_simulated.rf_source import RfSource


def ask(rf: RfSource, message: str) -> int:
    reply = rf.execute(message)
    assert reply is not None
    return int(reply)


def test_power_on_is_reported_once(rf: RfSource) -> None:  # 11.5.1.1.2, bit 7; 11.5.1.3: reading clears
    assert ask(rf, "*ESR?") == 128
    assert ask(rf, "*ESR?") == 0


# 11.5.1.1: bit 5 command, bit 4 execution, bit 3 device-dependent, bit 2 query error; SCPI 21.8.2 by hundreds.
@pytest.mark.parametrize(
    ("message", "bit"),
    [("FOO", 32), ("VOLT", 32), ("VOLT 99", 16), ("*ESE 300", 16), ("*IDN?;*ESE?", 4), ("*OPC", 1)],
)
def test_each_class_of_event_has_its_bit(rf: RfSource, message: str, bit: int) -> None:
    rf.execute("*CLS")
    rf.execute(message)
    assert ask(rf, "*ESR?") == bit


def test_enabled_events_reach_the_status_byte_and_the_master_summary(rf: RfSource) -> None:  # 11.2.1.2, 11.2.2.2, 11.3
    rf.execute("*CLS;*ESE 32")
    assert ask(rf, "*STB?") == 0
    rf.execute("FOO")
    assert ask(rf, "*STB?") == 32 + 4  # event summary, and SCPI's bit 2: the queue is not empty
    rf.execute("*SRE 32")
    assert ask(rf, "*STB?") == 64 + 32 + 4
    assert ask(rf, "*STB?") == 64 + 32 + 4  # 11.2.3: reading it changes nothing
    assert ask(rf, "*ESR?") == 32
    assert ask(rf, "*STB?") == 4


def test_an_answer_waiting_is_a_message_available(rf: RfSource) -> None:  # 11.2.1.1, bit 4
    rf.execute("*CLS")
    assert rf.execute("*ESE?;*STB?") == "0;16"


def test_bit_six_of_the_service_request_enable_is_ignored(rf: RfSource) -> None:  # 11.3.2.3
    rf.execute("*SRE 255")
    assert ask(rf, "*SRE?") == 191


def test_clear_empties_events_and_errors_but_no_enable(rf: RfSource) -> None:  # 10.3, 11.5.1.3
    rf.execute("*ESE 60;*SRE 32")
    rf.execute("FOO")
    rf.execute("*CLS")
    assert rf.execute("*ESR?;*ESE?;*SRE?;:SYST:ERR:COUN?") == "0;60;32;0"


def test_reset_changes_settings_and_leaves_status_alone(rf: RfSource) -> None:  # 10.32
    rf.execute("*CLS;*ESE 60")
    rf.execute("FOO")
    rf.execute("VOLT 5;:OUTP ON;*RST")
    assert rf.execute("VOLT?;:OUTP?") == "0.0000000000E+00;0"
    assert rf.execute("*ESR?;*ESE?;:SYST:ERR:COUN?") == "32;60;1"


def test_the_error_queue_is_first_in_first_out(rf: RfSource) -> None:  # SCPI 21.8.1
    for message in ("FOO", "VOLT", "VOLT 99"):
        rf.execute(message)
    assert ask(rf, "SYST:ERR:COUN?") == 3
    codes = [int((rf.execute("SYSTem:ERRor:NEXT?") or "").split(",")[0]) for _ in range(4)]
    assert codes == [-113, -109, -222, 0]


def test_an_empty_queue_says_no_error(rf: RfSource) -> None:  # SCPI 21.8.1
    assert rf.execute("SYST:ERR?") == '0,"No error"'


def test_a_full_queue_loses_the_newest_and_ends_with_queue_overflow(clock: ManualClock) -> None:  # SCPI 21.8.1
    rf = RfSource("rf", RfSourceSettings(dialect=Dialect(error_queue_depth=3)), clock, seed=0)
    rf.execute("*CLS")
    for message in ("FOO", "VOLT", "VOLT 99", "VOLT 98", "FOO"):
        rf.execute(message)
    assert ask(rf, "*ESR?") & 8
    assert [(rf.execute("SYST:ERR?") or "").split(",")[0] for _ in range(4)] == ["-113", "-109", "-350", "0"]
    rf.execute("FOO")
    assert (rf.execute("SYST:ERR?") or "").startswith('-113,"Undefined header')


def test_the_identity_has_four_fields_and_says_it_is_simulated(rf: RfSource) -> None:  # 10.14.3
    fields = (rf.execute("*IDN?") or "").split(",")
    assert len(fields) == 4
    assert fields[0].startswith("TRAPD SIMULATED")


def test_operation_complete_says_nothing_about_settling(rf: RfSource, clock: ManualClock) -> None:
    """10.18: no command here overlaps, so it is complete when executed, while the terminals still move."""
    assert rf.execute("VOLT 10;:OUTP ON;*OPC?") == "1"
    assert float(rf.execute("MEAS:VOLT:AC?") or 0) < 0.1
    clock.advance(0.1)
    assert float(rf.execute("MEAS:VOLT:AC?") or 0) > 7.0


def test_self_test_passes_and_the_version_is_the_standards(rf: RfSource) -> None:  # 10.38; SCPI 21.21
    assert rf.execute("*TST?;:SYST:VERS?") == "0;1999.0"
