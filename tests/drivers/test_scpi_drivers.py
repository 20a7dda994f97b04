"""Both SCPI drivers on the simulated rack: faults have their bounds, events are told once, refusals lose nothing."""

from __future__ import annotations

import socket
import time
from collections.abc import Iterator
from contextlib import suppress
from functools import partial
from pathlib import Path

import pytest

from tests.drivers.peer import Peer
from tests.drivers.rack import OTHER, PLAIN, resource
from tests.drivers.test_profile import OTHER as OTHER_PROFILE
from trapd_drivers.errors import DriverError, InstrumentRefused, Malformed, OutOfRange, Unreachable, WrongIdentity
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_drivers.worker import Worker
from trapd_simulated import Fault, FaultKind, Rack

TIMEOUT_S = 0.3
BOUND_S = 2 * TIMEOUT_S + 0.6  # twice the timeout, and a loaded machine


@pytest.fixture
def rack() -> Iterator[Rack]:
    with Rack(PLAIN) as rack:
        yield rack


@pytest.fixture
def rf(rack: Rack) -> Iterator[ScpiRfSource]:
    source = ScpiRfSource.open(resource(rack, "rf"), timeout_s=TIMEOUT_S)
    source.read_status()
    yield source
    source.close()


@pytest.fixture
def dc(rack: Rack) -> Iterator[ScpiDcSupply]:
    supply = ScpiDcSupply.open(resource(rack, "dc"), timeout_s=TIMEOUT_S)
    supply.read_status()
    yield supply
    supply.close()


@pytest.mark.parametrize(
    ("fault", "error"),
    [
        (Fault(kind=FaultKind.HANG), Unreachable),
        (Fault(kind=FaultKind.MUTE), Unreachable),
        (Fault(kind=FaultKind.PARTIAL_LINE), Unreachable),
        (Fault(kind=FaultKind.GARBAGE), Malformed),
        (Fault(kind=FaultKind.BABBLE), Malformed),
        (Fault(kind=FaultKind.SLOW_REPLY, delay_s=2.0, times=1), Unreachable),
        (Fault(kind=FaultKind.LATE_REPLY, delay_s=0.5, times=1), Unreachable),
        (Fault(kind=FaultKind.LOST_CONNECTION, times=1), Unreachable),
        (Fault(kind=FaultKind.STALLED_READER), Unreachable),
        (Fault(kind=FaultKind.NETWORK_DELAY, delay_s=2.0, times=1), Unreachable),
    ],
    ids=lambda one: getattr(one, "kind", ""),
)
def test_each_fault_costs_one_bounded_error_and_is_over_when_the_fault_is(
    rack: Rack, rf: ScpiRfSource, fault: Fault, error: type[DriverError]
) -> None:
    rf.set_frequency_hz(21e6)
    rf.set_level_v(7.0)
    rack.inject("rf", fault)
    start_s = time.monotonic()
    with pytest.raises(error, match=resource(rack, "rf")):
        rf.read_level_v()
    assert time.monotonic() - start_s < BOUND_S
    rack.clear("rf")
    for _ in range(3):
        assert rf.read_frequency_hz() == 21e6
        assert rf.read_level_v() == 7.0


@pytest.mark.parametrize(
    ("kind", "error"),
    [
        (FaultKind.REFUSE_CONNECTIONS, Unreachable),
        (FaultKind.SECOND_CLIENT, Unreachable),
        (FaultKind.WRONG_IDENTITY, WrongIdentity),
    ],
)
def test_an_instrument_that_cannot_be_taken_up_again_gets_no_command(
    rack: Rack, rf: ScpiRfSource, kind: FaultKind, error: type[DriverError]
) -> None:
    rack.inject("rf", Fault(kind=FaultKind.LOST_CONNECTION, times=1))
    with pytest.raises(Unreachable):
        rf.read_level_v()
    rack.inject("rf", kind)
    count = len(rack.received)
    start_s = time.monotonic()
    with pytest.raises(error):
        rf.set_level_v(1.0)
    assert time.monotonic() - start_s < BOUND_S
    assert all("VOLT" not in one.text for one in rack.received[count:])
    rack.clear("rf")
    rf.set_level_v(1.0)
    assert rf.read_level_v() == 1.0


