"""What goes out: plain JSON of our records, and the one shape of every error."""

from __future__ import annotations

import json
import logging
import math
from collections.abc import Mapping, Sequence
from dataclasses import fields, is_dataclass
from typing import Any

from fastapi import Request
from fastapi.exceptions import RequestValidationError
from pydantic import BaseModel
from starlette.exceptions import HTTPException
from starlette.responses import Response

from trapd.api.bodies import PATTERNS
from trapd.errors import BadRequest, Bug, GuardRefused, NotFound, TrapdError
from trapd.record import Commanded, Entry, rfc3339

_log = logging.getLogger("trapd.api")

_MOST_MISTAKES = 20
_LONGEST_FOUND = 60


class Problem(BaseModel):
    """The answer to every request that did not succeed."""

    code: str
    message: str
    details: dict[str, Any]


class Answer(Response):
    """JSON. What is no finite number is null: JSON has no other word for it."""

    media_type = "application/json"

    def render(self, content: Any) -> bytes:
        text = json.dumps(plain(content), ensure_ascii=False, allow_nan=False, separators=(",", ":"))
        return text.encode("utf-8", "backslashreplace")  # a lone surrogate becomes \udXXX, which is its JSON escape


def plain(value: Any) -> Any:
    """Records, mappings and sequences as what `json` takes."""
    if is_dataclass(value) and not isinstance(value, type):
        return {one.name: plain(getattr(value, one.name)) for one in fields(value)}
    if isinstance(value, tuple) and hasattr(value, "_asdict"):
        return plain(value._asdict())
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def entry(one: Entry) -> dict[str, Any]:
    return {
        "seq": one.seq,
        "time": one.time,
        "time_us": one.time_us,
        "monotonic_ns": one.monotonic_ns,
        "boot_id": one.boot_id,
        "kind": one.kind,
        "actor": one.actor,
        "data": plain(one.data),
        "digest": one.digest,
    }


def commanded(one: Commanded) -> dict[str, Any]:
    return timed(one, one.time_us)


def timed(row: Any, at_us: int) -> dict[str, Any]:
    """A row of the record with the time it is about."""
    return {"seq": row.seq, "time": rfc3339(at_us), **plain(row)}


def problem(error: TrapdError, *, status: int | None = None, headers: Mapping[str, str] | None = None) -> Answer:
    """The only place where an error becomes an answer."""
    extra = dict(headers or {})
    if error.http_status == 401:
        extra["WWW-Authenticate"] = "Bearer"
    content = {"code": error.code, "message": error.message, "details": error.details}
    return Answer(content, status_code=status or error.http_status, headers=extra)


def refused(kind: str, answer: Mapping[str, Any]) -> GuardRefused:
    """The guard's refusal, which was data until here. ``answer`` has "entry" and "verdict"."""
    reasons = "; ".join(reason["message"] for reason in answer["verdict"]["reasons"])
    details = {"entry": answer["entry"], "verdict": answer["verdict"]}
    return GuardRefused(f"{kind} refused: {reasons}; nothing was sent", details)


def bug(error: Exception, request_id: str) -> Answer:
    _log.error("request %s: a bug", request_id, exc_info=error)
    if isinstance(error, Bug):
        return problem(error)
    return problem(Bug(f"a bug in trapd: {type(error).__name__}: {error}", {"request_id": request_id}))


async def on_trapd_error(request: Request, error: Exception) -> Response:
    assert isinstance(error, TrapdError)
    return bug(error, request.state.request_id) if isinstance(error, Bug) else problem(error)


async def on_invalid(request: Request, error: Exception) -> Response:
    assert isinstance(error, RequestValidationError)
    mistakes = [_mistake(one) for one in error.errors()[:_MOST_MISTAKES]]
    said = "; ".join(f"{m['at']}: {m['expected']}" + (f", found {m['found']}" if m["found"] else "") for m in mistakes)
    return problem(BadRequest(f"{said}{_consequence(request)}", {"mistakes": mistakes}))


async def on_http_error(request: Request, error: Exception) -> Response:
    assert isinstance(error, HTTPException)
    where = f"{request.method} {request.url.path}"
    if error.status_code == 404:
        return problem(NotFound(f"{where}: there is no such resource; GET /v1/openapi.json lists them"))
    if error.status_code == 400:  # a body so deep or so odd that the parser gave up
        return problem(BadRequest(f"{where}: the body cannot be read as JSON{_consequence(request)}"))
    headers, words = dict(error.headers or {}), error.detail
    if error.status_code == 405:
        # The router knows the methods of the first route of a path only.
        methods = request.app.openapi()["paths"].get(request.url.path)
        headers["Allow"] = ", ".join(methods).upper() if methods else headers["Allow"]
        words = f"there is only {headers['Allow']}"
    message = f"{where}: {words}{_consequence(request)}"
    return problem(BadRequest(message), status=error.status_code, headers=headers)


def _consequence(request: Request) -> str:
    return "" if request.method == "GET" else "; nothing was sent"


def _mistake(error: Mapping[str, Any]) -> dict[str, Any]:
    if error["type"] == "json_invalid":
        return {"at": "the body", "found": None, "expected": f"expected JSON ({error['ctx']['error']})"}
    where: Sequence[Any] = error["loc"]
    inside = [str(part) for part in where if part != "[key]"]
    at = ".".join(inside[1:]) or "the body"
    found = None if error["type"] == "missing" else _short(repr(error.get("input")))
    expected = PATTERNS.get(error.get("ctx", {}).get("pattern", ""), str(error["msg"]))
    return {"at": at, "found": found, "expected": expected.removeprefix("Value error, ")}


def _short(text: str) -> str:
    return text if len(text) <= _LONGEST_FOUND else f"{text[: _LONGEST_FOUND - 1]}…"
