"""A peer on a loopback socket that does to each message what the test says; for what an instrument would never do."""

from __future__ import annotations

import contextlib
import socket
import threading
from collections.abc import Callable
from types import TracebackType
from typing import Self

IDENTITY = "MAKER,MODEL,1,1.0"
Behaviour = Callable[[socket.socket, str], None]


def answering(replies: dict[str, str]) -> Behaviour:
    """Answers each query from the table and *IDN? with `IDENTITY`; silent about the rest."""

    def behave(connection: socket.socket, message: str) -> None:
        reply = {"*IDN?": IDENTITY, **replies}.get(message)
        if reply is not None:
            connection.sendall(reply.encode() + b"\n")

    return behave


class Peer:
    """Accepts connections one after the other and hands each line received to ``behave``."""

    def __init__(self, behave: Behaviour, *, greeting: bytes = b"") -> None:
        self.behave = behave
        self.greeting = greeting
        self.received: list[str] = []
        self.connections = 0
        self._listener = socket.create_server(("127.0.0.1", 0))
        self._open: list[socket.socket] = []
        self.port: int = self._listener.getsockname()[1]
        self.resource = f"TCPIP::127.0.0.1::{self.port}::SOCKET"
        threading.Thread(target=self._accept, daemon=True).start()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()

    def stop(self) -> None:
        """Refuse from now on, and close what is open."""
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.hang_up()

    def hang_up(self) -> None:
        for connection in self._open:
            with contextlib.suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)
        self._open.clear()

    def _accept(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                connection, _ = self._listener.accept()
                connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                self.connections += 1
                self._open.append(connection)
                threading.Thread(target=self._serve, args=(connection,), daemon=True).start()

    def _serve(self, connection: socket.socket) -> None:
        with contextlib.suppress(OSError), connection, connection.makefile("rb") as lines:
            connection.sendall(self.greeting)
            for line in lines:
                self.received.append(line.decode("ascii").rstrip("\r\n"))
                self.behave(connection, self.received[-1])
