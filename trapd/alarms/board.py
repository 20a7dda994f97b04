"""The board of alarms: a value that time, conditions and people turn into the next one, and the events of each turn.

Everything that happens to an alarm is an event which carries the whole alarm, so the events alone give the board again
after a restart. Only delays that were running begin anew.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from functools import reduce
from typing import Any

from trapd.alarms.alarm import Alarm as Alarm
from trapd.alarms.alarm import Condition as Condition
from trapd.alarms.alarm import Event as Event
from trapd.alarms.alarm import Happening, event_of
from trapd.alarms.alarm import as_data as as_data
from trapd.alarms.kinds import kind_of
from trapd.errors import BadRequest, Conflict, NotFound
from trapd.setpoint import Presence

FLOOD_PER_10_MIN = 10
"""More than this is a flood (ISA-18.2 [mem])."""

STALE_US = 24 * 3_600_000_000
"""An alarm shown for longer than this is stale (ISA-18.2 [mem])."""

_WINDOW_US = 600_000_000
_ORDER = ("high", "medium", "low")
Key = tuple[str, str]


@dataclass(frozen=True, kw_only=True)
class Board:
    """``alarms`` by kind and source. ``pending``: since when (s, monotonic; UTC us) a condition is other than its alarm says.
    ``shown_us``: when people were told of an alarm, for the rate."""

    alarms: Mapping[Key, Alarm] = field(default_factory=dict)
    pending: Mapping[Key, tuple[float, int]] = field(default_factory=dict)
    shown_us: tuple[int, ...] = ()


Turn = tuple[Board, tuple[Event, ...]]


def step(board: Board, conditions: Collection[Condition], presence: Presence, now_s: float, now_us: int) -> Turn:
    """What holds now, all of it: what is not among ``conditions`` is away, and their order means nothing. ``now_s`` is
    monotonic, for the delays; ``now_us`` is UTC, for shelves and for what is told."""
    named = sorted(conditions, key=lambda one: one.message)
    found = {(one.kind, one.source): one for one in named if presence not in kind_of(one.kind).suppressed_in}
    keys = sorted(board.alarms.keys() | found.keys())
    changed = [key for key in keys if (key in found) != (key in board.alarms and board.alarms[key].holds)]
    pending = {key: board.pending.get(key, (now_s, now_us)) for key in changed}
    ripe = {key: since for key, since in pending.items() if now_s - since[0] >= _delay_s(key[0], key in found)}
    told: list[Event] = []
    for key in keys:
        told += _life(board.alarms.get(key), found.get(key), ripe.get(key), presence, now_us)
    left = {key: since for key, since in pending.items() if key not in ripe}
    return _tell(replace(board, pending=left), *told)


def acknowledge(board: Board, kind: str, source: str, who: str, now_us: int) -> Turn:
    """Somebody has seen it. Raises `NotFound`, `BadRequest` without a name, `Conflict` if somebody did before."""
    alarm = _find(board, kind, source, who=who)
    if alarm.acknowledged_by is not None:
        raise Conflict(f"{alarm.acknowledged_by} acknowledged {_words(kind, source)} before; nothing was changed")
    seen = replace(alarm, acknowledged_by=who, acknowledged_us=now_us)
    return _end(board, Event(what="acknowledged", alarm=seen, at_us=now_us, who=who))


def shelve(board: Board, kind: str, source: str, who: str, why: str, until_us: int, now_us: int) -> Turn:
    """Nobody is told of it until ``until_us`` (UTC). Raises `NotFound`, `BadRequest` without a name, a reason or time left,
    `Conflict` if it is shelved."""
    alarm = _find(board, kind, source, who=who, why=why)
    if until_us <= now_us:
        raise BadRequest("a shelf ends later than now, and this one would be over already; nothing was changed")
    if alarm.shelved_by is not None:
        raise Conflict(f"{alarm.shelved_by} shelved {_words(kind, source)} ({alarm.shelved_why}); nothing was changed")
    put = replace(alarm, shelved_by=who, shelved_until_us=until_us, shelved_why=why)
    return _end(board, Event(what="shelved", alarm=put, at_us=now_us, who=who, why=why))


def unshelve(board: Board, kind: str, source: str, who: str, now_us: int) -> Turn:
    """End a shelf before its time. Raises `NotFound`, `BadRequest` without a name, `Conflict` if it is not shelved."""
    alarm = _find(board, kind, source, who=who)
    if alarm.shelved_by is None:
        raise Conflict(f"{_words(kind, source)} is {alarm.state}, not shelved; nothing was changed")
    return _end(board, Event(what="unshelved", alarm=_unshelved(alarm), at_us=now_us, who=who))


def active(board: Board) -> tuple[Alarm, ...]:
    """What people are shown, the highest priority first, then the oldest; nothing shelved or suppressed."""
    shown = (alarm for alarm in board.alarms.values() if alarm.is_shown)
    return tuple(sorted(shown, key=lambda one: (_ORDER.index(one.priority), one.raised_us, one.kind, one.source)))


def rate_per_10_min(board: Board, now_us: int) -> int:
    """How many alarms came in the last 10 minutes, those under a shelf not counted."""
    return sum(now_us - _WINDOW_US < at_us <= now_us for at_us in board.shown_us)


def from_data(events: Iterable[Mapping[str, Any]]) -> Board:
    """The board after these events of `as_data`, the oldest first."""
    return reduce(_after, map(event_of, events), Board())


def _life(
    alarm: Alarm | None, found: Condition | None, since: tuple[float, int] | None, presence: Presence, now_us: int
) -> Iterator[Event]:
    """What happens to one alarm in one step. ``since``: its condition came or went then, and the delay is over."""
    for event in _hiding(alarm, presence, now_us) if alarm else ():
        alarm = event.alarm
        yield event
    if since and found:
        alarm = _raised(alarm, found, since[1], now_us)
        yield Event(what="raised", alarm=alarm, at_us=now_us)
    elif since and alarm:
        alarm = replace(alarm, holds=False)
        yield Event(what="returned", alarm=alarm, at_us=now_us)
    if alarm and alarm.state == "normal":
        yield Event(what="gone", alarm=alarm, at_us=now_us)
    elif alarm and alarm.is_shown and not alarm.stale and now_us - alarm.raised_us > STALE_US:
        yield Event(what="stale", alarm=replace(alarm, stale=True), at_us=now_us)


def _hiding(alarm: Alarm, presence: Presence, now_us: int) -> Iterator[Event]:
    """Whether the trap's contents suppress it, and the end of its shelf."""
    suppressed = presence in kind_of(alarm.kind).suppressed_in
    if alarm.suppressed != suppressed:
        alarm = replace(alarm, suppressed=suppressed)
        what: Happening = "suppressed" if suppressed else "unsuppressed"
        yield Event(what=what, alarm=alarm, at_us=now_us, why=f"contents: {presence}")
    if alarm.shelved_until_us is not None and now_us >= alarm.shelved_until_us:
        yield Event(what="unshelved", alarm=_unshelved(alarm), at_us=now_us, why="its time is over")


