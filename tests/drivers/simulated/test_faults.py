"""Each fault through a plain socket: what the other end meets, how it is used up, that clearing ends it."""

from __future__ import annotations

import select
import socket
import time

import pytest

from tests.drivers.simulated.client import Client, closed
from trapd_simulated import Fault, FaultKind, Rack, RackSettings, RfSourceSettings


def silent(client: Client, for_s: float = 0.05) -> bool:
    """Nothing arrives. The wait bounds how long a wrong answer has to show itself."""
    return not select.select([client.sock], [], [], for_s)[0]


def test_a_hanging_instrument_takes_messages_and_neither_executes_nor_answers(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", "hang")
        client.tell("VOLT 5")
        client.tell("VOLT?")
        assert silent(client)
        assert [one.text for one in rack.received] == ["VOLT 5", "VOLT?"]
        rack.clear("rf")
        assert float(client.ask("VOLT?")) == 0.0


def test_a_mute_instrument_executes_and_does_not_answer(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.MUTE, times=1))
        client.tell("VOLT 5;*OPC?")
        assert silent(client)
        assert float(client.ask("VOLT?")) == 5.0


def test_a_partial_line_has_no_end(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        whole = client.ask("*IDN?")
        rack.inject("rf", Fault(kind=FaultKind.PARTIAL_LINE, times=1))
        client.tell("*IDN?")
        part = client.sock.recv(4096).decode()
        assert 0 < len(part) < len(whole)
        assert whole.startswith(part)
        assert silent(client)
        assert client.ask("*IDN?") == whole


def test_garbage_is_a_line_of_bytes_that_are_no_text(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.GARBAGE, times=1))
        assert not client.ask("FREQ?").isascii()
        assert float(client.ask("FREQ?")) == 1e6


def test_a_babbling_instrument_never_ends_its_line_until_cleared(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", "babble")
        client.tell("FREQ?")
        heard = b""
        while len(heard) < 1_000_000:
            heard += client.sock.recv(65536)
        assert b"\n" not in heard
        rack.clear("rf")
        client.tell("FREQ?")
        assert client.hear().endswith("1.0000000000E+06")


def test_a_babbling_instrument_does_not_keep_the_rack_from_stopping() -> None:
    with Rack() as rack, Client(rack.ports["rf"]) as client:
        rack.inject("rf", "babble")
        client.tell("FREQ?")
        client.sock.recv(10)
        begun = time.monotonic()
    assert time.monotonic() - begun < 2.0


def test_a_slow_reply_comes_late_and_holds_up_only_its_own_instrument(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as slow, Client(rack.ports["dc"]) as quick:
        rack.inject("rf", Fault(kind=FaultKind.SLOW_REPLY, times=1, delay_s=0.2))
        begun = time.monotonic()
        slow.tell("FREQ?")
        quick.ask("VOLT?")
        assert time.monotonic() - begun < 0.2
        assert float(slow.hear()) == 1e6
        assert time.monotonic() - begun >= 0.2


def test_a_late_reply_answers_the_next_question(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        client.tell("VOLT 5")
        rack.inject("rf", Fault(kind=FaultKind.LATE_REPLY, times=1))
        client.tell("FREQ?")
        assert silent(client)
        assert float(client.ask("VOLT?")) == 1e6
        assert float(client.hear()) == 5.0


def test_a_late_reply_comes_by_itself_after_its_delay(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.LATE_REPLY, times=1, delay_s=0.1))
        client.tell("FREQ?")
        assert silent(client, 0.02)
        assert float(client.hear()) == 1e6


def test_the_connection_is_lost_at_the_next_query_and_a_new_one_works(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.LOST_CONNECTION, times=1))
        client.tell("VOLT 5")
        client.tell("VOLT 6;VOLT?")
        assert closed(client)
    with Client(rack.ports["rf"]) as client:
        assert float(client.ask("VOLT?")) == 5.0


def test_a_refusing_port_is_shut_and_keeps_those_inside(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        client.ask("*IDN?")
        rack.inject("rf", "refuse_connections")
        with pytest.raises(ConnectionRefusedError):
            Client(rack.ports["rf"])
        assert float(client.ask("FREQ?")) == 1e6
        rack.clear("rf", "refuse_connections")
        with Client(rack.ports["rf"]) as again:
            assert float(again.ask("FREQ?")) == 1e6


def test_a_second_client_is_served_unless_it_is_to_be_refused(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as first:
        first.ask("*IDN?")
        with Client(rack.ports["rf"]) as second:
            assert second.ask("*IDN?") == first.ask("*IDN?")
        rack.inject("rf", Fault(kind=FaultKind.REFUSE_SECOND_CLIENT, times=1))
        with Client(rack.ports["rf"]) as second:
            assert closed(second)
        assert float(first.ask("FREQ?")) == 1e6
        with Client(rack.ports["rf"]) as third:
            third.ask("*IDN?")


def test_somebody_else_may_hold_the_instrument(rack: Rack) -> None:
    rack.inject("rf", Fault(kind=FaultKind.SECOND_CLIENT, times=1))
    with Client(rack.ports["rf"]) as client:
        assert closed(client)
    with Client(rack.ports["rf"]) as client:
        client.ask("*IDN?")


def test_settings_may_allow_a_single_client() -> None:
    settings = RackSettings(instruments={"rf": RfSourceSettings(max_clients=1)})
    with Rack(settings) as rack, Client(rack.ports["rf"]) as first:
        first.ask("*IDN?")
        with Client(rack.ports["rf"]) as second:
            assert closed(second)


def test_a_wrong_identity_says_what_it_is_told_to(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.WRONG_IDENTITY, times=2, text="NOBODY,NOTHING,7,0"))
        assert [client.ask("*IDN?") for _ in range(2)] == ["NOBODY,NOTHING,7,0"] * 2
        assert client.ask("*IDN?").startswith("TRAPD SIMULATED RACK,RF SOURCE,")


def test_a_stalled_reader_makes_writing_block_until_cleared(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        client.ask("*IDN?")
        client.sock.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, 4096)
        client.sock.settimeout(0.3)
        rack.inject("rf", "stalled_reader")
        with pytest.raises(TimeoutError):
            client.sock.sendall(b"*WAI\n" * 10_000_000)
        assert len(rack.received) == 1
        rack.clear("rf")
        client.sock.settimeout(5.0)
        client.tell("")
        assert float(client.ask("FREQ?")) == 1e6


def test_network_delay_lets_a_message_arrive_late(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.NETWORK_DELAY, delay_s=0.1))
        sent_ns = time.monotonic_ns()
        client.ask("FREQ?")
        assert rack.received[0].monotonic_ns - sent_ns >= 0.1e9


def test_an_ignored_command_is_accepted_and_not_executed(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.IGNORE_COMMANDS, times=1))
        assert float(client.ask("VOLT 5;VOLT?")) == 0.0
        assert client.ask("SYST:ERR?") == '0,"No error"'
        assert float(client.ask("VOLT 5;VOLT?")) == 5.0