def test_power_on_is_reported_once(rack: Rack) -> None:
    rf = ScpiRfSource.open(resource(rack, "rf"))
    rf.set_level_v(1.0)  # a first start is allowed to go on: nobody has built on anything yet
    assert rf.read_status().power_on
    assert not rf.read_status().power_on
    rf.close()


def test_after_an_unnoticed_power_cycle_only_off_is_sent_until_it_was_reported(rack: Rack, rf: ScpiRfSource) -> None:
    rf.set_level_v(7.0)
    rf.set_output(True)
    rack.power_cycle("rf")
    count = len(rack.received)
    for forbidden in (partial(rf.set_level_v, 7.1), partial(rf.set_output, True), partial(rf.set_frequency_hz, 20e6)):
        with pytest.raises(InstrumentRefused, match=r"switched off and on.*nothing was sent"):
            forbidden()
    assert all("?" in one.text for one in rack.received[count:])
    rf.set_output(False)
    assert rack.received[-1].text == "OUTP OFF;:SYST:ERR?"
    assert rf.read_status().power_on
    rf.set_level_v(0.1)
    assert rf.read_level_v() == 0.1
    assert not rf.read_status().power_on


def test_errors_from_elsewhere_are_not_blamed_on_the_next_command_after_reopening(rack: Rack, rf: ScpiRfSource) -> None:
    rack.inject("rf", Fault(kind=FaultKind.LOST_CONNECTION, times=1))
    with suppress(Unreachable):
        rf.read_level_v()
    with socket.create_connection(("127.0.0.1", rack.ports["rf"])) as other:
        other.sendall(b"NO:SUCH\nSYST:ERR:COUN?\n")
        assert other.recv(100) == b"1\n"
    rf.set_level_v(1.0)
    assert [code for code, _ in rf.read_status().errors] == [-113]
    assert rf.read_status().errors == ()


def test_a_refusal_names_the_instruments_own_words_and_the_old_value_stands(rack: Rack, dc: ScpiDcSupply) -> None:
    dc.set_voltage_v(2, 1.0)
    rack.inject("dc", Fault(kind=FaultKind.REFUSE_COMMANDS, value=-221, times=1))
    with pytest.raises(InstrumentRefused, match=r"SOUR2:VOLT 2\.00.*-221") as caught:
        dc.set_voltage_v(2, 2.0)
    assert [code for code, _ in caught.value.entries] == [-221]
    assert dc.read_voltage_v(2) == 1.0
    assert dc.read_status().errors == ()


def test_a_trip_names_its_channel(rack: Rack, dc: ScpiDcSupply, rf: ScpiRfSource) -> None:
    dc.set_output(3, True)
    rack.inject("dc", Fault(kind=FaultKind.TRIP, channel=3))
    rack.inject("rf", Fault(kind=FaultKind.TRIP))
    assert dc.read_status().tripped == (3,)
    assert rf.read_status().tripped == (0,)
    assert not dc.read_output(3)


def test_out_of_range_says_found_and_bounds(rf: ScpiRfSource, dc: ScpiDcSupply) -> None:
    with pytest.raises(OutOfRange, match=r"level_v = 13 is outside 0 \.\. 12\.5; nothing was sent"):
        rf.set_level_v(13.0)
    with pytest.raises(OutOfRange, match=r"channel 5 is none of \(1, 2, 3, 4\); nothing was sent"):
        dc.set_voltage_v(5, 0.0)


