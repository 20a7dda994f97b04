"""Who keeps the trap for themselves, and when the schedule rests. Data, not locks: `off` goes over both."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Body

from trapd.api.access import Operating
from trapd.api.answers import Answer
from trapd.api.bodies import ClaimBody, ClearBody, PauseBody, ReleaseBody, ResumeBody
from trapd.api.moves import done
from trapd.controller import Controller
from trapd.setpoint import Request

_RELEASE = Body(default_factory=ReleaseBody)
_RESUME = Body(default_factory=ResumeBody)


def routes(controller: Controller) -> APIRouter:
    router = APIRouter(tags=["claims"])

    @router.post("/v1/claim", summary="Keep the trap for yourself: others are refused, the schedule waits")
    async def claim(body: ClaimBody, caller: Operating) -> Answer:
        claim = Request(kind="claim", author=caller.name, why=body.why, until_us=body.until, interrupt=body.interrupt)
        return await done(controller, claim)

    @router.post("/v1/clear", summary="Clear an interlock that has tripped")
    async def clear(body: ClearBody, caller: Operating) -> Answer:
        cleared = Request(kind="clear", author=caller.name, why=body.why, interlock=body.interlock)
        return await done(controller, cleared)

    @router.post("/v1/release", summary="End a claim")
    async def release(caller: Operating, body: Annotated[ReleaseBody, _RELEASE]) -> Answer:
        request = Request(kind="release", author=caller.name, why=body.why, interrupt=body.interrupt)
        return await done(controller, request)

    @router.post("/v1/pause", summary="Nothing of the schedule runs until a time")
    async def pause(body: PauseBody, caller: Operating) -> Answer:
        return await done(controller, Request(kind="pause", author=caller.name, why=body.why, until_us=body.until))

    @router.post("/v1/resume", summary="The schedule goes on")
    async def resume(caller: Operating, body: Annotated[ResumeBody, _RESUME]) -> Answer:
        return await done(controller, Request(kind="resume", author=caller.name, why=body.why))

    return router