def _raised(alarm: Alarm | None, found: Condition, since_us: int, now_us: int) -> Alarm:
    """One that is still on the board comes once more, and wants to be acknowledged again."""
    new = Alarm(
        kind=found.kind,
        source=found.source,
        message=found.message,
        priority=kind_of(found.kind).priority,
        since_us=since_us,
        raised_us=now_us,
    )
    if alarm is None:
        return new
    again = replace(alarm, message=found.message, since_us=since_us, times=alarm.times + 1, holds=True)
    return replace(again, acknowledged_by=None, acknowledged_us=None)


def _unshelved(alarm: Alarm) -> Alarm:
    return replace(alarm, shelved_by=None, shelved_until_us=None, shelved_why=None)


def _end(board: Board, event: Event) -> Turn:
    """What a person did, and the end of the alarm if that was the last thing it waited for."""
    gone = (replace(event, what="gone", why=""),) if event.alarm.state == "normal" else ()
    return _tell(board, event, *gone)


def _tell(board: Board, *events: Event) -> Turn:
    return reduce(_after, events, board), events


def _after(board: Board, event: Event) -> Board:
    """The only way in which an alarm on a board changes."""
    key = event.alarm.kind, event.alarm.source
    alarms = {other: alarm for other, alarm in board.alarms.items() if other != key}
    if event.what != "gone":
        alarms[key] = event.alarm
    shown_us = board.shown_us
    if event.what == "raised" and event.alarm.is_shown:
        shown_us = (*(at_us for at_us in shown_us if at_us > event.at_us - _WINDOW_US), event.at_us)
    return replace(board, alarms=alarms, shown_us=shown_us)


def _delay_s(kind: str, came: bool) -> float:
    return kind_of(kind).on_delay_s if came else kind_of(kind).off_delay_s


def _find(board: Board, kind: str, source: str, **given: str) -> Alarm:
    alarm = board.alarms.get((kind, source))
    if alarm is None:
        there_are = ", ".join(_words(*key) for key in sorted(board.alarms)) or "none"
        raise NotFound(f"no alarm {_words(kind, source)!r}; there are: {there_are}; nothing was changed")
    missing = [name for name, value in given.items() if not value.strip()]
    if missing:
        raise BadRequest(f"{' and '.join(missing)} must be given; nothing was changed")
    return alarm


def _words(kind: str, source: str) -> str:
    return f"{kind} {source}".strip()
