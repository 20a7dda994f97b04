"""A proxy on loopback between a driver and its instrument: it counts what is sent and plays the faults of a network.

So a driver is tested against faults without the instrument's help, on a simulated rack and on a real bench alike. It
knows as much of IEEE 488.2 as it needs: lines, units parted by ``;``, and that a unit with ``?`` in it is a query.
"""

from __future__ import annotations

import contextlib
import re
import socket
import threading
import time
from typing import Literal

_LINE = re.compile(rb"[^\r\n]*[\r\n]+")
_CHUNK_BYTES = 4096
_NONSENSE = b"TRAPD:NOSUCH"  # undefined for every device: error -113, and nothing happens
_APART_S = 0.05  # between two messages of the proxy's own, for instruments that want time
_ADDRESS = re.compile(r"(TCPIP\d*)::([^:]+)::(\d+)::SOCKET", re.IGNORECASE)

Mode = Literal["pass", "hang", "babble", "trickle"]


def can_stand_before(resource: str) -> bool:
    return _ADDRESS.fullmatch(resource) is not None


class Proxy:
    """Forwards to ``resource``; its own `resource` is what the driver opens. Change its attributes at any time.

    ``mode``: hang swallows what the driver sends, babble and trickle answer it with bytes without end. ``identity``
    answers ``*IDN?`` in the instrument's place and swallows commands. ``delay_next_reply_s``, ``refuse_next_command``,
    ``next_reply`` and ``power_on`` act once: a late reply; nonsense in place of the command that comes after as many as
    ``pass_first``; this in place of a reply; the power-on bit in the ``*ESR?`` reply.
    """

    def __init__(self, resource: str) -> None:
        match = _ADDRESS.fullmatch(resource)
        if match is None:
            raise ValueError(f"{resource!r}: a proxy needs TCPIP::HOST::PORT::SOCKET")
        self._target = (match[2], int(match[3]))
        self._listener = socket.create_server(("127.0.0.1", 0))
        self.resource = f"{match[1]}::127.0.0.1::{self._listener.getsockname()[1]}::SOCKET"
        self.messages: list[str] = []
        self.mode: Mode = "pass"
        self.identity: str | None = None
        self.delay_next_reply_s = 0.0
        self.refuse_next_command = False
        self.pass_first = 0
        self.next_reply: str | None = None
        self.power_on = False
        self._closed = threading.Event()
        self._pairs: list[tuple[socket.socket, socket.socket]] = []
        self._last_query = b""
        threading.Thread(target=self._accept, name="conformance proxy", daemon=True).start()

    @property
    def speaks_scpi(self) -> bool:
        """Whether the driver has asked ``*IDN?`` so far, without which the proxy cannot tell a query."""
        return any("*IDN?" in message.upper() for message in self.messages)

    def commands(self, since: int = 0) -> list[str]:
        """The units sent since so many messages that are no queries; selecting a channel to ask is none either."""
        units = [unit.strip().lstrip(":") for message in self.messages[since:] for unit in message.split(";")]
        return [unit for unit in units if "?" not in unit and not unit.upper().startswith("INST")]

    def cut(self) -> None:
        """Close every connection."""
        pairs, self._pairs = self._pairs, []
        for pair in pairs:
            for end in pair:
                with contextlib.suppress(OSError):
                    end.shutdown(socket.SHUT_RDWR)

    def queue_error(self) -> None:
        """Make the instrument note an error that no command of the driver caused."""
        self._pairs[-1][1].sendall(_NONSENSE + b"\n")
        time.sleep(_APART_S)

    def close(self) -> None:
        self._closed.set()
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.cut()

    def _accept(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                driver, _ = self._listener.accept()
                try:
                    instrument = socket.create_connection(self._target, timeout=5.0)
                except OSError:
                    driver.close()
                    continue
                instrument.settimeout(None)
                for end in (driver, instrument):
                    end.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                self._pairs.append((driver, instrument))
                for work in (self._upstream, self._downstream):
                    threading.Thread(target=work, args=(driver, instrument), daemon=True).start()

    def _upstream(self, driver: socket.socket, instrument: socket.socket) -> None:
        waiting = b""
        with contextlib.suppress(OSError), driver:
            while chunk := driver.recv(_CHUNK_BYTES):
                waiting += chunk
                while (line := _LINE.match(waiting)) is not None:
                    waiting = waiting[line.end() :]
                    self._forward(line[0], driver, instrument)
        with contextlib.suppress(OSError):
            instrument.shutdown(socket.SHUT_RDWR)

    def _forward(self, line: bytes, driver: socket.socket, instrument: socket.socket) -> None:
        message = line.strip()
        self.messages.append(message.decode("ascii", "replace"))
        if self.mode == "babble" or self.mode == "trickle":
            self._talk(driver)
        elif self.mode == "pass":
            for index, one in enumerate(self._rewritten(message)):
                time.sleep(_APART_S if index else 0.0)
                self._last_query = one if b"?" in one else self._last_query
                instrument.sendall(one + line[len(line.rstrip()) :])

    def _talk(self, driver: socket.socket) -> None:
        while not self._closed.wait(0.02 if self.mode == "trickle" else 0.0) and self.mode != "pass":
            driver.sendall(b"7" if self.mode == "trickle" else b"7" * 1000)

    def _rewritten(self, message: bytes) -> list[bytes]:
        """What goes to the instrument in place of ``message``."""
        if not self.refuse_next_command and self.identity is None:
            return [message]
        units = message.split(b";")
        queries = b";".join(unit for unit in units if b"?" in unit)
        if len(units) == queries.count(b";") + 1 and queries:
            return [message]
        if self.identity is not None:
            return [queries] if queries else []
        if self.pass_first:
            self.pass_first -= 1
            return [message]
        self.refuse_next_command = False
        return [_NONSENSE, queries] if queries else [_NONSENSE]

    def _downstream(self, driver: socket.socket, instrument: socket.socket) -> None:
        with contextlib.suppress(OSError), instrument:
            while chunk := instrument.recv(_CHUNK_BYTES):
                delay_s, self.delay_next_reply_s = self.delay_next_reply_s, 0.0
                self._closed.wait(delay_s)
                driver.sendall(self._answered(chunk))
        with contextlib.suppress(OSError):
            driver.shutdown(socket.SHUT_RDWR)

    def _answered(self, reply: bytes) -> bytes:
        """What goes to the driver in place of ``reply``. A short reply arrives in one piece."""
        end = reply[len(reply.rstrip()) :]
        if self.identity is not None and b"*IDN?" in self._last_query.upper():
            return self.identity.encode("ascii") + end
        if self.next_reply is not None:
            reply, self.next_reply = self.next_reply.encode("ascii") + end, None
        if self.power_on and b"*ESR?" in self._last_query.upper():
            self.power_on = False
            return str(int(reply) | 128).encode("ascii") + end
        return reply
