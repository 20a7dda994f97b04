"""Bursts of the SCPI source on the simulated tickle: what is on when, and what is sent in which order."""

from __future__ import annotations

import socket
from collections.abc import Iterator
from functools import partial

import pytest

from tests.drivers.peer import Behaviour, Peer, answering
from tests.drivers.rack import HERE, OTHER, THIRD, resource
from trapd_drivers.errors import InstrumentRefused, OutOfRange, Unreachable
from trapd_drivers.interfaces import RfSource
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_simulated import Fault, FaultKind, Rack
from trapd_simulated.clock import ManualClock

LEVEL_V = 0.5
SET, START, OFF = (
    "ABOR;:BURS:STAT ON;:BURS:DUR 0.050000;:SYST:ERR?",
    "OUTP ON;:INIT;:SYST:ERR?",
    "OUTP OFF;:SYST:ERR?",
)
LIMITS = {
    **{
        f"{name}? {end}": str(value)
        for name in ("FREQ", "VOLT", "BURS:DUR")
        for end, value in (("MIN", 0), ("MAX", 99))
    },
    "*ESR?": "0",
    "SYST:ERR?": '0,"No error"',
}


@pytest.fixture
def clock() -> ManualClock:
    return ManualClock()


@pytest.fixture
def rack(clock: ManualClock) -> Iterator[Rack]:
    with Rack(clock=clock) as rack:
        yield rack


@pytest.fixture
def tickle(rack: Rack) -> Iterator[ScpiRfSource]:
    source = opened(rack)
    source.set_frequency_hz(1.2e6)
    source.set_level_v(LEVEL_V)
    yield source
    source.close()


def opened(rack: Rack) -> ScpiRfSource:
    source = ScpiRfSource.open(resource(rack, "tickle"), timeout_s=0.3)
    source.read_status()
    return source


def emits(source: RfSource) -> bool:
    """By what is measured at the terminals."""
    found_v = source.measure_level_v()
    assert found_v is not None
    assert found_v == pytest.approx(LEVEL_V, rel=0.02) or found_v < 1e-3
    return found_v > 1e-3


def test_a_burst_ends_by_itself_in_its_time(tickle: ScpiRfSource, clock: ManualClock) -> None:
    assert not tickle.read_burst()
    tickle.start_burst(0.05)
    for advance_s, on in ((0.0, True), (0.049, True), (0.002, False), (100.0, False)):
        clock.advance(advance_s)
        assert (tickle.read_burst(), emits(tickle)) == (on, on)


def test_a_burst_ends_although_its_driver_is_gone(rack: Rack, tickle: ScpiRfSource, clock: ManualClock) -> None:
    tickle.start_burst(0.05)
    tickle.close()
    clock.advance(0.06)
    other = opened(rack)
    assert not emits(other)
    assert not other.read_burst()
    other.close()


def test_off_ends_a_burst_at_once_and_on_is_without_end(tickle: ScpiRfSource, clock: ManualClock) -> None:
    tickle.start_burst(10.0)
    tickle.set_output(False)
    assert not tickle.read_burst()
    assert not emits(tickle)
    tickle.set_output(True)
    clock.advance(1000.0)
    assert emits(tickle)
    assert not tickle.read_burst()


@pytest.mark.parametrize(("first_s", "second_s"), [(10.0, 0.1), (0.1, 10.0)])
def test_a_burst_in_progress_is_replaced(
    tickle: ScpiRfSource, clock: ManualClock, first_s: float, second_s: float
) -> None:
    tickle.start_burst(first_s)
    clock.advance(0.05)
    tickle.start_burst(second_s)
    clock.advance(second_s - 0.01)
    assert emits(tickle)
    clock.advance(0.02)
    assert not emits(tickle)


def test_a_burst_after_on_is_no_longer_without_end(tickle: ScpiRfSource, clock: ManualClock) -> None:
    tickle.set_output(True)
    clock.advance(1.0)
    tickle.start_burst(0.05)
    assert emits(tickle)
    clock.advance(0.06)
    assert not emits(tickle)


def test_mode_and_duration_are_checked_before_anything_is_switched_on(rack: Rack, tickle: ScpiRfSource) -> None:
    count = len(rack.received)
    tickle.start_burst(0.05)
    assert [one.text for one in rack.received[count:]] == [SET, START]


@pytest.mark.parametrize("duration_s", [1000.1, 1e-6, 0.0, -1.0, float("nan"), float("inf")])
def test_a_duration_outside_sends_nothing(rack: Rack, tickle: ScpiRfSource, duration_s: float) -> None:
    count = len(rack.received)
    with pytest.raises(OutOfRange, match=r"duration_s = .* is outside 1e-05 \.\. 1000; nothing was sent"):
        tickle.start_burst(duration_s)
    assert len(rack.received) == count


@pytest.mark.parametrize("refused", [SET, START])
def test_what_was_refused_in_part_is_switched_off_and_never_on(refused: str) -> None:
    """A peer that takes all but one message; -221 is SCPI-1999's settings conflict."""
    with Peer(_refusing(refused)) as peer:
        source = ScpiRfSource.open(peer.resource)
        count = len(peer.received)
        with pytest.raises(InstrumentRefused, match="-221 Settings conflict"):
            source.start_burst(0.05)
        assert [one for one in peer.received[count:] if ";" in one] == [*[SET, START][: 1 + (refused == START)], OFF]
        source.close()


def _refusing(refused: str) -> Behaviour:
    def behave(connection: socket.socket, message: str) -> None:
        error = '-221,"Settings conflict"' if message == refused else '0,"No error"'
        answering({**LIMITS, message: error} if ";" in message else LIMITS)(connection, message)

    return behave


def test_a_connection_lost_after_the_first_message_switches_nothing_on(rack: Rack, tickle: ScpiRfSource) -> None:
    rack.inject("tickle", Fault(kind=FaultKind.LOST_CONNECTION, times=1))
    with pytest.raises(Unreachable):
        tickle.start_burst(0.05)
    assert not any("OUTP ON" in one.text for one in rack.received)
    assert not emits(tickle)


def test_after_an_unnoticed_power_cycle_no_burst_is_started(rack: Rack, tickle: ScpiRfSource) -> None:
    rack.power_cycle("tickle")
    count = len(rack.received)
    with pytest.raises(InstrumentRefused, match=r"switched off and on.*nothing was sent"):
        tickle.start_burst(0.05)
    assert all("?" in one.text and ";" not in one.text for one in rack.received[count:])


def test_a_source_without_bursts_says_so_and_sends_nothing() -> None:
    with Rack(THIRD) as rack:
        source = ScpiRfSource.open(resource(rack, "rf"), profile=str(HERE / "third.toml"))
        count = len(rack.received)
        assert source.burst is None
        assert not source.read_burst()
        with pytest.raises(InstrumentRefused, match="cannot emit a burst that ends by itself; nothing was sent"):
            source.start_burst(0.05)
        source.set_output(False)
        assert [one.text for one in rack.received[count:]] == [OFF]
        source.close()


def test_an_output_that_cannot_be_asked_is_believed_on_after_a_burst() -> None:
    with Rack(OTHER) as rack:
        source = ScpiRfSource.open(resource(rack, "rf"), profile=str(HERE / "other.toml"))
        source.read_status()
        for call, on in ((partial(source.set_output, False), False), (partial(source.start_burst, 0.05), True)):
            call()
            assert source.read_output() == on
        assert "ABORT;:BURST:STATE 1;DURATION 50.0 MS" in [one.text for one in rack.received]
        source.close()
