"""The hardened link: one VISA session to one instrument, and the only importer of pyvisa.

pyvisa names and opens the session; the bytes go through its socket directly, because pyvisa-py 0.8.1 (measured) never
sets TCP_NODELAY (44 ms for a write and a query), opens a refused port "successfully", spins on a peer that closed,
blocks in a write to a peer that stalls, and lets a babbling peer defeat its timeout. Here instead:

- everything inside one `Link.call` ends within the timeout: the deadline thread shuts the socket of an overdue one;
- a reply is one line of at most so many bytes, and a second line is an error;
- any failure drops the session, so a late reply has nothing left to arrive at; the next call opens a new one, throws
  away what was already waiting in it, and goes on only when ``*IDN?`` answers as it did at first;
- `Link.interrupt` shuts the socket from any thread.
"""

from __future__ import annotations

import logging
import os
import socket
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from functools import cache, partial
from typing import Any

from trapd_drivers.deadline import DEADLINES
from trapd_drivers.errors import InstrumentRefused, Malformed, ProfileError, Unreachable, WrongIdentity

_log = logging.getLogger(__name__)

# pyvisa-py looks at its connecting socket for no less than 0.1 s and hides it meanwhile; connecting in slices of that
# length is what lets `interrupt` and the deadline in between.
_CONNECT_SLICE_MS = 1
_VISA_TIMEOUT = -1073807339  # VI_ERROR_TMO
_RECEIVE_BYTES = 4096
_LOOK = int(socket.MSG_PEEK | socket.MSG_DONTWAIT)  # as flags they cost a microsecond each time


@dataclass(frozen=True, kw_only=True)
class Wire:
    """How messages travel: what ends them, how long a reply may be, and the least pause.

    ``spacing_s`` counts from the end of one message, or of the reply to it, to the next message.
    """

    write_end: str = "\n"
    read_end: str = "\n"
    longest_reply_bytes: int = 4096
    spacing_s: float = 0.0


