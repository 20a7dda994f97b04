"""The plainest possible other end of the wire: a socket, lines, a timeout. Shares nothing with drivers or rack."""

from __future__ import annotations

import socket
from types import TracebackType
from typing import Self


class Client:
    """Lines out, lines in. ``timeout_s`` is what a test gives up after, not a pace."""

    def __init__(self, port: int, timeout_s: float = 5.0) -> None:
        self.sock = socket.create_connection(("127.0.0.1", port), timeout_s)
        self.sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._pending = b""

    def tell(self, text: str) -> None:
        self.sock.sendall(text.encode("latin-1") + b"\n")

    def hear(self) -> str:
        """The next line without its newline; `EOFError` when the other side closed first."""
        while b"\n" not in self._pending:
            chunk = self.sock.recv(4096)
            if not chunk:
                raise EOFError(self._pending)
            self._pending += chunk
        line, self._pending = self._pending.split(b"\n", 1)
        return line.decode("latin-1")

    def ask(self, text: str) -> str:
        self.tell(text)
        return self.hear()

    def close(self) -> None:
        self.sock.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self.close()


def closed(client: Client) -> bool:
    """Whether the other side has ended the connection."""
    try:
        return client.sock.recv(1) == b""
    except ConnectionResetError:
        return True
