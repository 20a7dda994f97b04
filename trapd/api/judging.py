"""Verdicts and windows that nobody's move depends on: /v1/judge, /v1/window, and that of the present state."""

from __future__ import annotations

import asyncio
import logging
import threading
from collections.abc import Callable, Mapping
from typing import Any, TypeVar

from fastapi import APIRouter

from trapd.api.access import Reading
from trapd.api.answers import Answer, plain
from trapd.api.bodies import JudgeBody, WindowBody
from trapd.api.service import Service
from trapd.controller import Situation
from trapd.errors import BadRequest, InstrumentUnreachable, NotFound, QueueFull
from trapd.guard.contents import watched
from trapd.guard.limits import realised
from trapd.guard.verdict import judge, judge_move
from trapd.guard.window import window
from trapd.setpoint import Contents, Ramp, Values, Verdict

MOST_WAITING = 32
"""Verdicts and windows that may be asked for at a time; one more is answered 429."""

T = TypeVar("T")

_log = logging.getLogger("trapd.api")


class Judging:
    """Asks the guard beside the controller, off the event loop, and sends nothing."""

    def __init__(self, service: Service) -> None:
        self._service = service
        self._waiting = 0
        self._door = threading.Lock()
        self._present: tuple[Values, Contents, Verdict | None] | None = None

    def router(self) -> APIRouter:
        router = APIRouter(tags=["judge"])
        router.post("/v1/judge", summary="The verdict on a state, or on the way to it; nothing is sent")(self._judge)
        router.post("/v1/window", summary="All stable and all allowed values of each setpoint")(self._window)
        return router

    def present(self, situation: Situation) -> Verdict | None:
        """The verdict on the present state for what is in the trap; None while a value is not known, or if it
        cannot be computed. Blocks."""
        if set(situation.values) != set(self._service.model.limits):
            return None
        with self._door:
            known = self._present
            if known is None or known[:2] != (situation.values, situation.contents):
                known = self._present = (situation.values, situation.contents, self._verdict(situation))
            return known[2]

    def _verdict(self, situation: Situation) -> Verdict | None:
        try:
            return judge(self._service.model, situation.contents, situation.values)
        except Exception:  # whatever is wrong with the guard must not hide the state of the trap
            _log.exception("no verdict on the present state: %s", situation)
            return None

    async def _judge(self, body: JudgeBody, caller: Reading) -> Answer:
        target, contents = self._state(body.values), self._contents(body.ions)
        model = self._service.model
        if body.from_ is None:
            return Answer(await self._ask(lambda: judge(model, contents, target)))
        start = self._state(body.from_)
        verdict, ramp = await self._ask(lambda: judge_move(model, contents, start, target))
        return Answer({**plain(verdict), **_length(ramp)})

    async def _window(self, body: WindowBody, caller: Reading) -> Answer:
        values, contents = self._state(body.values), self._contents(body.ions)
        model = self._service.model
        who = watched(model, contents)
        return Answer(await self._ask(lambda: window(model, who.enforced + who.incoming, values)))

    async def _ask(self, question: Callable[[], T]) -> T:
        if self._waiting >= MOST_WAITING:
            raise QueueFull(f"{MOST_WAITING} verdicts are asked for already; nothing was judged")
        self._waiting += 1
        try:
            return await asyncio.get_running_loop().run_in_executor(self._service.judges, question)
        finally:
            self._waiting -= 1

    def _state(self, asked: Values) -> dict[str, float]:
        """The present state with ``asked`` in it, as the instruments will really take it."""
        limits = self._service.model.limits
        unknown = [name for name in asked if name not in limits]
        if unknown:
            raise BadRequest(f"no setpoint {unknown[0]!r}; there are: {', '.join(limits)}; nothing was judged")
        values = {**self._service.controller.situation.values, **asked}
        missing = [name for name in limits if name not in values]
        if missing:
            raise InstrumentUnreachable(
                f"the present {missing[0]} is not known, its instrument does not answer; name its value; "
                "nothing was judged"
            )
        return realised(self._service.model, values)

    def _contents(self, ions: Mapping[str, int] | None) -> Contents:
        if ions is None:
            return self._service.controller.situation.contents
        catalogue = self._service.model.catalogue
        for name in ions:
            if name not in catalogue:
                raise NotFound(
                    f"{name!r} is not in the trap file's [[species]]; there are: {', '.join(catalogue)}; "
                    "nothing was judged"
                )
        return Contents(presence="held" if ions else "none", ions=ions)


def _length(ramp: Ramp | None) -> dict[str, Any]:
    return {"steps": ramp and len(ramp.steps), "duration_s": ramp and ramp.duration_s}
