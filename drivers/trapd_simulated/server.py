"""One instrument on one TCP port: lines in, lines out, and everything that can go wrong in between.

A thread for each connection: the faults are waits, and a thread may wait without holding up another instrument.
"""

from __future__ import annotations

import random
import socket
import threading
from collections.abc import Iterator
from contextlib import suppress

from trapd_simulated.faults import Fault, FaultKind, Faults
from trapd_simulated.instrument import Instrument
from trapd_simulated.receipts import Receipts

HOST = "127.0.0.1"
_LINE_LIMIT = 65536
_STALLED_BUFFER = 4096


class Wire:
    """One accepted connection."""

    def __init__(self, sock: socket.socket) -> None:
        sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self.sock = sock
        self._sending = threading.Lock()
        self._held = b""
        self.closed = threading.Event()

    def messages(self, faults: Faults) -> Iterator[bytes]:
        """Complete lines without their end (LF, CRLF accepted), until the peer or the rack closes.

        A line beyond the limit comes as its first bytes, one more than the limit.
        """
        pending = b""
        with suppress(OSError):
            while chunk := self.sock.recv(4096):
                self._stall(faults)
                *lines, pending = (pending + chunk).split(b"\n")
                for line in lines:
                    self._stall(faults)
                    yield line.removesuffix(b"\r")
                pending = pending[: _LINE_LIMIT + 1]

    def _stall(self, faults: Faults) -> None:
        while faults.standing(FaultKind.STALLED_READER) and not self.closed.is_set():
            # The kernel would go on taking bytes for us: leave it little room.
            self.sock.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, _STALLED_BUFFER)
            faults.wait_cleared(FaultKind.STALLED_READER, 0.1)

    def send(self, data: bytes) -> None:
        with self._sending, suppress(OSError):
            self.sock.sendall(self._held + data)
            self._held = b""

    def hold(self, data: bytes) -> None:
        """Send ``data`` in front of whatever is sent next."""
        with self._sending:
            self._held += data

    def close(self) -> None:
        self.closed.set()
        with suppress(OSError):
            self.sock.shutdown(socket.SHUT_RDWR)
        self.sock.close()


class InstrumentServer:
    """Listens for one instrument. `open`, `shut` and `drop` may be called again and again, from any thread."""

    def __init__(self, instrument: Instrument, receipts: Receipts, port: int) -> None:
        self._instrument = instrument
        self._faults = instrument.faults
        self._receipts = receipts
        self._random = random.Random(instrument.name)
        self._wires: set[Wire] = set()
        self._lock = threading.Lock()
        self._listener: socket.socket | None = None
        self.port = port

    def open(self) -> None:
        """Listen; the same port as before when it was open already. `OSError` when the port is taken."""
        with self._lock:
            if self._listener:
                return
            self._listener = socket.create_server((HOST, self.port), backlog=16)
            self.port = self._listener.getsockname()[1]
            name = f"{self._instrument.name} port"
            threading.Thread(target=self._accept, args=(self._listener,), name=name, daemon=True).start()

    def shut(self) -> None:
        """Refuse new connections; those that are open stay."""
        with self._lock:
            listener, self._listener = self._listener, None
        if listener:
            with suppress(OSError):
                listener.shutdown(socket.SHUT_RDWR)  # wakes the thread in accept
            listener.close()

    def drop(self) -> None:
        """Close every open connection."""
        with self._lock:
            wires = list(self._wires)
        for wire in wires:
            wire.close()

    def _accept(self, listener: socket.socket) -> None:
        while True:
            try:
                sock, _ = listener.accept()
            except OSError:
                return
            wire = Wire(sock)
            if not self._admit(wire):
                wire.close()
                continue
            name = f"{self._instrument.name} wire"
            threading.Thread(target=self._serve, args=(wire,), name=name, daemon=True).start()

    def _admit(self, wire: Wire) -> bool:
        with self._lock:
            clients = len(self._wires)
            if self._listener is None or self._faults.take(FaultKind.SECOND_CLIENT):
                return False
            if clients and self._faults.take(FaultKind.REFUSE_SECOND_CLIENT):
                return False
            if clients >= self._instrument.settings.max_clients:
                return False
            self._wires.add(wire)
            return True

    def _serve(self, wire: Wire) -> None:
        try:
            for line in wire.messages(self._faults):
                if not self._handle(wire, line):
                    return
        finally:
            wire.close()
            with self._lock:
                self._wires.discard(wire)

    def _handle(self, wire: Wire, line: bytes) -> bool:
        """One message; False when the connection is to be closed."""
        delay = self._faults.take(FaultKind.NETWORK_DELAY)
        if delay:
            wire.closed.wait(delay.delay_s)
        text = line.decode("latin-1")
        self._receipts.add(self._instrument.name, text)
        if self._faults.take(FaultKind.HANG):
            return True
        if "?" in text and self._faults.take(FaultKind.LOST_CONNECTION):
            return False
        if len(line) > _LINE_LIMIT:
            self._instrument.overrun()
            return True
        reply = self._instrument.execute(text)
        if reply is not None:
            self._answer(wire, (reply + self._instrument.dialect.reply_end).encode("latin-1"))
        return True

    def _answer(self, wire: Wire, data: bytes) -> None:
        if slow := self._faults.take(FaultKind.SLOW_REPLY):
            wire.closed.wait(slow.delay_s)
        if self._faults.take(FaultKind.MUTE):
            return
        if late := self._faults.take(FaultKind.LATE_REPLY):
            self._withhold(wire, data, late)
        elif self._faults.take(FaultKind.PARTIAL_LINE):
            wire.send(data[: len(data) // 2])
        elif self._faults.take(FaultKind.GARBAGE):
            wire.send(self._random.randbytes(24).replace(b"\n", b"\xff") + b"\n")
        elif babble := self._faults.take(FaultKind.BABBLE):
            self._babble(wire, babble)
        else:
            wire.send(data)

    def _withhold(self, wire: Wire, data: bytes, late: Fault) -> None:
        wire.hold(data)
        if late.delay_s > 0.0:
            timer = threading.Timer(late.delay_s, wire.send, (b"",))
            timer.daemon = True
            timer.start()

    def _babble(self, wire: Wire, babble: Fault) -> None:
        with suppress(OSError):
            while babble.times is not None or self._faults.standing(FaultKind.BABBLE):
                wire.sock.sendall(b"+9.91E+37," * 100)
