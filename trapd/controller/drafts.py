"""What the controller writes down, as drafts of entries. Pure. (Those of a scan are in `scan_drafts`.)"""

from __future__ import annotations

from dataclasses import asdict
from itertools import groupby
from typing import Any

from trapd.errors import Superseded, TrapdError
from trapd.record import Draft, SameCommit
from trapd.setpoint import Contents, Outcome, Ramp, Request, Values, Verdict

DAEMON = "trapd"
"""The author of what the daemon does by itself."""


def request_draft(request: Request) -> Draft:
    data = asdict(request)
    del data["author"]
    return Draft(kind="request", actor=request.author, data=data)


def verdict_draft(request: Request, verdict: Verdict) -> Draft:
    """For the commit in which the request is the first draft."""
    return Draft(kind="verdict", actor=request.author, data={"request": SameCommit(0), **asdict(verdict)})


def ramp_draft(request: Request, ramp: Ramp) -> Draft:
    """The way as its stretches; each step has an intent of its own."""
    values, stretches = dict(ramp.start), []
    for setpoint, group in groupby(ramp.steps, key=lambda step: step.setpoint):
        steps = list(group)
        stretches.append(
            {
                "setpoint": setpoint,
                "from": values[setpoint],
                "to": steps[-1].value,
                "steps": len(steps),
                "duration_s": sum(step.wait_s for step in steps),
            }
        )
        values[setpoint] = steps[-1].value
    data = {
        "request": SameCommit(0),
        "start": dict(ramp.start),
        "target": dict(ramp.target),
        "stretches": stretches,
        "duration_s": ramp.duration_s,
    }
    return Draft(kind="ramp", actor=request.author, data=data)


def contents_draft(contents: Contents, author: str, why: str) -> Draft:
    return Draft(kind="contents", actor=author, data={**asdict(contents), "why": why})


def outcome_draft(author: str, intent: int | SameCommit, outcome: Outcome) -> Draft:
    return Draft(kind="outcome", actor=author, data={"intent": intent, **asdict(outcome)})


def result_draft(
    author: str, request: int | SameCommit, start: Values, end: Values, *, returns: bool, error: TrapdError | None
) -> Draft:
    """The end of a request: "done", "stopped" or "failed". ``returns``: `back` may lead to where it began."""
    state = "done" if error is None else "stopped" if isinstance(error, Superseded) else "failed"
    data: dict[str, Any] = {
        "request": request,
        "state": state,
        "from": dict(start),
        "to": dict(end),
        "returns": returns,
        "error": error and str(error),
        "code": error and error.code,
    }
    return Draft(kind="result", actor=author, data=data)


def unregistered_drafts(request: Request, values: Values, error: TrapdError) -> tuple[Draft, Draft]:
    """A request that ended before it came as far as a verdict."""
    result = result_draft(request.author, SameCommit(0), values, values, returns=False, error=error)
    return request_draft(request), result