class Link:
    """One instrument's session. Its methods are called from one thread, `interrupt` from any.

    ``on_open`` runs inside each opening, after the identity was checked, with a timeout of its own for both.
    """

    def __init__(
        self,
        resource: str,
        *,
        timeout_s: float,
        wire: Wire | None = None,
        identity_query: str = "*IDN?",
        on_open: Callable[[], None] | None = None,
    ) -> None:
        _require_socket_resource(resource)
        self.resource = resource
        self.timeout_s = timeout_s
        self.identity: str | None = None
        self._wire = wire or Wire()
        self._end = self._wire.read_end.encode("ascii")
        self._identity_query = identity_query
        self._on_open = on_open
        self._lock = threading.Lock()  # guards the five below against the deadline thread and `interrupt`
        self._socket: socket.socket | None = None
        self._visa_session: Any = None
        self._call = 0
        self._busy = False
        self._cut_by: str | None = None
        self._cut = threading.Event()
        self._received = bytearray()
        self._spoke_s = 0.0

    @contextmanager
    def call(self) -> Iterator[None]:
        """One call of the driver: a session is open and in step, and all of it ends within the timeout.

        Opening, when it is needed, has the timeout once more. Whatever is raised inside drops the session, except
        `InstrumentRefused`, after which both sides still agree on what was said.
        """
        with self._lock:
            self._busy = True
            self._cut_by = None
            self._cut.clear()
        try:
            if self._socket is None or not self._is_silent():
                self._open()
            with self._limited():
                yield
        except InstrumentRefused:
            raise
        except BaseException:
            self._drop()
            raise
        finally:
            with self._lock:
                self._busy = False

    def ask(self, query: str, *, among: Callable[[bytes], bool] | None = None) -> str:
        """Send a query and return its reply without terminator and surrounding blanks. Only inside `call`.

        With ``among``, lines that it rejects are passed over.
        """
        self.tell(query)
        reply = self._receive(query)
        while among is not None and not among(reply):
            reply = self._receive(query)
        self._spoke_s = time.monotonic()
        if self._received:
            raise Malformed(f"{self.resource}: {query!r} was answered by more than one line")
        try:
            return reply.decode("ascii").strip()
        except UnicodeDecodeError as error:
            raise Malformed(f"{self.resource}: {query!r} was answered by {reply[:40]!r}, which is not ASCII") from error

    def tell(self, message: str) -> None:
        """Send a message that has no reply. Only inside `call`."""
        self._wait_spacing()
        try:
            self._connected().sendall((message + self._wire.write_end).encode("ascii"))
        except OSError as error:
            raise self._unreachable(f"{message!r} could not be sent", error) from error
        self._spoke_s = time.monotonic()

    def read_identity(self, *, after_greeting: bool = False) -> str:
        """What the identity query answers: the same as at first, or `WrongIdentity`. Only inside `call`.

        ``after_greeting``: pass over lines that are no identity.
        """
        found = self.ask(self._identity_query, among=_is_identity if after_greeting else None)
        if self.identity is None:
            self.identity = found
        elif found != self.identity:
            raise WrongIdentity(
                f"{self.resource}: answers as {found!r}, before as {self.identity!r}; nothing was commanded"
            )
        return found

    def interrupt(self) -> None:
        """Make the call in progress raise `Unreachable` at once. Harmless when there is none."""
        with self._lock:
            if self._busy:
                self._shut("interrupted")

    def close(self) -> None:
        """End the session; may be called again. A later call opens a new one."""
        self._drop()

    @contextmanager
    def _limited(self) -> Iterator[None]:
        with self._lock:
            self._call += 1
        deadline = DEADLINES.after(self.timeout_s, partial(self._overdue, self._call))
        try:
            yield
        finally:
            deadline.cancel()
            with self._lock:
                self._call += 1

    def _overdue(self, call: int) -> None:
        with self._lock:
            if call == self._call:
                self._shut(f"not done within {self.timeout_s:g} s")

    def _shut(self, why: str) -> None:
        self._cut_by = self._cut_by or why
        self._cut.set()
        if self._socket is not None:
            with suppress(OSError):
                self._socket.shutdown(socket.SHUT_RDWR)

    def _unreachable(self, what: str, error: OSError | None = None) -> Unreachable:
        why = self._cut_by or (error.strerror if error is not None else None) or "the connection was closed"
        return Unreachable(f"{self.resource}: {what}: {why}")

    def _wait_spacing(self) -> None:
        wait_s = self._spoke_s + self._wire.spacing_s - time.monotonic()
        if wait_s > 0:
            self._cut.wait(wait_s)
        if self._cut_by is not None:
            raise self._unreachable("nothing more was sent")

    def _connected(self) -> socket.socket:
        if self._socket is None:
            raise Unreachable(f"{self.resource}: not connected")
        return self._socket

    def _receive(self, query: str) -> bytes:
        longest = self._wire.longest_reply_bytes
        while (end := self._received.find(self._end)) < 0 and len(self._received) <= longest:
            self._received += self._receive_some(query)
        if not 0 <= end <= longest:
            raise Malformed(f"{self.resource}: {query!r} was answered by a line of more than {longest} bytes")
        line = bytes(self._received[:end])
        del self._received[: end + len(self._end)]
        return line

    def _receive_some(self, query: str) -> bytes:
        what = f"no whole reply to {query!r}" + (f" (only {bytes(self._received[:40])!r})" if self._received else "")
        try:
            chunk = self._connected().recv(_RECEIVE_BYTES)
        except OSError as error:
            raise self._unreachable(what, error) from error
        if not chunk:
            raise self._unreachable(what)
        return chunk

    def _is_silent(self) -> bool:
        """Whether nothing waits to be read: neither bytes nobody asked for, nor the end of the connection."""
        try:
            self._connected().recv(1, _LOOK)
        except BlockingIOError:
            return True
        except OSError:
            pass
        return False

    def _open(self) -> None:
        if self._socket is not None:
            _log.info("%s: closed by the other side or out of step while idle; opening it again", self.resource)
        self._drop()
        manager = _resource_manager()  # the import takes longer than an exchange, so it stays outside the limit
        with self._limited():
            self._connect(manager)
            self.read_identity(after_greeting=True)
            if self._on_open is not None:
                self._on_open()

    def _connect(self, manager: Any) -> None:
        while True:
            if self._cut_by is not None:
                raise self._unreachable("no connection")
            try:
                visa_session, _ = manager.open_bare_resource(self.resource, open_timeout=_CONNECT_SLICE_MS)
                break
            except Exception as error:  # pyvisa-py raises bare Exception here, with the VISA status in its text
                if str(_VISA_TIMEOUT) not in str(error):
                    raise Unreachable(f"{self.resource}: no connection: {error}") from error
        opened: socket.socket = manager.visalib.sessions[visa_session].interface
        with self._lock:
            self._visa_session, self._socket = visa_session, opened
        if code := opened.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR):
            raise self._unreachable("no connection", OSError(code, os.strerror(code)))
        opened.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._spoke_s = time.monotonic()  # the instrument may have heard another session a moment ago

    def _drop(self) -> None:
        with self._lock:
            visa_session, self._visa_session, self._socket = self._visa_session, None, None
        self._received.clear()
        if visa_session is not None:
            with suppress(Exception):
                _resource_manager().visalib.close(visa_session)


@cache
def _resource_manager() -> Any:
    """The process's one VISA resource manager. It is never closed before exit: that would close every session."""
    import pyvisa

    return pyvisa.ResourceManager("@py")


def _is_identity(line: bytes) -> bool:
    return line.count(b",") >= 3  # four fields, IEEE 488.2-1992 10.14 [mem]


def _require_socket_resource(resource: str) -> None:
    import pyvisa.rname

    try:
        parsed = pyvisa.rname.ResourceName.from_string(resource)
    except pyvisa.rname.InvalidResourceName as error:
        raise ProfileError(f"resource {resource!r} is not a VISA resource name; nothing was opened") from error
    if not isinstance(parsed, pyvisa.rname.TCPIPSocket):
        raise ProfileError(
            f"resource {resource!r}: only TCPIP::HOST::PORT::SOCKET can be used, because only a socket can be shut "
            "when it is overdue; nothing was opened"
        )
