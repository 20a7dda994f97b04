"""An instrument that differs in everything a dialect can say."""

from __future__ import annotations

import math

import pytest

from trapd_simulated import ChannelSettings, DcSupplySettings, Dialect, ManualClock, RfSourceSettings
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.rf_source import RfSource


def rf_source(clock: ManualClock, **changes: object) -> RfSource:
    dialect = Dialect(**changes)  # type: ignore[arg-type]
    return RfSource("rf", RfSourceSettings(level_min_v=1e-4, settle_s=0.0, dialect=dialect), clock, seed=0)


def dc_supply(clock: ManualClock, **changes: object) -> DcSupply:
    channels = (ChannelSettings(), ChannelSettings(low_v=-5.0, high_v=5.0))
    return DcSupply("dc", DcSupplySettings(channels=channels, dialect=Dialect(**changes)), clock, seed=0)  # type: ignore[arg-type]


def level_v(rf: RfSource, clock: ManualClock) -> float:
    return rf.carrier(clock.now_s()).level_v(clock.now_s())


# A sine of 1 V peak is 2 V peak to peak and 1/sqrt(2) V rms; 1 mW into 50 ohm is 0.2236 V rms (IEC 60027-3: 0 dBm).
@pytest.mark.parametrize(
    ("unit", "factor", "displayed", "volts"),
    [
        ("VPK", 1.0, 1.0, 1.0),
        ("VPP", 1.0, 2.0, 1.0),
        ("VRMS", 1.0, 0.7071, 0.7071 * math.sqrt(2.0)),
        ("DBM", 1.0, 0.0, math.sqrt(1e-3 * 50.0) * math.sqrt(2.0)),
        ("DBM", 1.0, 10.0, math.sqrt(1e-2 * 50.0) * math.sqrt(2.0)),
        ("VPP", 2.0, 2.0, 2.0),
    ],
)
def test_the_level_means_what_the_dialect_says(
    clock: ManualClock, unit: str, factor: float, displayed: float, volts: float
) -> None:
    rf = rf_source(clock, amplitude_unit=unit, level_factor=factor)
    rf.execute(f"VOLT {displayed};:OUTP ON")
    assert level_v(rf, clock) == pytest.approx(volts, rel=1e-9)
    assert float(rf.execute("VOLT?") or 0) == pytest.approx(displayed)


def test_the_measurement_is_rms_at_the_terminals_in_every_dialect(clock: ManualClock) -> None:
    rf = rf_source(clock, amplitude_unit="DBM", level_factor=2.0)
    rf.execute("VOLT 10;:OUTP ON")
    assert float(rf.execute("MEAS:VOLT:AC?") or 0) == pytest.approx(2.0 * math.sqrt(0.5), rel=5e-3)


def test_the_upper_bound_is_the_greatest_level_inside_the_real_one(clock: ManualClock) -> None:
    rf = rf_source(clock, amplitude_unit="DBM")
    rf.execute("VOLT MAX;:OUTP ON")
    assert 12.4 < level_v(rf, clock) <= 12.5
    rf.execute("VOLT 32")
    assert (rf.execute("SYST:ERR?") or "").startswith("-222")


def test_a_volt_is_no_decibel(clock: ManualClock) -> None:
    rf = rf_source(clock, amplitude_unit="DBM")
    rf.execute("VOLT 1 V")
    assert (rf.execute("SYST:ERR?") or "").startswith("-131")


@pytest.mark.parametrize(
    ("changes", "level", "frequency", "output"),
    [
        ({"digits": 3}, "2.000E+00", "2.100E+07", "1"),
        ({"digits": 3, "numbers": "NR2"}, "2.000", "21000000.000", "1"),
        ({"digits": 3, "numbers": "NR2", "replies": "unit"}, "2.000 V", "21000000.000 Hz", "1"),
        ({"digits": 3, "numbers": "NR2", "replies": "header"}, "VOLT 2.000", "FREQ 21000000.000", "OUTP 1"),
        ({"digits": 2, "numbers": "NR2", "frequency_unit": "MHZ", "output_words": True}, "2.00", "21.00", "ON"),
    ],
)
def test_replies_are_dressed_as_the_dialect_says(
    clock: ManualClock, changes: dict[str, object], level: str, frequency: str, output: str
) -> None:
    rf = rf_source(clock, **changes)
    rf.execute("FREQ 21 MHZ;VOLT 2;:OUTP ON")
    assert [rf.execute(query) for query in ("VOLT?", "FREQ?", "OUTP?")] == [level, frequency, output]


