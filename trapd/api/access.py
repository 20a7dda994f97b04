"""Who asks, and what they may: tokens and roles over TCP, the local user over the Unix socket."""

from __future__ import annotations

import hashlib
import hmac
import pwd
import secrets
import threading
from collections.abc import Awaitable, Callable, Iterator
from concurrent.futures import Future
from dataclasses import dataclass
from typing import Annotated, Any

from fastapi import Depends, Request

from trapd.api.bodies import Role
from trapd.errors import BadRequest, Conflict, NotAuthenticated, NotFound, NotPermitted, RecordFailed, RecordUnwritable
from trapd.record import Draft, Entry, Reader, Record

ROLES: tuple[Role, ...] = ("read", "operate", "administer")
"""Each may do what those before it may."""

LOCAL = "user:"
"""Before the user's name where a connection over the Unix socket has its peer's address; no TCP peer can look so."""

_DAEMON = "trapd"
_PAGE = 1000


@dataclass(frozen=True, kw_only=True)
class Caller:
    """``name`` is the author of what is asked: a token's name, or the local user's."""

    name: str
    role: Role


@dataclass(frozen=True, kw_only=True)
class Token:
    """``sha256``: all that is kept of the secret, in hexadecimal. ``entry`` made it."""

    name: str
    role: Role
    sha256: str
    entry: int
    time: str
    made_by: str


class Tokens:
    """The tokens in force, as the record says. Kept in memory, so that nobody waits for a disk to say `off`."""

    def __init__(self, reader: Reader, record: Record) -> None:
        self._record = record
        self._door = threading.Lock()
        self._in_force: dict[str, Token] = {}
        self._being_made: set[str] = set()
        for entry in _token_entries(reader):
            self._follow(entry)

    def list(self) -> list[Token]:
        return list(self._in_force.values())

    def caller(self, secret: str) -> Caller:
        """Raises `NotAuthenticated`."""
        digest = _sha256(secret)
        found = [token for token in self.list() if hmac.compare_digest(token.sha256, digest)]
        if not found:
            raise NotAuthenticated("this token is not known, or was revoked; nothing was done")
        return Caller(name=found[0].name, role=found[0].role)

    def make(self, name: str, role: Role, author: str) -> tuple[str, Token]:
        """A new token and its secret, which nobody can tell again. Blocks until it is recorded.

        Raises `Conflict` when the name is in use, `BadRequest` where it would pass for somebody else's.
        """
        _require_own_name(name)
        with self._door:
            if name in self._in_force or name in self._being_made:
                raise Conflict(f"a token named {name!r} is in force; revoke it first, or choose another name")
            self._being_made.add(name)
        secret = secrets.token_urlsafe(32)
        data = {"action": "new", "name": name, "role": role, "sha256": _sha256(secret)}
        try:
            entry = _written(self._record.append(Draft(kind="token", actor=author, data=data)))
            with self._door:
                return secret, self._follow(entry)
        finally:
            with self._door:
                self._being_made.discard(name)

    def revoke(self, name: str, author: str) -> Entry:
        """At once, then recorded. Raises `NotFound`; `RecordUnwritable`, and then it is back after a restart."""
        with self._door:
            if self._in_force.pop(name, None) is None:
                raise NotFound(f"there is no token named {name!r} in force; nothing was revoked")
        try:
            return _written(
                self._record.append(Draft(kind="token", actor=author, data={"action": "revoke", "name": name}))
            )
        except RecordFailed as error:
            raise RecordUnwritable(
                f"{error}; token {name!r} is refused from now on, but comes back with a restart: revoke it again"
            ) from error

    def _follow(self, entry: Entry) -> Token:
        data = entry.data
        if data["action"] == "revoke":
            return self._in_force.pop(data["name"])
        token = Token(
            name=data["name"],
            role=data["role"],
            sha256=data["sha256"],
            entry=entry.seq,
            time=entry.time,
            made_by=entry.actor,
        )
        self._in_force[token.name] = token
        return token


def caller_of(scope: Any, headers: dict[str, str], tokens: Tokens) -> Caller:
    """Raises `NotAuthenticated`."""
    peer = (scope.get("client") or ("", 0))[0]
    if peer.startswith(LOCAL):
        return Caller(name=peer.removeprefix(LOCAL), role="administer")
    scheme, _, secret = headers.get("authorization", "").partition(" ")
    if scheme.lower() != "bearer" or not secret.strip():
        raise NotAuthenticated("a token is needed here: Authorization: Bearer TOKEN; nothing was done")
    return tokens.caller(secret.strip())


def needs(role: Role) -> Callable[[Request], Awaitable[Caller]]:
    """A dependency: the caller, whose role is ``role`` at least."""

    # Not a plain function: FastAPI would run it on the thread pool, and `off` would wait behind readers of a dead disk.
    async def caller(request: Request) -> Caller:
        found: Caller = request.state.caller
        if ROLES.index(found.role) < ROLES.index(role):
            raise NotPermitted(
                f"{found.name} has the role {found.role}; this needs {role}; nothing was done",
                {"role": found.role, "needed": role},
            )
        return found

    return caller


Reading = Annotated[Caller, Depends(needs("read"))]
Operating = Annotated[Caller, Depends(needs("operate"))]
Administering = Annotated[Caller, Depends(needs("administer"))]


def user_name(uid: int) -> str:
    try:
        return pwd.getpwuid(uid).pw_name
    except KeyError:
        return f"uid {uid}"


def _require_own_name(name: str) -> None:
    """An author in the record is one person: no token passes for a local user, or for the daemon."""
    try:
        pwd.getpwnam(name)
    except KeyError:
        if name != _DAEMON:
            return
    raise BadRequest(f"a token cannot be named {name!r}, the name of a user of this machine or of the daemon itself")


def _sha256(secret: str) -> str:
    return hashlib.sha256(secret.encode("utf-8", "surrogateescape")).hexdigest()


def _token_entries(reader: Reader) -> Iterator[Entry]:
    after = 0
    while page := reader.entries(kind="token", after=after, limit=_PAGE):
        yield from page
        after = page[-1].seq


def _written(future: Future[tuple[Entry, ...]]) -> Entry:
    return future.result()[0]