def test_a_refused_command_leaves_an_error_and_the_old_value(rack: Rack) -> None:
    with Client(rack.ports["rf"]) as client:
        rack.inject("rf", Fault(kind=FaultKind.REFUSE_COMMANDS, times=1, value=-221))
        assert float(client.ask("VOLT 5;VOLT?")) == 0.0
        assert client.ask("SYST:ERR?").startswith("-221,")


def test_a_readback_offset_falls_on_its_channel_only(rack: Rack) -> None:
    with Client(rack.ports["dc"]) as client:
        rack.inject("dc", Fault(kind=FaultKind.READBACK_OFFSET, value=0.5, channel=2))
        measured_v = [float(part) for part in client.ask("MEAS:VOLT? (@1:3)").split(",")]
        assert measured_v == pytest.approx([0.0, 0.5, 0.0], abs=0.03)
        rack.clear("dc")
        assert float(client.ask("MEAS:VOLT? (@2)")) == pytest.approx(0.0, abs=0.03)


@pytest.mark.parametrize(("instrument", "channel", "query"), [("rf", 0, ""), ("dc", 3, "SOUR3:")])
def test_a_trip_on_demand_latches_the_output_off(rack: Rack, instrument: str, channel: int, query: str) -> None:
    output = "OUTP" + (str(channel) if channel else "")
    with Client(rack.ports[instrument]) as client:
        client.tell(f"{output} ON")
        rack.inject(instrument, Fault(kind=FaultKind.TRIP, channel=channel))
        assert client.ask(f"{query}VOLT:PROT:TRIP?;:{output}?") == "1;0"
        client.tell(f"{output} ON")
        assert client.ask(f"{output}?") == "0"
        assert client.ask(f"{query}VOLT:PROT:CLE;:{output} ON;:{output}?") == "1"
