"""One daemon for each instrument of the machine: a second one is refused, with the process that holds it.

A listening Unix socket in the abstract namespace of Linux: seen by every user and every mount namespace of the machine,
gone with the process that holds it however that ends, and able to say who that is.
"""

from __future__ import annotations

import hashlib
import socket
import struct
from collections.abc import Iterable
from contextlib import ExitStack
from types import TracebackType
from typing import Self

from trapd.errors import Locked


class InstrumentLocks:
    """Holds the locks of several resources; all or none. `Locked` names the first that somebody else holds."""

    def __init__(self, resources: Iterable[str]) -> None:
        self._held = ExitStack()
        try:
            for resource in resources:
                self._held.enter_context(_lock(resource))
        except BaseException:
            self._held.close()
            raise

    def close(self) -> None:
        self._held.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def _name(resource: str) -> bytes:
    # "TCPIP0::" and "TCPIP::" are the same interface, and case means nothing in a VISA resource string.
    plain = resource.strip().upper().replace("TCPIP0::", "TCPIP::").replace("::LOCALHOST::", "::127.0.0.1::")
    return b"\0trapd instrument " + hashlib.sha256(plain.encode()).hexdigest()[:32].encode()


def _lock(resource: str) -> socket.socket:
    lock = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
    try:
        lock.bind(_name(resource))
        lock.listen(1)
    except OSError as error:
        lock.close()
        raise Locked(f"{resource} is owned by another process{_holder(resource)}; nothing was opened") from error
    return lock


def _holder(resource: str) -> str:
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as peer:
        peer.settimeout(0.2)
        try:
            peer.connect(_name(resource))
            pid, _, _ = struct.unpack("3i", peer.getsockopt(socket.SOL_SOCKET, socket.SO_PEERCRED, 12))
        except OSError:
            return ""
    return f" (pid {pid})"
