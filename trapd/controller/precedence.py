"""Whose request goes first: claims, scans that give way, and scans that do not. Pure."""

from __future__ import annotations

from trapd.controller.situation import Claim, SchedulePause
from trapd.errors import Conflict
from trapd.setpoint import Request

_OVER_CLAIMS = ("claim", "set", "go", "back", "on", "empty", "ions", "scan")
"""What somebody else's claim keeps from happening; a pause and a release answer for themselves."""


def claimed_by_another(claim: Claim | None, request: Request) -> Conflict | None:
    """Why ``request`` may not begin under ``claim``, if so."""
    if claim is None or request.interrupt or claim.who == request.author or request.kind not in _OVER_CLAIMS:
        return None
    return Conflict(
        f"{request.kind}: {claim.who} claims the trap ({claim.why}); --interrupt goes ahead all the same; nothing was sent"
    )


def paused(pause: SchedulePause | None, request: Request) -> Conflict | None:
    """Why what the schedule asks may not begin, if so."""
    if pause is None or request.due is None:
        return None
    return Conflict(f"{request.kind}: {pause.who} paused the schedule ({pause.why}); nothing was sent")


def gives_way(running: Request | None, request: Request) -> bool:
    """Whether the scan that runs ends for ``request``: one of the schedule for a person, one of a person for themselves."""
    if running is None or running.kind != "scan" or request.due is not None:
        return False
    return running.due is not None or request.interrupt or running.author == request.author


def require_free(running: Request | None, request: Request) -> None:
    """`Conflict`: another person's scan is not stopped by accident. (A due run just waits its turn.)"""
    if running is None or running.kind != "scan" or request.due is not None or gives_way(running, request):
        return
    raise Conflict(
        f"{request.kind}: {running.author} is scanning {running.scan} ({running.why or 'no reason given'}); "
        "--interrupt stops that; nothing was sent"
    )
