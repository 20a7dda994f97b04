"""Every route, the role it needs, and a body it takes. A test holds this list against the OpenAPI document."""

from __future__ import annotations

from typing import Any, NamedTuple


class Route(NamedTuple):
    method: str
    path: str
    role: str | None
    body: Any = None

    @property
    def url(self) -> str:
        return self.path.replace("{seq}", "1").replace("{name}", "nobody")


WHY = "a test"
PAST = "2020-01-01T00:00:00Z"
"""Refused, but only after the role was found to be enough: the trap of these tests stays everybody's."""

ROUTES = [
    Route("GET", "/v1/health", None),
    Route("GET", "/v1/trap", "read"),
    Route("GET", "/v1/status", "read"),
    Route("POST", "/v1/judge", "read", {"values": {}}),
    Route("POST", "/v1/window", "read", {}),
    Route("POST", "/v1/set", "operate", {"values": {"endcaps": 120.0}, "why": WHY}),
    Route("POST", "/v1/go", "operate", {"point": "work", "why": WHY}),
    Route("POST", "/v1/back", "operate", {"why": WHY}),
    Route("POST", "/v1/on", "operate", {"why": WHY}),
    Route("POST", "/v1/empty", "operate", {"why": WHY}),
    Route("POST", "/v1/ions", "operate", {"presence": "none", "why": WHY}),
    Route("POST", "/v1/off", "operate", {}),
    Route("POST", "/v1/stop", "operate", {}),
    Route("POST", "/v1/scans", "operate", {"scan": "nowhere"}),
    Route("GET", "/v1/scans", "read"),
    Route("GET", "/v1/scans/{seq}", "read"),
    Route("GET", "/v1/frequencies", "read"),
    Route("GET", "/v1/due", "read"),
    Route("POST", "/v1/claim", "operate", {"why": WHY, "until": PAST}),
    Route("POST", "/v1/clear", "operate", {"interlock": "nowhere", "why": WHY}),
    Route("POST", "/v1/release", "operate", {}),
    Route("POST", "/v1/pause", "operate", {"why": WHY, "until": PAST}),
    Route("POST", "/v1/resume", "operate", {}),
    Route("GET", "/v1/entries", "read"),
    Route("GET", "/v1/entries/{seq}", "read"),
    Route("GET", "/v1/setpoints", "read"),
    Route("GET", "/v1/state", "read"),
    Route("GET", "/v1/stream", "read"),
    Route("GET", "/v1/verify", "read"),
    Route("GET", "/v1/tokens", "administer"),
    Route("POST", "/v1/tokens", "administer", {"name": "nobody", "role": "read"}),
    Route("DELETE", "/v1/tokens/{name}", "administer"),
]
GUARDED = [route for route in ROUTES if route.role is not None]
WITH_BODY = [route for route in ROUTES if route.body is not None]


def named(route: Route) -> str:
    return f"{route.method} {route.path}"
