"""uvicorn on sockets that we bind: TCP, and a Unix socket whose peer is known by name."""

from __future__ import annotations

import errno
import fcntl
import ipaddress
import json
import logging
import os
import socket
import stat
import struct
import threading
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import h11
import uvicorn
from fastapi import FastAPI
from uvicorn.protocols.http.h11_impl import H11Protocol

from trapd.api.access import LOCAL, user_name
from trapd.errors import ConfigError, Locked, TrapdError

STARTING_S = 10.0
STOPPING_S = 2.0
"""How long answers on their way may take once the server stops."""

_log = logging.getLogger("trapd.api")


class ApiServer:
    """Serves on a thread of its own between `start` and `stop`, both callable from any thread. Leaves signals alone."""

    def __init__(self, app: FastAPI, host: str, port: int, socket_path: Path) -> None:
        self._host = host
        self._port = port
        self.socket_path = socket_path
        self._closing = ExitStack()
        config = uvicorn.Config(
            app,
            http=_Protocol,
            ws="none",
            loop="asyncio",
            lifespan="on",
            log_config=None,
            access_log=False,
            proxy_headers=False,  # X-Forwarded-For would let a TCP peer pass for a local user
            server_header=False,
            timeout_keep_alive=30,
            timeout_graceful_shutdown=int(STOPPING_S),
        )
        self._server = _Server(config, app)
        self.address: tuple[str, int] = (host, port)

    def start(self) -> None:
        """Returns when both sockets answer. Raises `Locked` where somebody else has one, `ConfigError` where none can be."""
        with ExitStack() as stack:
            tcp = stack.enter_context(_bound_tcp(self._host, self._port))
            lock = stack.enter_context(_SocketLock(self.socket_path))
            unix = stack.enter_context(lock.bound())
            self.address = tcp.getsockname()[:2]
            if not ipaddress.ip_address(self.address[0]).is_loopback:
                _log.warning("listening on %s: over the network tokens and answers are not encrypted", self._host)
            thread = threading.Thread(target=self._server.run, args=([tcp, unix],), name="api", daemon=True)
            thread.start()
            stack.callback(self._end, thread)
            if not self._server.listening.wait(STARTING_S):
                raise TrapdError(f"the API did not start within {STARTING_S:g} s")
            self._closing = stack.pop_all()

    def stop(self) -> None:
        """Streams end, answers on their way are finished, the socket's file goes. May be called twice."""
        self._closing.close()

    def _end(self, thread: threading.Thread) -> None:
        self._server.should_exit = True
        thread.join(STOPPING_S + 3.0)


class _Server(uvicorn.Server):
    def __init__(self, config: uvicorn.Config, app: FastAPI) -> None:
        super().__init__(config)
        self.listening = threading.Event()
        self._app = app

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        await super().startup(sockets)
        self.listening.set()

    async def shutdown(self, sockets: list[socket.socket] | None = None) -> None:
        self._app.state.viewers.end()
        await super().shutdown(sockets)


class _Protocol(H11Protocol):
    """Over the Unix socket the peer's address is the user's name; and what is no HTTP gets our shape of error too."""

    def connection_made(self, transport: Any) -> None:
        super().connection_made(transport)
        peer: socket.socket = transport.get_extra_info("socket")
        if peer.family != socket.AF_UNIX:
            return
        _, uid, _ = struct.unpack("3i", peer.getsockopt(socket.SOL_SOCKET, socket.SO_PEERCRED, 12))
        if uid not in (0, os.geteuid()):  # the file's mode says so already, unless somebody changed it
            transport.close()
            return
        self.client = (LOCAL + user_name(uid), 0)

    def send_400_response(self, msg: str) -> None:
        content = {"code": "bad_request", "message": f"this is no HTTP request: {msg}", "details": {}}
        headers = [(b"content-type", b"application/json"), (b"connection", b"close")]
        for event in (
            h11.Response(status_code=400, headers=headers, reason=b"Bad Request"),
            h11.Data(data=json.dumps(content).encode()),
            h11.EndOfMessage(),
        ):
            self.transport.write(self.conn.send(event) or b"")
        self.transport.close()


def _bound_tcp(host: str, port: int) -> socket.socket:
    try:
        family, kind, _, _, address = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE)[
            0
        ]
        # asyncio sets TCP_NODELAY only where the protocol is named; without it an answer takes 40 ms longer.
        listener = socket.socket(family, kind, socket.IPPROTO_TCP)
    except OSError as error:
        raise ConfigError(f"server.listen = {host}:{port}: {error.strerror or error}; nothing was opened") from error
    try:
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind(address)
        listener.listen(socket.SOMAXCONN)
    except OSError as error:
        listener.close()
        if error.errno == errno.EADDRINUSE:
            raise Locked(f"server.listen = {host}:{port} is in use by another process; nothing was opened") from error
        raise ConfigError(f"server.listen = {host}:{port}: {error.strerror}; nothing was opened") from error
    return listener


class _SocketLock:
    """The right to bind, replace and remove one Unix socket: a locked file beside it, which stays."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._bound = False
        lock = path.with_name(path.name + ".lock")
        try:
            path.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
            self._descriptor = os.open(lock, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW, 0o600)
        except OSError as error:
            raise ConfigError(f"the socket {path} cannot be made ({error.strerror}); nothing was opened") from error
        try:
            fcntl.flock(self._descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            os.close(self._descriptor)
            raise Locked(f"{path} belongs to a daemon that is running; nothing was opened") from error

    def __enter__(self) -> _SocketLock:
        return self

    def __exit__(self, *_: object) -> None:
        if self._bound:
            self._path.unlink(missing_ok=True)
        os.close(self._descriptor)

    def bound(self) -> socket.socket:
        """What a daemon that died left there is replaced; anything else is not."""
        listener = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        try:
            if self._path.is_symlink() or self._path.exists():
                if not stat.S_ISSOCK(self._path.lstat().st_mode):
                    raise ConfigError(f"{self._path} exists and is no socket; nothing was opened")
                self._path.unlink()
            listener.bind(str(self._path))
            self._bound = True
            self._path.chmod(0o600)  # before anybody can connect: only `listen` lets them
        except OSError as error:
            listener.close()
            reason = error.strerror or str(error)  # a path that is too long has no errno
            raise ConfigError(f"the socket {self._path} cannot be made ({reason}); nothing was opened") from error
        return listener
