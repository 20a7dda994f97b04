"""The SCPI photon counter on the simulated one: no count is told that is not the one asked for."""

from __future__ import annotations

import socket
from collections.abc import Iterator
from contextlib import suppress

import pytest

from tests.drivers.peer import Peer, answering
from tests.drivers.rack import resource
from trapd_drivers.errors import DriverError, InstrumentRefused, Malformed, OutOfRange, Unreachable
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_simulated import Fault, FaultKind, Rack
from trapd_simulated.clock import ManualClock


@pytest.fixture
def clock() -> ManualClock:
    return ManualClock()


@pytest.fixture
def rack(clock: ManualClock) -> Iterator[Rack]:
    with Rack(clock=clock) as rack:
        yield rack


@pytest.fixture
def counter(rack: Rack) -> Iterator[ScpiPhotonCounter]:
    found = ScpiPhotonCounter.open(resource(rack, "counter"), timeout_s=0.3)
    found.read_status()
    yield found
    found.close()


def test_none_while_counting_and_then_the_same_count_for_good(counter: ScpiPhotonCounter, clock: ManualClock) -> None:
    counter.start_count(0.1)
    clock.advance(0.099)
    assert counter.read_count() is None
    clock.advance(0.002)
    found = counter.read_count()
    assert type(found) is int
    assert found >= 0
    clock.advance(50.0)
    assert [counter.read_count() for _ in range(3)] == [found] * 3


def test_a_count_in_progress_is_ended_before_the_next_begins(
    rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock
) -> None:
    counter.start_count(50.0)
    clock.advance(25.0)
    count = len(rack.received)
    counter.start_count(0.01)
    assert [one.text for one in rack.received[count:]] == [
        "ABOR;:TOT:GATE:TIME 0.010000;:SYST:ERR?",
        "INIT;:SYST:ERR?",
    ]
    assert counter.read_count() is None
    clock.advance(0.011)
    assert counter.read_count() is not None


def test_before_the_first_start_there_is_no_count_even_where_the_instrument_has_one(
    rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock
) -> None:
    rack.front_panel("counter", "INIT")
    clock.advance(1.0)
    assert int(rack.front_panel("counter", "FETC?") or "") >= 0
    count = len(rack.received)
    with pytest.raises(InstrumentRefused, match="no count has been started; nothing was sent"):
        counter.read_count()
    assert len(rack.received) == count


def test_a_power_cycle_loses_the_count_whoever_notices_it_first(
    rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock
) -> None:
    for notice in (counter.read_count, counter.read_status):
        counter.start_count(0.1)
        clock.advance(0.2)
        rack.power_cycle("counter")
        with suppress(InstrumentRefused):
            notice()
        for _ in range(2):
            with pytest.raises(InstrumentRefused, match="switched off and on, and has lost the count"):
                counter.read_count()
        assert counter.read_status().power_on or notice == counter.read_status
        counter.start_count(0.1)
        clock.advance(0.2)
        assert counter.read_count() is not None


def test_a_power_on_from_before_the_opening_takes_no_count_away(rack: Rack, clock: ManualClock) -> None:
    counter = ScpiPhotonCounter.open(resource(rack, "counter"))
    counter.start_count(0.1)
    assert counter.read_status().power_on
    clock.advance(0.2)
    assert counter.read_count() is not None
    counter.close()


@pytest.mark.parametrize(
    ("fault", "error"),
    [
        (Fault(kind=FaultKind.LOST_CONNECTION, times=1), Unreachable),
        (Fault(kind=FaultKind.LATE_REPLY, delay_s=0.5, times=1), Unreachable),
        (Fault(kind=FaultKind.GARBAGE, times=1), Malformed),
        (Fault(kind=FaultKind.MUTE, times=1), Unreachable),
    ],
    ids=lambda one: getattr(one, "kind", ""),
)
def test_a_count_outlives_a_fault_of_the_wire(
    rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock, fault: Fault, error: type[DriverError]
) -> None:
    counter.start_count(0.1)
    clock.advance(0.2)
    found = counter.read_count()
    rack.inject("counter", fault)
    with pytest.raises(error):
        counter.read_count()
    rack.clear("counter")
    assert [counter.read_count() for _ in range(3)] == [found] * 3


def test_a_start_whose_answer_was_lost_has_no_count(rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock) -> None:
    counter.start_count(0.1)
    rack.inject("counter", Fault(kind=FaultKind.LOST_CONNECTION, times=1))
    with pytest.raises(Unreachable):
        counter.start_count(0.2)
    clock.advance(1.0)
    with pytest.raises(InstrumentRefused, match="no count has been started"):
        counter.read_count()


def test_a_gate_outside_sends_nothing_and_leaves_the_count_in_progress(
    rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock
) -> None:
    counter.start_count(0.1)
    count = len(rack.received)
    for gate_s in (0.0, 5e-5, 100.1, float("nan")):
        with pytest.raises(OutOfRange, match=r"gate_s = .* is outside 0\.0001 \.\. 100; nothing was sent"):
            counter.start_count(gate_s)
    assert len(rack.received) == count
    clock.advance(0.2)
    assert counter.read_count() is not None


def test_a_count_below_zero_is_malformed(rack: Rack, counter: ScpiPhotonCounter, clock: ManualClock) -> None:
    counter.start_count(0.1)
    clock.advance(0.2)
    rack.inject("counter", Fault(kind=FaultKind.READBACK_OFFSET, value=-1e9))
    with pytest.raises(Malformed, match=r"FETC\?.*is not a whole number from 0"):
        counter.read_count()


def test_a_refused_gate_starts_nothing() -> None:
    replies = {
        "TOT:GATE:TIME? MIN": "0.001",
        "TOT:GATE:TIME? MAX": "10",
        "*ESR?": "0",
        "SYST:ERR?": '0,"No error"',
        "ABOR;:TOT:GATE:TIME 1.000000;:SYST:ERR?": '-222,"Data out of range"',
    }

    def behave(connection: socket.socket, message: str) -> None:
        answering(replies)(connection, message)

    with Peer(behave) as peer:
        counter = ScpiPhotonCounter.open(peer.resource, timeout_s=0.3)
        with pytest.raises(InstrumentRefused, match="-222 Data out of range"):
            counter.start_count(1.0)
        assert not any("INIT" in one for one in peer.received)
        with pytest.raises(InstrumentRefused, match="no count has been started"):
            counter.read_count()
        counter.close()
