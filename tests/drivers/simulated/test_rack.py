"""What the rack lets a test do behind the wire, and what every wire does when nothing is wrong."""

from __future__ import annotations

import threading
import time

import pytest

from tests.drivers.simulated.client import Client, closed
from trapd_simulated import Fault, FaultKind, ManualClock, Rack, RackUseError, Received


def test_a_hand_at_the_front_panel_is_not_received_and_sets_user_request(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        client.ask("*CLS;*IDN?")
        rack.inject("rf", "ignore_commands")
        rack.front_panel("rf", "VOLT 3")
        assert float(client.ask("VOLT?")) == 3.0
        assert client.ask("*ESR?") == "64"  # IEEE 488.2 11.5.1.1.3, bit 6 [mem]
        assert [one.text for one in rack.received] == ["*CLS;*IDN?", "VOLT?", "*ESR?"]
        with pytest.raises(RackUseError, match="-222"):
            rack.front_panel("rf", "VOLT 99")
        assert client.ask("SYST:ERR?") == '0,"No error"'


def test_a_power_cycle_forgets_settings_closes_connections_and_reports_power_on() -> None:
    with Rack(clock=ManualClock()) as rack, Client(rack.ports["rf"]) as client:
        assert client.ask("*CLS;:FREQ 21E6;VOLT 5;:OUTP ON;*ESR?") == "0"
        rack.power_off("rf")
        assert closed(client)
        assert not rack.electrodes().rf_outputs["rf"]
        with pytest.raises(ConnectionRefusedError):
            Client(rack.ports["rf"])
        with pytest.raises(RackUseError, match="switched off"):
            rack.front_panel("rf", "VOLT 1")
        rack.power_on("rf")
        with Client(rack.ports["rf"]) as again:
            assert again.ask("OUTP?;*ESR?") == "0;128"
            assert float(again.ask("VOLT?")) == 0.0


def test_a_power_cycle_lasts_rack_time() -> None:
    with Rack(speed=1000.0) as rack:
        begun = time.monotonic()
        rack.power_cycle("dc", 60.0)
        assert 0.06 <= time.monotonic() - begun < 5.0
        with Client(rack.ports["dc"]) as client:
            assert client.ask("*ESR?") == "128"


def test_wrong_names_are_said_and_change_nothing(rack: Rack) -> None:
    with pytest.raises(RackUseError, match="no instrument 'laser'"):
        rack.inject("laser", "hang")
    with pytest.raises(RackUseError, match="no fault 'explode'"):
        rack.inject("rf", "explode")
    with pytest.raises(RackUseError, match="times = 0"):
        rack.inject("rf", Fault(kind=FaultKind.HANG, times=0))
    with pytest.raises(RackUseError, match="channels"):
        rack.inject("dc", Fault(kind=FaultKind.TRIP, channel=9))


def test_a_message_is_seen_before_it_is_executed() -> None:
    levels: list[float] = []

    def look(record: Received) -> None:
        levels.append(rack.electrodes(rack.clock.now_s() + 1.0).levels_v["rf"])

    with Rack(on_receive=look) as rack, Client(rack.ports["rf"]) as client:
        client.ask("VOLT 5;:OUTP ON;*OPC?")
        client.ask("*OPC?")
        first, second = rack.received
    assert levels == [0.0, pytest.approx(5.0)]
    assert (first.index, first.instrument, first.text) == (0, "rf", "VOLT 5;:OUTP ON;*OPC?")
    assert first.monotonic_ns < second.monotonic_ns
    assert abs(first.wall_us - time.time() * 1e6) < 60e6


def test_lines_may_end_in_crlf_and_come_in_pieces(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        for piece in (b"FREQ 2", b"1E6\r", b"\nFRE", b"Q?\n"):
            client.sock.sendall(piece)
        assert float(client.hear()) == 21e6
        assert [one.text for one in rack.received] == ["FREQ 21E6", "FREQ?"]


def test_a_line_longer_than_the_buffer_is_lost_with_an_error(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        client.tell("VOLT " + "1" * 200_000)
        assert client.ask("SYST:ERR?").startswith("-363,")


def test_speed_lets_rack_time_run_faster_than_the_hosts() -> None:
    with Rack(speed=1000.0) as rack, Client(rack.ports["dc"]) as client:
        client.ask("VOLT 1000;:OUTP ON;*OPC?")
        deadline = time.monotonic() + 5.0
        begun = time.monotonic()
        while rack.electrodes().voltages_v["dc"][1] < 999.9 and time.monotonic() < deadline:
            client.ask("*OPC?")
        # The slew of 2000 V/s takes 0.5 s of rack time: half a millisecond here.
        assert time.monotonic() - begun < 0.4


def test_five_clients_at_once_each_get_their_own_answers(rack: Rack) -> None:
    wrong: list[tuple[str, int, float]] = []

    def converse(instrument: str, channel: int) -> None:
        header = f"SOUR{channel}:VOLT"
        with Client(rack.ports[instrument]) as client:
            for count in range(200):
                volts = count % 100 / 100
                told = float(client.ask(f"{header} {volts};:{header}?"))
                if told != pytest.approx(volts):
                    wrong.append((instrument, channel, told))

    talks = [("rf", 1), ("tickle", 1), ("dc", 1), ("dc", 2), ("dc", 3)]
    threads = [threading.Thread(target=converse, args=talk) for talk in talks]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []
    assert [one.index for one in rack.received] == list(range(1000))
