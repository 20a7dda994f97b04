"""Scans: begun here, and what came of them; the frequencies they measured, and what the schedule did."""

from __future__ import annotations

from typing import Annotated, Any

from fastapi import APIRouter, Query
from fastapi import Request as HttpRequest

from trapd.api.access import Operating, Reading
from trapd.api.answers import Answer, entry, plain, timed
from trapd.api.bodies import AskedDue, AskedFrequencies, AskedScans, ScanBody, Seq
from trapd.api.moves import begun
from trapd.api.service import Service, upcoming
from trapd.errors import NotFound
from trapd.record import Entry, Reader
from trapd.setpoint import Request

_MANY = 1000


def routes(service: Service, reader: Reader) -> APIRouter:
    """A scan is answered 202 once it begins; how it ended is an entry of kind "finding", and its "result" as for a move."""
    router = APIRouter(tags=["scans"])

    @router.post("/v1/scans", status_code=202, summary="Measure a secular frequency now")
    async def scan(body: ScanBody, caller: Operating, http: HttpRequest) -> Answer:
        request = Request(kind="scan", author=caller.name, why=body.why, scan=body.scan, interrupt=body.interrupt)
        return await begun(service.controller, http, request)

    @router.get("/v1/scans", summary="The scans of the trap file, each with its newest finding; and those made")
    def scans(caller: Reading, asked: Annotated[AskedScans, Query()]) -> Answer:
        newest = {one.data["scan"]: one for one in reader.entries(kind="finding", newest=True, limit=_MANY)}
        listed = [{**plain(one), "finding": _data(newest.get(name))} for name, one in service.config.scans.items()]
        made = reader.scans(**asked.as_question())
        return Answer({"scans": listed, "made": [timed(one, one.time_us) for one in made]})

    @router.get("/v1/scans/{seq}", summary="One scan by the entry of its request: plan, points, estimate, finding")
    def told(caller: Reading, seq: Seq) -> Answer:
        return Answer(_told(reader, seq))

    @router.get("/v1/frequencies", summary="The secular frequencies that were measured, the newest last")
    def frequencies(caller: Reading, asked: Annotated[AskedFrequencies, Query()]) -> Answer:
        found = reader.secular_frequencies(**asked.as_question())
        return Answer({"frequencies": [timed(one, one.at_us) for one in found]})

    @router.get("/v1/due", summary="What the schedule did, the newest last; and what it does next")
    def due(caller: Reading, asked: Annotated[AskedDue, Query()]) -> Answer:
        found = reader.due_runs(**asked.as_question())
        return Answer({"due": [timed(one, one.due_us) for one in found], "upcoming": upcoming(service)})

    return router


def _told(reader: Reader, seq: int) -> dict[str, Any]:
    """The body of /v1/scans/{seq}. Raises `NotFound`."""
    request = reader.entry(seq)
    if request.kind != "request" or request.data["kind"] != "scan":
        raise NotFound(f"entry {seq} is no request for a scan; GET /v1/entries/{seq} shows what it is")
    return {
        "request": entry(request),
        "plan": _data(_last_of(reader, request, "plan")),
        "points": reader.scan_points(seq),
        "estimate": _data(_last_of(reader, request, "estimate")),
        "finding": _data(_last_of(reader, request, "finding")),
        "result": _data(_last_of(reader, request, "result")),
    }


def _last_of(reader: Reader, request: Entry, kind: str) -> Entry | None:
    """The newest entry of this kind that belongs to the request; it stands among the first ones that follow."""
    found = reader.entries(kind=kind, after=request.seq, limit=_MANY)
    return next((one for one in reversed(found) if one.data["request"] == request.seq), None)


def _data(one: Entry | None) -> dict[str, Any] | None:
    return None if one is None else {"seq": one.seq, "time": one.time, **plain(one.data)}