def test_a_bare_frequency_is_in_the_dialects_unit(clock: ManualClock) -> None:
    rf = rf_source(clock, frequency_default_unit="MHZ")
    rf.execute("FREQ 21.5")
    assert float(rf.execute("FREQ?") or 0) == 21.5e6


def test_channels_in_lists(clock: ManualClock) -> None:
    dc = dc_supply(clock, addressing="list", digits=1)
    dc.execute("VOLT 3,(@2);OUTP ON,(@1:2)")
    assert (dc.execute("SYST:ERR?") or "").startswith("0")  # OUTP is found: VOLT leaves the path at the root
    assert dc.execute("VOLT? (@1,2)") == "0.0E+00,3.0E+00"
    assert dc.execute("VOLT? MAX,(@1,2)") == "2.5E+01,5.0E+00"
    assert dc.execute("OUTP? (@2)") == "1"
    for message, code in (("VOLT 3", "-109"), ("SOUR2:VOLT 3", "-114"), ("VOLT? (@3)", "-222"), ("OUTP? 1", "-128")):
        dc.execute(message)
        assert (dc.execute("SYST:ERR?") or "").startswith(code), message


def test_a_value_that_one_listed_channel_refuses_changes_none(clock: ManualClock) -> None:
    dc = dc_supply(clock, addressing="list", digits=1)
    dc.execute("VOLT 20,(@1,2)")
    assert (dc.execute("SYST:ERR?") or "").startswith("-222")
    assert dc.execute("VOLT? (@1,2)") == "0.0E+00,0.0E+00"


def test_channels_by_selection(clock: ManualClock) -> None:
    dc = dc_supply(clock, addressing="select", digits=1)
    dc.execute("INST:NSEL 2;:VOLT 4;:OUTP ON")
    assert dc.execute("INST:NSEL?;:VOLT?;:OUTP?") == "2;4.0E+00;1"
    assert dc.execute("INST:NSEL 1;:VOLT?;:OUTP?") == "0.0E+00;0"
    clock.advance(1.0)
    assert float(dc.execute("INST:NSEL 2;:MEAS:VOLT?") or 0) == pytest.approx(4.0, abs=0.1)
    dc.execute("INST:NSEL 3")
    assert (dc.execute("SYST:ERR?") or "").startswith("-222")


def test_a_command_too_soon_is_dropped_with_the_dialects_error(clock: ManualClock) -> None:
    rf = rf_source(clock, min_spacing_s=0.05, spacing_code=-200, digits=1)
    rf.execute("VOLT 1")
    clock.advance(0.049)
    assert rf.execute("VOLT 2") is None
    clock.advance(0.051)
    assert rf.execute("VOLT?") == "1.0E+00"
    clock.advance(0.051)
    assert (rf.execute("SYST:ERR?") or "").startswith("-200")


def test_a_standard_error_may_have_the_devices_own_number(clock: ManualClock) -> None:
    rf = rf_source(clock, error_codes={-222: 501})
    rf.execute("*CLS")
    rf.execute("VOLT 99")
    assert (rf.execute("SYST:ERR?") or "").startswith("501,")
    assert rf.execute("*ESR?") == "8"  # SCPI-1999 21.8.2: positive numbers are device-dependent errors [mem]


def test_commands_may_have_other_headers(clock: ManualClock) -> None:
    rf = rf_source(clock, commands={"level": ("[SOURce#]:POWer[:LEVel]",)}, digits=1)
    rf.execute("POW 2")
    assert rf.execute("SOUR:POWER:LEV?") == "2.0E+00"
    rf.execute("VOLT 1")
    assert (rf.execute("SYST:ERR?") or "").startswith("-113")


def test_an_instrument_may_have_no_measurement(clock: ManualClock) -> None:
    rf, dc = rf_source(clock, measures=False), dc_supply(clock, measures=False)
    rf.execute("MEAS:VOLT:AC?")
    dc.execute("MEAS:VOLT? (@1)")
    for one in (rf, dc):
        assert (one.execute("SYST:ERR?") or "").startswith("-113")
