"""What changes the trap: a request for the controller, and its answer."""

from __future__ import annotations

import asyncio
from typing import Annotated, Any

from fastapi import APIRouter, Body
from fastapi import Request as HttpRequest

from trapd.api.access import Caller, Operating
from trapd.api.answers import Answer, refused
from trapd.api.bodies import EmptyBody, GoBody, IonsBody, MoveBody, OffBody, OnBody, SetBody
from trapd.controller import Controller
from trapd.setpoint import Request, RequestKind

_NOTHING_SAID = Body(default_factory=OffBody)

GONE_S = 0.25
"""How often a request that waits its turn is asked whether anybody still waits for it."""


def routes(controller: Controller) -> APIRouter:
    """A move is answered 202 once request and verdict are on the disk; its end is an entry of kind "result"."""
    router = APIRouter(tags=["moves"])

    @router.post("/v1/set", status_code=202, summary="Move setpoints to values")
    async def set_(body: SetBody, caller: Operating, http: HttpRequest) -> Answer:
        return await begun(controller, http, _asked("set", body, caller, values=body.values))

    @router.post("/v1/go", status_code=202, summary="Move to a named point")
    async def go(body: GoBody, caller: Operating, http: HttpRequest) -> Answer:
        return await begun(controller, http, _asked("go", body, caller, point=body.point))

    @router.post("/v1/back", status_code=202, summary="Move to the state before the last completed move")
    async def back(body: MoveBody, caller: Operating, http: HttpRequest) -> Answer:
        return await begun(controller, http, _asked("back", body, caller))

    @router.post("/v1/on", status_code=202, summary="Switch an empty trap on and ramp it to a point")
    async def on(body: OnBody, caller: Operating, http: HttpRequest) -> Answer:
        return await begun(controller, http, _asked("on", body, caller, point=body.point))

    @router.post("/v1/empty", status_code=202, summary="Let go of every ion: RF off, then back")
    async def empty(body: EmptyBody, caller: Operating, http: HttpRequest) -> Answer:
        return await begun(controller, http, _asked("empty", body, caller, point=body.point, stay_off=body.stay_off))

    @router.post("/v1/ions", summary="Say what is in the trap")
    async def ions(body: IonsBody, caller: Operating, http: HttpRequest) -> Answer:
        return await begun(controller, http, _asked("ions", body, caller, contents=body.contents), status=200)

    @router.post("/v1/off", summary="Everything off, now; written down afterwards")
    async def off(caller: Operating, body: Annotated[OffBody, _NOTHING_SAID]) -> Answer:
        return await done(controller, Request(kind="off", author=caller.name, why=body.why))

    @router.post("/v1/stop", summary="Stop the move or scan in progress where it is; the outputs hold")
    async def stop(caller: Operating, body: Annotated[OffBody, _NOTHING_SAID]) -> Answer:
        return await done(controller, Request(kind="stop", author=caller.name, why=body.why))

    return router


def _asked(kind: RequestKind, body: MoveBody, caller: Caller, **what: Any) -> Request:
    return Request(kind=kind, author=caller.name, why=body.why, interrupt=body.interrupt, **what)


async def begun(controller: Controller, http: HttpRequest, request: Request, status: int = 202) -> Answer:
    """The answer to a request once it begins; it is withdrawn if nobody waits for it any more."""
    ticket = controller.submit(request)
    recorded = asyncio.wrap_future(ticket.recorded)
    while not (await asyncio.wait({recorded}, timeout=GONE_S))[0]:
        if await http.is_disconnected():
            controller.withdraw(ticket)
    answer = await recorded
    if not answer["accepted"]:
        raise refused(request.kind, answer)
    return Answer(answer, status_code=status)


async def done(controller: Controller, request: Request) -> Answer:
    """The answer to a request that waits behind nothing, once it is done."""
    return Answer(await asyncio.wrap_future(controller.submit(request).done))
