"""One connection to a daemon: JSON over HTTP, and its errors as the tree they came from."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from trapd.address import Address
from trapd.errors import BadRequest, Bug, DaemonUnreachable, TrapdError

if TYPE_CHECKING:
    import httpx2

CONNECTING_S = 3.0


class Silent(DaemonUnreachable):
    """Connected, and nothing came in time."""


class Connection:
    """``token`` is needed over TCP only."""

    def __init__(self, address: Address, token: str | None) -> None:
        import httpx2  # 0.1 s, and not needed to say what is wrong with a command line

        self.address = address
        path = address.socket_path
        self._http = httpx2.Client(
            base_url=address.url,
            transport=httpx2.HTTPTransport(uds=None if path is None else str(path)),
            headers={"Authorization": f"Bearer {token}"} if token else {},
            trust_env=False,  # no proxy belongs between a trap and whoever moves it
        )

    def close(self) -> None:
        self._http.close()

    def ask(
        self,
        method: str,
        path: str,
        *,
        body: Mapping[str, Any] | None = None,
        asked: Mapping[str, Any] | None = None,
        within_s: float | None = 30.0,
    ) -> Any:
        """The answer's JSON. Raises the daemon's error, or `DaemonUnreachable` when none answers ``within_s``."""
        with self._translated(within_s):
            # `request` would write the body itself, NaN refused by an error of the library's own.
            content = None if body is None else _json(body)
            headers = {} if body is None else {"Content-Type": "application/json"}
            answer = self._http.request(
                method, path, content=content, params=_present(asked), headers=headers, timeout=self._patience(within_s)
            )
        if answer.is_success:
            return self._parsed(answer.content)
        raise self._error(answer.status_code, answer.content)

    @contextmanager
    def lines(self, path: str, headers: Mapping[str, str], within_s: float) -> Iterator[Iterator[str]]:
        """The lines of an answer that does not end by itself; `Silent` when none comes ``within_s``."""
        with (
            self._translated(within_s),
            self._http.stream("GET", path, headers=dict(headers), timeout=self._patience(within_s)) as answer,
        ):
            if not answer.is_success:
                raise self._error(answer.status_code, answer.read())
            yield answer.iter_lines()

    def _patience(self, within_s: float | None) -> httpx2.Timeout:
        import httpx2

        return httpx2.Timeout(within_s, connect=CONNECTING_S)

    @contextmanager
    def _translated(self, within_s: float | None) -> Iterator[None]:
        import httpx2

        try:
            yield
        except httpx2.ConnectError as error:
            raise DaemonUnreachable(f"no daemon answers at {self.address} ({error}); nothing was sent") from error
        except httpx2.ReadTimeout as error:
            raise Silent(
                f"the daemon at {self.address} did not answer within {within_s:g} s; what it did is in its record"
            ) from error
        except (httpx2.HTTPError, httpx2.InvalidURL) as error:
            raise DaemonUnreachable(f"the daemon at {self.address}: {error or type(error).__name__}") from error

    def _parsed(self, content: bytes) -> Any:
        try:
            return json.loads(content)
        except ValueError as error:
            raise DaemonUnreachable(f"what answers at {self.address} is no trapd") from error

    def _error(self, status: int, content: bytes) -> TrapdError:
        found = self._parsed(content)
        if not isinstance(found, dict) or not {"code", "message", "details"} <= found.keys():
            return DaemonUnreachable(f"what answers at {self.address} is no trapd (status {status})")
        kind = error_kinds().get(found["code"], Bug)
        return kind(str(found["message"]), found["details"])


def error_kinds() -> dict[str, type[TrapdError]]:
    """By code. Where several share one, the most special: a refusal that comes over HTTP is the guard's."""
    kinds: dict[str, type[TrapdError]] = {}

    def collect(kind: type[TrapdError]) -> None:
        kinds[kind.code] = kind
        for narrower in kind.__subclasses__():
            if narrower.__module__ == TrapdError.__module__:
                collect(narrower)

    collect(TrapdError)
    return kinds


def _json(body: Mapping[str, Any]) -> bytes:
    try:
        return json.dumps(dict(body), allow_nan=False).encode()
    except (TypeError, ValueError) as error:
        raise BadRequest(f"this cannot be sent as JSON: {error}; nothing was sent") from error


def _present(asked: Mapping[str, Any] | None) -> dict[str, Any]:
    return {key: value for key, value in (asked or {}).items() if value is not None}
