"""The link against what the simulated rack cannot do to it (test_scpi_drivers has the rest), timeout 0.3 s."""

from __future__ import annotations

import itertools
import socket
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager

import pytest

from tests.drivers.peer import IDENTITY, Behaviour, Peer, answering
from trapd_drivers.errors import DriverError, InstrumentRefused, Malformed, ProfileError, Unreachable
from trapd_drivers.link import Link, Wire

TIMEOUT_S = 0.3
SLACK_S = 0.6  # a loaded machine; the bound itself is twice the timeout


@contextmanager
def within(limit_s: float) -> Iterator[None]:
    start_s = time.monotonic()
    yield
    assert time.monotonic() - start_s < limit_s


def link_to(peer: Peer, wire: Wire | None = None, timeout_s: float = TIMEOUT_S) -> Link:
    return Link(peer.resource, timeout_s=timeout_s, wire=wire)


def ask(link: Link, query: str) -> str:
    with link.call():
        return link.ask(query)


def tell(link: Link, *messages: str) -> None:
    with link.call():
        for message in messages:
            link.tell(message)


def hang(connection: socket.socket, message: str) -> None:
    pass


def trickle(connection: socket.socket, message: str) -> None:
    stop = threading.Event()
    while not stop.wait(0.02):  # each byte comes well within any timeout that is begun anew by each
        connection.sendall(b"7")


def two_lines(connection: socket.socket, message: str) -> None:
    connection.sendall(b"1.0\n2.0\n")


@pytest.mark.parametrize(
    ("misbehave", "error"),
    [(trickle, Unreachable), (two_lines, Malformed)],
    ids=lambda one: one.__name__,
)
def test_a_misbehaving_peer_costs_one_bounded_error_and_the_next_call_works(
    misbehave: Behaviour, error: type[DriverError]
) -> None:
    with Peer(answering({"VOLT?": "5.0"})) as peer:
        link = link_to(peer)
        assert ask(link, "VOLT?") == "5.0"
        good, peer.behave = peer.behave, misbehave
        with within(2 * TIMEOUT_S + SLACK_S), pytest.raises(error, match=r"127\.0\.0\.1.*VOLT\?"):
            ask(link, "VOLT?")
        peer.behave = good
        assert ask(link, "VOLT?") == "5.0"
        assert peer.connections == 2


def test_bytes_that_came_while_idle_are_not_taken_for_the_next_reply() -> None:
    connections: list[socket.socket] = []

    def remember(connection: socket.socket, message: str) -> None:
        connections.append(connection)
        answering({"FREQ?": "222"})(connection, message)

    with Peer(remember) as peer:
        link = link_to(peer)
        ask(link, "FREQ?")
        connections[-1].sendall(b"111\n")
        assert ask(link, "FREQ?") == "222"
        assert peer.connections == 2


def test_a_refused_port_is_unreachable_at_once() -> None:
    peer = Peer(hang)
    peer.stop()
    with within(TIMEOUT_S + SLACK_S), pytest.raises(Unreachable, match="refused"):
        ask(link_to(peer), "VOLT?")


@pytest.fixture
def crowded() -> Iterator[str]:
    """A resource whose queue of connections is full, so that the handshake of one more is not answered."""
    with socket.socket() as listener, ExitStack() as crowd:
        listener.bind(("127.0.0.1", 0))
        listener.listen(0)
        port = listener.getsockname()[1]
        for _ in range(4):
            one = crowd.enter_context(socket.socket())
            one.setblocking(False)
            one.connect_ex(("127.0.0.1", port))
        yield f"TCPIP::127.0.0.1::{port}::SOCKET"


def test_a_port_that_never_answers_the_handshake_is_unreachable_in_time(crowded: str) -> None:
    with within(2 * TIMEOUT_S + SLACK_S), pytest.raises(Unreachable, match="not done within"):
        ask(Link(crowded, timeout_s=TIMEOUT_S), "VOLT?")


def test_an_interrupt_ends_even_the_wait_for_a_connection(crowded: str) -> None:
    link = Link(crowded, timeout_s=10.0)
    threading.Timer(0.05, link.interrupt).start()
    with within(0.15 + SLACK_S), pytest.raises(Unreachable, match="interrupted"):
        ask(link, "VOLT?")


