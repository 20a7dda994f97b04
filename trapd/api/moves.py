"""What changes the trap: a request for the controller, and its answer."""

from __future__ import annotations

import asyncio
from typing import Annotated, Literal

from fastapi import APIRouter, Body
from fastapi import Request as HttpRequest

from trapd.api.access import Caller, Operating
from trapd.api.answers import Answer, refused
from trapd.api.bodies import BackBody, EmptyBody, GoBody, IonsBody, OffBody, OnBody, SetBody
from trapd.controller import Controller
from trapd.setpoint import Request

_NOTHING_SAID = Body(default_factory=OffBody)

GONE_S = 0.25
"""How often a request that waits its turn is asked whether anybody still waits for it."""


def routes(controller: Controller) -> APIRouter:
    """A move is answered 202 once request and verdict are on the disk; its end is an entry of kind "result"."""
    router = APIRouter(tags=["moves"])

    @router.post("/v1/set", status_code=202, summary="Move setpoints to values")
    async def set_(body: SetBody, caller: Operating, http: HttpRequest) -> Answer:
        return await _move(controller, http, Request(kind="set", author=caller.name, why=body.why, values=body.values))

    @router.post("/v1/go", status_code=202, summary="Move to a named point")
    async def go(body: GoBody, caller: Operating, http: HttpRequest) -> Answer:
        return await _move(controller, http, Request(kind="go", author=caller.name, why=body.why, point=body.point))

    @router.post("/v1/back", status_code=202, summary="Move to the state before the last completed move")
    async def back(body: BackBody, caller: Operating, http: HttpRequest) -> Answer:
        return await _move(controller, http, Request(kind="back", author=caller.name, why=body.why))

    @router.post("/v1/on", status_code=202, summary="Switch an empty trap on and ramp it to a point")
    async def on(body: OnBody, caller: Operating, http: HttpRequest) -> Answer:
        return await _move(controller, http, Request(kind="on", author=caller.name, why=body.why, point=body.point))

    @router.post("/v1/empty", status_code=202, summary="Let go of every ion: RF off, then back")
    async def empty(body: EmptyBody, caller: Operating, http: HttpRequest) -> Answer:
        request = Request(kind="empty", author=caller.name, why=body.why, point=body.point, stay_off=body.stay_off)
        return await _move(controller, http, request)

    @router.post("/v1/ions", summary="Say what is in the trap")
    async def ions(body: IonsBody, caller: Operating, http: HttpRequest) -> Answer:
        request = Request(kind="ions", author=caller.name, why=body.why, contents=body.contents)
        return await _move(controller, http, request, status=200)

    @router.post("/v1/off", summary="Everything off, now; written down afterwards")
    async def off(caller: Operating, body: Annotated[OffBody, _NOTHING_SAID]) -> Answer:
        return await _ended(controller, "off", caller, body.why)

    @router.post("/v1/stop", summary="Stop the move in progress where it is; the outputs hold")
    async def stop(caller: Operating, body: Annotated[OffBody, _NOTHING_SAID]) -> Answer:
        return await _ended(controller, "stop", caller, body.why)

    return router


async def _move(controller: Controller, http: HttpRequest, request: Request, status: int = 202) -> Answer:
    ticket = controller.submit(request)
    recorded = asyncio.wrap_future(ticket.recorded)
    while not (await asyncio.wait({recorded}, timeout=GONE_S))[0]:
        if await http.is_disconnected():
            controller.withdraw(ticket)
    answer = await recorded
    if not answer["accepted"]:
        raise refused(request.kind, answer)
    return Answer(answer, status_code=status)


async def _ended(controller: Controller, kind: Literal["off", "stop"], caller: Caller, why: str) -> Answer:
    ticket = controller.submit(Request(kind=kind, author=caller.name, why=why))
    return Answer(await asyncio.wrap_future(ticket.done))
