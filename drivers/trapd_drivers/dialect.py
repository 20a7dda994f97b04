"""What a profile says of one kind of instrument, as records: how it tells its state, and what it can be told."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from trapd_drivers.form import Form
from trapd_drivers.interfaces import Scale
from trapd_drivers.quantity import Quantity, Reading

Key = tuple[str, int]
"""A quantity ("frequency", "level", "burst", "voltage" or "gate") and its channel, 0 where there are no channels."""


@dataclass(frozen=True, kw_only=True)
class StatusDialect:
    """How the instrument says who it is, what happened to it, and what it refused."""

    identity: str
    events: str | None
    error: str
    error_reply: Form
    error_joined: bool
    ignored: frozenset[int]
    power_on: frozenset[int]
    trip: frozenset[int]


@dataclass(frozen=True, kw_only=True)
class Question:
    """A query that tells yes or no. What is neither is malformed; without ``no`` everything but yes means no.

    With ``bits`` it is answered by a register instead, which means yes when any of them is set.
    """

    query: Form
    reply: Form
    yes: frozenset[str]
    no: frozenset[str] | None = None
    bits: int = 0


@dataclass(frozen=True, kw_only=True)
class Output:
    """An output's switch; ``state`` asks whether it is on."""

    on: Form
    off: Form
    state: Question | None


@dataclass(frozen=True, kw_only=True)
class Course:
    """What runs for a time that was set and ends by itself, a burst or a count. ``end`` leaves the mode of it."""

    start: Form
    running: Question
    end: Form | None = None


@dataclass(frozen=True, kw_only=True)
class Dialect:
    """One kind of instrument. ``trip`` asks whether a protection has latched it off, ``reading`` is what it tells."""

    settle_s: float = 0.0
    quantities: Mapping[Key, Quantity] = field(default_factory=dict)
    output: Output | None = None
    trip: Question | None = None
    course: Course | None = None
    reading: Reading | None = None

    @property
    def channels(self) -> tuple[int, ...]:
        return tuple(dict.fromkeys(channel for _, channel in self.quantities)) or (0,)

    def scales(self) -> dict[Key, Scale]:
        """As far as the profile states them; a limit that only the instrument knows is infinite."""
        return {key: quantity.scale() for key, quantity in self.quantities.items()}
