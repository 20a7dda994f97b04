"""What the controller knows at one moment; a new frozen copy for every change, so that anyone may read it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from trapd.setpoint import Contents, Values


@dataclass(frozen=True, kw_only=True)
class Moving:
    """A move in progress: the entry of its request, the setpoint on the move, and how far it is."""

    request: int
    author: str
    setpoint: str
    step: int
    steps: int


@dataclass(frozen=True, kw_only=True)
class Situation:
    """The present state of the trap as far as it is known.

    ``values``: what stands at the electrodes as last verified, 0 where an output is off. ``outputs``: by output name.
    ``previous``: the state before the last completed move. ``unreachable``: instruments that do not answer, and why.
    ``off_pending``: instruments on which `off` is not confirmed yet. ``doubt``: something differs from the last
    command or was not confirmed, in words; empty when nothing does. ``unwritten``: entries that wait for the record.
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