def test_a_peer_that_stops_reading_cannot_block_a_write() -> None:
    def stall(connection: socket.socket, message: str) -> None:
        threading.Event().wait(5)

    with Peer(answering({})) as peer:
        link = link_to(peer)
        with link.call():
            pass
        peer.behave = stall
        with within(2 * TIMEOUT_S + SLACK_S), pytest.raises(Unreachable, match="not done within"):
            tell(link, "STALL", "x" * 16_000_000)


def test_a_connection_closed_while_idle_is_opened_again_without_an_error() -> None:
    with Peer(answering({"VOLT?": "5.0"})) as peer:
        link = link_to(peer)
        ask(link, "VOLT?")
        peer.hang_up()
        assert ask(link, "VOLT?") == "5.0"
        assert peer.connections == 2


def test_a_greeting_is_passed_over_however_late_it_comes() -> None:
    with Peer(answering({"VOLT?": "5.0"}), greeting=b"Welcome\nto the supply\n") as peer:
        link = link_to(peer)
        assert [ask(link, "VOLT?") for _ in range(3)] == ["5.0"] * 3
        assert link.identity == IDENTITY


def test_interrupt_ends_a_hung_call_at_once_and_is_harmless_when_idle() -> None:
    with Peer(answering({"VOLT?": "5.0"})) as peer:
        link = link_to(peer, timeout_s=10.0)
        link.interrupt()
        assert ask(link, "VOLT?") == "5.0"
        link.interrupt()
        assert ask(link, "VOLT?") == "5.0"
        assert peer.connections == 1
        peer.behave = hang
        threading.Timer(0.05, link.interrupt).start()
        with within(0.15 + SLACK_S), pytest.raises(Unreachable, match="interrupted"):
            ask(link, "VOLT?")


def test_spacing_holds_back_the_next_message_and_an_interrupt_ends_the_wait() -> None:
    at_s: list[float] = []

    def note(connection: socket.socket, message: str) -> None:
        at_s.append(time.monotonic())
        answering({"VOLT?": "5.0"})(connection, message)

    with Peer(note) as peer:
        link = link_to(peer, Wire(spacing_s=0.05))
        ask(link, "VOLT?")
        ask(link, "VOLT?")
        assert all(later - earlier > 0.045 for earlier, later in itertools.pairwise(at_s))
        slow = link_to(peer, Wire(spacing_s=60.0), timeout_s=60.0)
        threading.Timer(0.05, slow.interrupt).start()
        with within(0.15 + SLACK_S), pytest.raises(Unreachable, match="interrupted"):
            ask(slow, "VOLT?")


def test_a_refusal_keeps_the_session_and_anything_else_drops_it() -> None:
    def refuse(link: Link) -> None:
        raise InstrumentRefused("no")

    def stumble(link: Link) -> None:
        raise ZeroDivisionError

    def fail_with(link: Link, action: Callable[[Link], None], error: type[Exception]) -> None:
        with pytest.raises(error), link.call():
            action(link)

    with Peer(answering({"VOLT?": "5.0"})) as peer:
        link = link_to(peer)
        fail_with(link, refuse, InstrumentRefused)
        ask(link, "VOLT?")
        assert peer.connections == 1
        fail_with(link, stumble, ZeroDivisionError)
        ask(link, "VOLT?")
        assert peer.connections == 2


def test_terminators_are_those_of_the_wire() -> None:
    def behave(connection: socket.socket, message: str) -> None:
        connection.sendall((IDENTITY if message == "*IDN?" else "5.0").encode() + b"\r\n")

    with Peer(behave) as peer:
        link = link_to(peer, Wire(write_end="\r\n", read_end="\r\n"))
        assert ask(link, "VOLT?") == "5.0"


def test_small_messages_are_not_held_back_by_the_kernel() -> None:
    """Two writes then a read cost 40 ms each where the second write waits for a delayed acknowledgement (RFC 896)."""
    with Peer(answering({"VOLT?": "5.0"})) as peer:
        link = link_to(peer, timeout_s=5.0)
        ask(link, "VOLT?")
        with within(0.4):
            for _ in range(20):
                with link.call():
                    link.tell("VOLT 5")
                    link.ask("VOLT?")


@pytest.mark.parametrize("resource", ["rf", "ASRL1::INSTR", "TCPIP::127.0.0.1::INSTR", ""])
def test_a_resource_that_is_no_socket_is_a_mistake_said_before_opening(resource: str) -> None:
    with pytest.raises(ProfileError, match="nothing was opened"):
        Link(resource, timeout_s=TIMEOUT_S)
