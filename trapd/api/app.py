"""The application: routes of one running service, described at /v1/openapi.json."""

from __future__ import annotations

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from typing import Any

from fastapi import FastAPI
from fastapi.exceptions import RequestValidationError
from starlette.exceptions import HTTPException

from trapd.api import administering, answers, claims, moves, reading, scans
from trapd.api.access import Tokens
from trapd.api.door import Door
from trapd.api.judging import Judging
from trapd.api.service import Service
from trapd.api.stream import Viewers
from trapd.errors import TrapdError
from trapd.record import Reader

_PROBLEMS: dict[int | str, dict[str, Any]] = {
    code: {"model": answers.Problem} for code in (401, 403, 404, 409, 413, 422, 429, "5XX")
}


def build_app(service: Service) -> FastAPI:
    """Raises what reading the record raises. ``app.state.viewers`` is told to end before the server stops."""
    reader = Reader.open(service.record_path)

    @asynccontextmanager
    async def lifespan(_: FastAPI) -> AsyncIterator[None]:
        yield
        reader.close()

    app = FastAPI(
        title="trapd",
        version=service.version,
        openapi_url="/v1/openapi.json",
        docs_url=None,
        redoc_url=None,
        swagger_ui_oauth2_redirect_url=None,
        redirect_slashes=False,
        responses=_PROBLEMS,
        lifespan=lifespan,
        exception_handlers={
            TrapdError: answers.on_trapd_error,
            RequestValidationError: answers.on_invalid,
            HTTPException: answers.on_http_error,
        },
    )
    viewers = Viewers(service.record, reader)
    tokens = Tokens(reader, service.record)
    judging = Judging(service)
    app.state.viewers = viewers
    for router in (
        reading.trap_routes(service, judging),
        judging.router(),
        moves.routes(service.controller),
        scans.routes(service, reader),
        claims.routes(service.controller),
        reading.record_routes(service, reader, viewers),
        administering.routes(tokens),
    ):
        app.include_router(router)
    app.add_middleware(Door, tokens=tokens, host=service.config.server.host)
    return app
