"""What may be known: the trap, its present situation, and the record. Blocking reads run on a thread of their own."""

from __future__ import annotations

import asyncio
import threading
from typing import Annotated, Any

from fastapi import APIRouter, Header, Query
from starlette.responses import StreamingResponse

from trapd.api import answers
from trapd.api.access import Reading
from trapd.api.answers import Answer
from trapd.api.bodies import AskedEntries, AskedSetpoints, AskedState, AskedStream, AskedVerify, Seq
from trapd.api.frequencies import Frequencies
from trapd.api.judging import Judging
from trapd.api.service import Service, upcoming
from trapd.api.stream import Viewers
from trapd.errors import Conflict
from trapd.guard.rules import RULES
from trapd.record import Reader, verify
from trapd.setpoint import unit_of


def trap_routes(service: Service, judging: Judging) -> APIRouter:
    router = APIRouter(tags=["trap"])
    frequencies = Frequencies(service.model, tuple(service.config.scans.values()))

    @router.get("/v1/health", summary="Whether the service lives, and is ready to move the trap; no token")
    async def health() -> Answer:
        situation = service.controller.situation
        known = set(situation.values) == set(service.model.limits)
        ready = known and not (situation.unreachable or situation.unwritten or situation.off_pending)
        return Answer({"live": True, "ready": ready})

    @router.get("/v1/trap", summary="What the trap file says")
    async def trap(caller: Reading) -> Answer:
        return Answer(describe(service))

    @router.get("/v1/status", summary="The present situation, and the verdict on it")
    async def status(caller: Reading) -> Answer:
        situation = service.controller.situation
        # Not on the pool of those who read the record: a dead disk must not hide the state of the trap.
        verdict = await asyncio.to_thread(judging.present, situation)
        compared = await asyncio.to_thread(frequencies.compared, situation)
        return Answer(
            {
                "name": service.config.trap.name,
                "situation": situation,
                "verdict": verdict,
                "frequencies": compared,
                "upcoming": upcoming(service),
                "record": {"last_seq": service.record.last_seq, "head": service.record.head},
                "version": service.version,
                "simulated": service.simulated,
            }
        )

    return router


def describe(service: Service) -> dict[str, Any]:
    """The body of /v1/trap."""
    config = service.config
    return {
        "name": config.trap.name,
        "geometry": config.trap.geometry,
        "setpoints": {
            name: {
                "unit": unit_of(name),
                "low": limit.low,
                "high": limit.high,
                "slew_per_s": limit.slew_per_s,
                "step": limit.step,
            }
            for name, limit in service.model.limits.items()
        },
        "species": {name: answers.plain(one) for name, one in service.model.catalogue.items()},
        "points": config.points,
        "scans": config.scans,
        "schedule": config.schedule,
        "rules": RULES,
        "simulated": service.simulated,
    }


def record_routes(service: Service, reader: Reader, viewers: Viewers) -> APIRouter:
    router = APIRouter(tags=["record"])
    verifying = threading.Lock()

    @router.get("/v1/entries", summary="Entries of the record, the newest last")
    def entries(caller: Reading, asked: Annotated[AskedEntries, Query()]) -> Answer:
        found = reader.entries(**asked.as_question())
        return Answer({"entries": [answers.entry(one) for one in found], "last_seq": service.record.last_seq})

    @router.get("/v1/entries/{seq}", summary="One entry of the record")
    def entry(caller: Reading, seq: Seq) -> Answer:
        return Answer(answers.entry(reader.entry(seq)))

    @router.get("/v1/setpoints", summary="What was sent and what came of it, the newest last")
    def setpoints(caller: Reading, asked: Annotated[AskedSetpoints, Query()]) -> Answer:
        found = reader.setpoints(**asked.as_question())
        return Answer({"setpoints": [answers.commanded(one) for one in found]})

    @router.get("/v1/state", summary="What had been commanded by an entry or by a time")
    def state(caller: Reading, asked: Annotated[AskedState, Query()]) -> Answer:
        found = reader.state_at(**(asked.at or {}))
        return Answer(
            {
                "seq": found.seq,
                "setpoints": {name: answers.commanded(one) for name, one in found.setpoints.items()},
                "outputs": {name: answers.commanded(one) for name, one in found.outputs.items()},
                "contents": found.contents and answers.entry(found.contents),
            }
        )

    @router.get("/v1/stream", summary="Entries as they come: server-sent events, resumable by id")
    async def stream(
        caller: Reading,
        asked: Annotated[AskedStream, Query()],
        last_event_id: Annotated[Seq | None, Header()] = None,
    ) -> StreamingResponse:
        after = asked.after if last_event_id is None else last_event_id
        return StreamingResponse(viewers.open(after), media_type="text/event-stream")

    @router.get("/v1/verify", summary="Prove the record: chain, columns, typed rows")
    def verified(caller: Reading, asked: Annotated[AskedVerify, Query()]) -> Answer:
        if not verifying.acquire(blocking=False):
            raise Conflict("the record is being verified for somebody else; ask again in a while")
        try:
            report = verify(service.record_path, head=asked.head)
        finally:
            verifying.release()
        return Answer(report)

    return router
