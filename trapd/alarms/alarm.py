"""What is seen, what becomes of it, and what is told about that."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any, Literal

from trapd.alarms.kinds import KINDS, Priority, kind_of
from trapd.errors import Bug

State = Literal["normal", "unacknowledged", "acknowledged", "returned", "shelved", "suppressed"]
"""Those of ISA-18.2 [mem]; "returned" is returned to normal and not acknowledged."""

Happening = Literal[
    "raised", "returned", "acknowledged", "shelved", "unshelved", "suppressed", "unsuppressed", "stale", "gone"
]


@dataclass(frozen=True, kw_only=True)
class Condition:
    """What holds now, from whoever watches: a level, not an event. Raises `Bug` for a kind that there is not."""

    kind: str
    source: str = ""
    message: str

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise Bug(f"no kind of alarm {self.kind!r}; nothing was raised")


@dataclass(frozen=True, kw_only=True)
class Alarm:
    """``message`` and ``since_us`` are of the newest time the condition came, ``raised_us`` of the first (UTC, microseconds);
    ``times`` counts them. ``holds``: it has not returned, delays counted. ``stale``: shown, and older than a day."""

    kind: str
    source: str
    message: str
    priority: Priority
    since_us: int
    raised_us: int
    acknowledged_by: str | None = None
    acknowledged_us: int | None = None
    shelved_by: str | None = None
    shelved_until_us: int | None = None
    shelved_why: str | None = None
    times: int = 1
    holds: bool = True
    suppressed: bool = False
    stale: bool = False

    @property
    def state(self) -> State:
        """Under a shelf the alarm's life goes on; only nobody is told."""
        if self.shelved_by is not None:
            return "shelved"
        if self.acknowledged_by is not None and not self.holds:
            return "normal"
        if self.suppressed:
            return "suppressed"
        if self.acknowledged_by is not None:
            return "acknowledged"
        return "unacknowledged" if self.holds or kind_of(self.kind).latched else "returned"

    @property
    def is_shown(self) -> bool:
        return self.state in ("unacknowledged", "acknowledged", "returned")


@dataclass(frozen=True, kw_only=True)
class Event:
    """What happened to ``alarm``, which is as it is after it, at ``at_us`` (UTC, microseconds), and by whom."""

    what: Happening
    alarm: Alarm
    at_us: int
    who: str = "trapd"
    why: str = ""


def as_data(event: Event) -> dict[str, Any]:
    """JSON-able; the state stands beside the alarm's fields, for readers."""
    return {**asdict(event), "alarm": {**asdict(event.alarm), "state": event.alarm.state}}


def event_of(data: Mapping[str, Any]) -> Event:
    """The event that `as_data` wrote."""
    alarm = {name: value for name, value in data["alarm"].items() if name != "state"}
    return Event(**{**data, "alarm": Alarm(**alarm)})
