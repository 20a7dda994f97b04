"""What every request passes before anything else looks at it: its id, where it comes from, who sent it, how long it is."""

from __future__ import annotations

import re
import secrets
from collections.abc import Iterable

from starlette.exceptions import HTTPException
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from trapd.api.access import Tokens, caller_of
from trapd.api.answers import bug, problem
from trapd.api.bodies import MOST_BYTES
from trapd.errors import BadRequest, NotPermitted, TrapdError

OPEN_TO_ALL = ("/v1/health", "/v1/openapi.json")
"""No token: neither says anything of the trap."""

_REQUEST_ID = re.compile(r"[A-Za-z0-9._-]{1,64}")
_HOST = re.compile(r"(?P<name>\[[0-9A-Fa-f:.]+\]|[^:\[\]]*)(?::[0-9]{1,5})?")


class Door:
    """Pure ASGI, outside everything else, so that no answer leaves without passing it."""

    def __init__(self, app: ASGIApp, *, tokens: Tokens, host: str) -> None:
        self._app = app
        self._tokens = tokens
        self._hosts = {"localhost", "127.0.0.1", "[::1]", f"[{host}]" if ":" in host else host.lower()}

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        headers = {key.decode("latin-1"): value.decode("latin-1") for key, value in scope["headers"]}
        given = headers.get("x-request-id", "")
        request_id = given if _REQUEST_ID.fullmatch(given) else secrets.token_hex(8)
        scope.setdefault("state", {})["request_id"] = request_id
        begun = False

        async def reply(message: Message) -> None:
            nonlocal begun
            if message["type"] == "http.response.start":
                begun = True
                own = [(b"x-request-id", request_id.encode()), (b"cache-control", b"no-store")]
                message = {**message, "headers": [*message["headers"], *own]}
            await send(message)

        try:
            self._check_origin(headers)
            if scope["path"] not in OPEN_TO_ALL:
                scope["state"]["caller"] = caller_of(scope, headers, self._tokens)
            _check_length(headers)
            await self._app(scope, _bounded(receive), reply)
        except TrapdError as error:
            await problem(error, status=413 if isinstance(error, _TooLong) else None)(scope, receive, reply)
        except Exception as error:
            answer = bug(error, request_id)
            if begun:
                raise
            await answer(scope, receive, reply)

    def _check_origin(self, headers: dict[str, str]) -> None:
        """A web page elsewhere must not reach us through somebody's browser, whatever name its server gave this machine."""
        host = headers.get("host", "")
        match = _HOST.fullmatch(host)
        if match is None or match["name"].lower() not in self._hosts:
            raise NotPermitted(
                f"Host: {host!r} is not a name of this service; expected {_listed(self._hosts)}; nothing was done"
            )
        origin = headers.get("origin")
        if origin is not None and origin.lower() != f"http://{host}".lower():
            raise NotPermitted(f"Origin: {origin!r} is another site; expected 'http://{host}'; nothing was done")


class _TooLong(BadRequest):
    pass


_TOO_LONG = f"the body is longer than {MOST_BYTES} bytes; nothing was sent"


def _check_length(headers: dict[str, str]) -> None:
    length = headers.get("content-length", "0")
    if not re.fullmatch(r"[0-9]{1,19}", length) or int(length) > MOST_BYTES:
        raise _TooLong(_TOO_LONG)


def _bounded(receive: Receive) -> Receive:
    """The same for a body that does not say how long it is."""
    received = 0

    async def bounded() -> Message:
        nonlocal received
        message = await receive()
        received += len(message.get("body", b""))
        if received > MOST_BYTES:
            raise HTTPException(413, _TOO_LONG.removesuffix("; nothing was sent"))
        return message

    return bounded


def _listed(names: Iterable[str]) -> str:
    return ", ".join(sorted(names))
