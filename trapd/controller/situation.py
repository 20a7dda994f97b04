"""What the controller knows at one moment; a new frozen copy for every change, so that anyone may read it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from trapd.guard.interlock import InterlockState
from trapd.setpoint import Contents, Due, Values


@dataclass(frozen=True, kw_only=True)
class Moving:
    """A move in progress: the entry of its request, the setpoint on the move, and how far it is."""

    request: int
    author: str
    setpoint: str
    step: int
    steps: int


@dataclass(frozen=True, kw_only=True)
class Scanning:
    """A scan in progress: the entry of its request, what it measures, and how far it is.

    ``predicted_hz``: where the mode is expected at the present setpoints; ``due`` as in the request.
    """

    request: int
    author: str
    scan: str
    species: str
    mode: str
    low_hz: float
    high_hz: float
    predicted_hz: float
    pass_number: int
    passes: int
    point: int
    points: int
    due: Due | None = None


@dataclass(frozen=True, kw_only=True)
class Claim:
    """Somebody keeps the trap for themselves: others need ``interrupt``, the schedule waits. ``until_us`` None: no end."""

    entry: int
    who: str
    why: str
    until_us: int | None = None


@dataclass(frozen=True, kw_only=True)
class SchedulePause:
    """Nothing of the schedule runs before ``until_us`` (UTC, microseconds)."""

    entry: int
    who: str
    why: str
    until_us: int


@dataclass(frozen=True, kw_only=True)
class Measured:
    """The newest measurement of one secular frequency, and the setpoints at which it was made."""

    entry: int
    scan: str
    species: str
    mode: str
    frequency_hz: float
    uncertainty_hz: float
    predicted_hz: float
    predicted_uncertainty_hz: float
    at_us: int
    values: Values


@dataclass(frozen=True, kw_only=True)
class Situation:
    """The present state of the trap as far as it is known.

    ``values``: what stands at the electrodes as last verified, 0 where an output is off. ``outputs``: by output name.
    ``previous``: the state before the last completed move. ``unreachable``: instruments that do not answer, and why.
    ``off_pending``: instruments on which `off` is not confirmed yet. ``doubt``: something differs from the last
    command or was not confirmed, in words; empty when nothing does. ``unwritten``: entries that wait for the record.
    ``measured``: by scan name. ``tickling``: whether the tickle's output is on, as far as is known.
    """

    values: Values
    outputs: Mapping[str, bool]
    contents: Contents
    previous: Values | None = None
    moving: Moving | None = None
    unreachable: Mapping[str, str] = field(default_factory=dict)
    off_pending: tuple[str, ...] = ()
    doubt: tuple[str, ...] = ()
    unwritten: int = 0
    scanning: Scanning | None = None
    claim: Claim | None = None
    pause: SchedulePause | None = None
    measured: Mapping[str, Measured] = field(default_factory=dict)
    tickling: bool = False
    interlocks: Mapping[str, InterlockState] = field(default_factory=dict)
