"""Where a daemon answers: the socket it binds, and how a client finds it."""

from __future__ import annotations

import hashlib
import os
import re
import socket
import stat
import tomllib
import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from platformdirs import user_runtime_path

from trapd.errors import ConfigError, DaemonUnreachable, NotPermitted

AT = "TRAPD_AT"
"""Environment variable: a URL, a socket path or a trap file."""

SYSTEM_DIRECTORY = Path("/run/trapd")
_LONGEST_SLUG = 40
_HOW = f"name one by its URL, its socket or its trap file (--at, or {AT} in the environment)"


@dataclass(frozen=True, kw_only=True)
class Address:
    """A Unix socket, or the base URL of a TCP listener when ``socket_path`` is None."""

    url: str = "http://localhost"
    socket_path: Path | None = None

    def __str__(self) -> str:
        return self.url if self.socket_path is None else str(self.socket_path)


def runtime_socket(trap_name: str) -> Path:
    """The Unix socket that the daemon of a trap binds when its file names none. Makes its directory, for this user alone.

    Raises `NotPermitted` when the directory belongs to somebody else, `ConfigError` when it cannot be made.
    """
    directory = _runtime_directory()
    try:
        for each in (directory.parent, directory):
            each.mkdir(mode=0o700, exist_ok=True)
    except OSError as error:
        raise ConfigError(
            f"{directory} cannot be made ({error.strerror}); name a socket in the trap file (server.socket), or set "
            "XDG_RUNTIME_DIR"
        ) from error
    return _ours(directory) / _file_name(trap_name)


def find(at: str | Path | None = None) -> Address:
    """The daemon that ``at`` names, else that of TRAPD_AT, else the only one that answers here.

    Raises `DaemonUnreachable` where that is none or several, `ConfigError` for a trap file that is none.
    """
    named = str(at or os.environ.get(AT, "")).strip()
    if not named:
        return _the_only_one()
    if re.match(r"https?://", named):
        return Address(url=named.rstrip("/"))
    path = Path(named).expanduser()
    return _of_trap_file(path) if path.suffix == ".toml" else Address(socket_path=path)


def _file_name(trap_name: str) -> str:
    slug = re.sub(r"[^a-z0-9]+", "-", trap_name.lower()).strip("-")
    if not slug or len(slug) > _LONGEST_SLUG:
        slug = f"{slug[:_LONGEST_SLUG]}-{hashlib.sha256(trap_name.encode()).hexdigest()[:8]}".strip("-")
    return f"{slug}.sock"


def _directories() -> tuple[Path, ...]:
    return (_ours(_runtime_directory()), SYSTEM_DIRECTORY)


def _runtime_directory() -> Path:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # root has no XDG_RUNTIME_DIR, and need not hear so at every command
        try:
            return user_runtime_path("trapd")
        except PermissionError as error:
            raise NotPermitted(f"{error}; set XDG_RUNTIME_DIR to a directory of your own") from error


def _ours(directory: Path) -> Path:
    """The same directory. Raises `NotPermitted` where whoever owns it could pass for a daemon, or listen in."""
    for each in (directory.parent, directory):
        try:
            status = each.lstat()
        except FileNotFoundError:
            continue
        if not stat.S_ISDIR(status.st_mode) or status.st_uid not in (0, os.geteuid()):
            raise NotPermitted(
                f"{each}: expected a directory of user {os.geteuid()}, found one of user {status.st_uid}, or none; "
                "set XDG_RUNTIME_DIR to a directory of your own"
            )
    return directory


def _the_only_one() -> Address:
    places = " and ".join(f"{directory}/*.sock" for directory in _directories())
    live = [path for directory in _directories() for path in sorted(directory.glob("*.sock")) if answers(path)]
    if len(live) == 1:
        return Address(socket_path=live[0])
    if live:
        raise DaemonUnreachable(f"several daemons answer: {', '.join(map(str, live))}; {_HOW}")
    raise DaemonUnreachable(f"no daemon answers at {places}; start one with `trapd serve`, or {_HOW}")


def answers(path: Path) -> bool:
    """Whether somebody listens there whom we trust: root, or this user. Anybody may make a file in a shared folder."""
    try:
        status = path.lstat()
        if not stat.S_ISSOCK(status.st_mode) or status.st_uid not in (0, os.geteuid()):
            return False
        with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as peer:
            peer.settimeout(1.0)
            peer.connect(str(path))
    except OSError:
        return False
    return True


def _of_trap_file(path: Path) -> Address:
    name, own = _trap_and_socket(path)
    if own is not None:
        return Address(socket_path=path.absolute().parent / own)
    sockets = [directory / _file_name(name) for directory in _directories()]
    for candidate in sockets:
        if answers(candidate):
            return Address(socket_path=candidate)
    looked = " nor ".join(map(str, sockets))
    raise DaemonUnreachable(f"no daemon of {path} answers at {looked}; start it with `trapd serve {path}`")


def _trap_and_socket(path: Path) -> tuple[str, str | None]:
    """All a client needs of a trap file, which it does not check: the daemon did."""
    try:
        table: Mapping[str, Any] = tomllib.loads(path.read_text(encoding="utf-8"))
        name, own = table["trap"]["name"], table.get("server", {}).get("socket")
    except OSError as error:
        raise ConfigError(f"{path}: cannot be read ({error.strerror}); expected a trap file") from error
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError) as error:
        raise ConfigError(f"{path}: no trap file: it has no [trap] name that can be read") from error
    return str(name), own if isinstance(own, str) else None
