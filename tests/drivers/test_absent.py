"""A stand-in for an instrument that does not answer yet; the rest of its contract is in test_conformance."""

from __future__ import annotations

import math
import socket
from collections.abc import Iterator

import pytest

from tests.drivers.rack import resource
from trapd_drivers.absent import AbsentDcSupply, AbsentGauge, AbsentPhotonCounter, AbsentRfSource, open_or_absent
from trapd_drivers.errors import OutOfRange, ProfileError, Unreachable
from trapd_drivers.interfaces import DcSupply, Instrument, RfSource
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_simulated import Fault, FaultKind, Rack


@pytest.fixture
def rack() -> Iterator[Rack]:
    with Rack() as rack:
        rack.power_off("rf")
        rack.power_off("dc")
        rack.power_off("counter")
        rack.power_off("vacuum")
        yield rack


def opened(rack: Rack, instrument: str) -> Instrument:
    driver = {
        "rf": "scpi-rf-source",
        "dc": "scpi-dc-supply",
        "counter": "scpi-photon-counter",
        "vacuum": "scpi-gauge",
    }[instrument]
    return open_or_absent(driver, resource(rack, instrument), timeout_s=0.3)


def test_where_somebody_answers_it_is_the_instrument_itself(rack: Rack) -> None:
    rack.power_on("rf")
    assert isinstance(opened(rack, "rf"), ScpiRfSource)


def test_absent_it_is_unreachable_and_there_it_does_what_it_is_told(rack: Rack) -> None:
    rf, dc = opened(rack, "rf"), opened(rack, "dc")
    assert isinstance(rf, RfSource)
    assert isinstance(dc, DcSupply)
    for call in (rf.read_identity, rf.read_level_v, dc.read_status, lambda: dc.set_output(1, False)):
        with pytest.raises(Unreachable):
            call()
    rack.power_on("rf")
    rack.power_on("dc")
    assert rf.read_status().power_on
    rf.set_level_v(1.5)
    rf.set_output(True)
    dc.set_voltage_v(3, -2.0)
    assert (rf.read_level_v(), rf.read_output(), dc.read_voltage_v(3)) == (1.5, True, -2.0)
    rf.close()
    dc.close()


def test_the_scales_are_the_profiles_at_first_and_the_instruments_then(rack: Rack) -> None:
    rf, dc = opened(rack, "rf"), opened(rack, "dc")
    assert isinstance(rf, AbsentRfSource)
    assert isinstance(dc, AbsentDcSupply)
    assert dc.channels == (1, 2, 3, 4)
    assert (rf.level.high, rf.level.resolution, dc.voltage(1).high) == (math.inf, 1e-4, math.inf)  # plain asks
    with pytest.raises(OutOfRange, match="channel 5"):
        dc.voltage(5)
    rack.power_on("rf")
    rack.power_on("dc")
    rf.read_identity()
    dc.read_identity()
    assert (rf.level.high, rf.frequency.high, dc.voltage(1).high) == (12.5, 60e6, 1000.0)


def test_bursts_counts_and_readings_go_to_the_instrument_once_it_is_there(rack: Rack) -> None:
    rf, counter, vacuum = opened(rack, "rf"), opened(rack, "counter"), opened(rack, "vacuum")
    assert isinstance(rf, AbsentRfSource)
    assert isinstance(counter, AbsentPhotonCounter)
    assert isinstance(vacuum, AbsentGauge)
    assert rf.burst is not None
    assert (rf.burst.high, counter.gate.high, counter.gate.resolution) == (math.inf, math.inf, 1e-6)
    for call in (
        lambda: rf.start_burst(1.0),
        rf.read_burst,
        counter.read_count,
        vacuum.read_value,
        lambda: vacuum.unit,
    ):
        with pytest.raises(Unreachable):
            call()
    for name in ("rf", "counter", "vacuum"):
        rack.power_on(name)
    rf.start_burst(1.0)
    counter.start_count(0.05)
    assert rf.read_burst()
    assert counter.read_count() is None
    assert (vacuum.unit, vacuum.read_value()) == ("Pa", pytest.approx(2e-8, rel=0.15))
    assert (rf.burst.high, counter.gate.high) == (1000.0, 100.0)


def test_garbage_at_the_start_is_no_reason_to_give_the_instrument_up(rack: Rack) -> None:
    rack.power_on("rf")
    rack.inject("rf", Fault(kind=FaultKind.GARBAGE, times=1))
    rf = opened(rack, "rf")
    assert isinstance(rf, AbsentRfSource)
    assert rf.read_frequency_hz() == 1e6


def test_interrupt_and_close_are_harmless_while_absent_and_reach_the_instrument_then(rack: Rack) -> None:
    rf = opened(rack, "rf")
    rf.interrupt()
    rf.close()
    rack.power_on("rf")
    rf.interrupt()
    assert rf.read_identity().simulated
    rf.close()
    rf.close()
    assert rf.read_identity().simulated  # as any instrument, it opens again


def test_a_mistake_is_said_at_once() -> None:
    with socket.create_server(("127.0.0.1", 0)) as silent:
        where = f"TCPIP::127.0.0.1::{silent.getsockname()[1]}::SOCKET"
        for driver, profile in (("no-such-driver", "plain"), ("scpi-rf-source", "plane")):
            with pytest.raises(ProfileError):
                open_or_absent(driver, where, profile=profile)