def test_the_limits_themselves_can_be_set(rf: ScpiRfSource) -> None:
    for level_v in (rf.level.low, rf.level.high):
        rf.set_level_v(level_v)
        assert rf.read_level_v() == pytest.approx(level_v)


def test_decibels_reach_the_terminals_as_volts() -> None:
    """10 dBm into 50 ohm is 1 V peak, 2 V into a high impedance; the rack's own conversion is written independently."""
    with Rack(OTHER) as rack:
        rf = ScpiRfSource.open(resource(rack, "rf"), profile=OTHER_PROFILE)
        rf.read_status()
        rf.set_level_v(2.0)
        rf.set_frequency_hz(21e6)
        assert "POW:AMPL 10.00" in [one.text for one in rack.received]
        assert rf.read_level_v() == pytest.approx(2.0)
        assert rf.read_frequency_hz() == 21e6
        assert rf.measure_level_v() is None
        rf.close()


def test_an_output_that_cannot_be_asked_is_believed_on_until_told_off() -> None:
    with Rack(OTHER) as rack:
        rf = ScpiRfSource.open(resource(rack, "rf"), profile=OTHER_PROFILE)
        rf.read_status()
        assert rf.read_output()
        rf.set_output(False)
        assert not rf.read_output()
        rf.close()


def test_codes_of_a_profile_are_ignored_or_mean_power_on_or_a_trip(tmp_path: Path) -> None:
    """The codes of tests/drivers/other.toml: 901 means nothing, 902 power on, 903 a trip; replies dressed as ``E n``."""
    queue: list[str] = []

    def behave(connection: object, message: str) -> None:
        answers = {"FREQUENCY:FIXED?": "FREQ 21000.0", "*idn?": "MAKER,MODEL,1,1"}
        reply = answers.get(message)
        if message == ":SYSTEM:ERROR:NEXT?":
            reply = "E " + (queue.pop(0) if queue else '0,"No error"')
        if reply:
            connection.sendall(reply.encode() + b"\r\n")  # type: ignore[attr-defined]

    profile = tmp_path / "dressed.toml"
    text = Path(OTHER_PROFILE).read_text(encoding="utf-8")
    profile.write_text(text.replace('error_reply = "{value}"', 'error_reply = "E {value}"'), encoding="utf-8")
    with Peer(behave) as peer:
        rf = ScpiRfSource.open(peer.resource, profile=str(profile))
        queue[:] = ['901,"Fan speed changed"']
        rf.set_frequency_hz(21e6)
        queue[:] = ['901,"Fan"', '902,"Hello"', '903,"Overload"', '7,"Else"']
        status = rf.read_status()
        assert status.errors == ((902, "Hello"), (903, "Overload"), (7, "Else"))
        assert status.power_on
        assert status.tripped == (0,)
        queue[:] = ['902,"Hello"']
        with pytest.raises(InstrumentRefused):
            rf.set_frequency_hz(21e6)
        with pytest.raises(InstrumentRefused, match="nothing was sent"):
            rf.set_frequency_hz(21e6)
        assert rf.read_status().power_on
        rf.close()


def test_off_does_not_wait_for_a_hung_exchange(rack: Rack) -> None:
    dc = ScpiDcSupply.open(resource(rack, "dc"), timeout_s=5.0)
    dc.read_status()
    worker = Worker(dc, "dc")
    worker.submit(lambda it: it.set_output(2, True)).result(5)
    rack.inject("dc", Fault(kind=FaultKind.MUTE, times=1))
    hung = worker.submit(lambda it: it.read_voltage_v(2))
    while rack.received[-1].text != "SOUR2:VOLT?":
        time.sleep(0.001)
    start_s = time.monotonic()
    worker.submit(lambda it: it.set_output(2, False), urgent=True).result(5)
    assert time.monotonic() - start_s < 1.0
    with pytest.raises(Unreachable, match="interrupted"):
        hung.result(5)
    assert not worker.submit(lambda it: it.read_output(2)).result(5)
    assert worker.close(5)
