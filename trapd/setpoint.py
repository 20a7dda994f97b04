"""The records that flow through the service, in the order they are born.

A person or a program makes a `Request`; the guard answers with a `Verdict` (every `Reason` that failed, and the
`Motion` of every species); an accepted one becomes a `Ramp` of `Step`s; each step becomes an `Intent` that is on disk
before its first byte goes out, and an `Outcome` that says what came of it.

Setpoints are named ``drive.frequency`` (Hz), ``drive.amplitude`` (V, zero to peak at the electrode) and by the
electrodes' own names (V). A state is a mapping of these names to values: `Values`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from trapd.physics.motion import Motion as Motion
from trapd.physics.point import AMPLITUDE as AMPLITUDE
from trapd.physics.point import FREQUENCY as FREQUENCY

Values = Mapping[str, float]

Presence = Literal["held", "unknown", "none", "loading"]
"""What is known of the trap's contents: see `Contents`."""

RequestKind = Literal[
    "set",
    "go",
    "back",
    "ions",
    "on",
    "empty",
    "off",
    "stop",
    "scan",
    "claim",
    "release",
    "pause",
    "resume",
    "clear",
]
TICKLE = "tickle"
"""Name under which a tickle's bursts stand among the intents; its output is ``tickle.output``."""
TICKLE_OUTPUT = "tickle.output"
TICKLE_FREQUENCY, TICKLE_LEVEL, TICKLE_BURST = "tickle.frequency", "tickle.level", "tickle.burst"
"""What a tickle is told; its level is that of its generator. None of them is a setpoint of the trap."""

OutcomeState = Literal["confirmed", "differs", "not confirmed", "unreachable", "not sent"]


def unit_of(setpoint: str) -> str:
    """Unit symbol of a setpoint: Hz for the drive frequency, V for everything else."""
    return "Hz" if setpoint == FREQUENCY else "V"


@dataclass(frozen=True, kw_only=True)
class Contents:
    """What is in the trap. ``ions`` are the species guarded as present; ``incoming`` only while loading."""

    presence: Presence
    ions: Mapping[str, int] = field(default_factory=dict)
    incoming: tuple[str, ...] = ()
    expires_us: int | None = None

    @property
    def possible(self) -> dict[str, int]:
        """Everything that may be in the trap, what is coming in included."""
        return dict.fromkeys(self.incoming, 1) | dict(self.ions)


@dataclass(frozen=True, kw_only=True)
class Due:
    """One moment of the schedule: its name in the file, what it measures, and when it was due (UTC, microseconds)."""

    schedule: str
    scan: str
    due_us: int


@dataclass(frozen=True, kw_only=True)
class Request:
    """What somebody asked for. ``values`` only for ``set``; ``point`` for ``go``, ``on`` and ``empty``; ``scan`` names
    the scan, ``interlock`` the interlock that is cleared; ``until_us`` ends a claim or a pause. ``due``: it comes
    from the schedule, not from a person. ``interrupt``: it stops what runs for somebody else, and goes over somebody
    else's claim.
    """

    kind: RequestKind
    author: str
    why: str = ""
    values: Values = field(default_factory=dict)
    point: str | None = None
    contents: Contents | None = None
    stay_off: bool = False
    scan: str | None = None
    interlock: str | None = None
    until_us: int | None = None
    interrupt: bool = False
    due: Due | None = None


@dataclass(frozen=True, kw_only=True)
class Reason:
    """One rule that failed: what was found, the bound it broke, and the nearest allowed value if there is one.

    ``found``, ``bound`` and ``nearest`` are in ``unit``, except that ``nearest`` is always a value of ``quantity`` when
    ``quantity`` is a setpoint. ``species`` and ``mode`` are None where the rule is not about an ion's motion.
    """

    rule: str
    quantity: str
    unit: str
    found: float | None
    bound: float | None
    message: str
    species: str | None = None
    mode: str | None = None
    nearest: float | None = None


@dataclass(frozen=True, kw_only=True)
class Verdict:
    """The guard's answer to one state or one move. ``warnings`` are reasons that were not enforced."""

    accepted: bool
    values: Values
    reasons: tuple[Reason, ...] = ()
    warnings: tuple[Reason, ...] = ()
    species: tuple[Motion, ...] = ()
    recovering: bool = False


@dataclass(frozen=True, kw_only=True)
class Envelope:
    """All that one scan may tell the tickle: frequencies from ``low_hz`` to ``high_hz``, levels up to ``level_v`` (V, zero to
    peak, at the generator), bursts of ``burst_s`` at most, and nothing later than ``longest_s`` after it began."""

    low_hz: float
    high_hz: float
    level_v: float
    burst_s: float
    longest_s: float


@dataclass(frozen=True, kw_only=True)
class Step:
    """One command of a ramp: bring ``setpoint`` to ``value``, then wait ``wait_s`` before the next step."""

    setpoint: str
    value: float
    wait_s: float


@dataclass(frozen=True, kw_only=True)
class Ramp:
    """A judged way from one state to another, one setpoint at a time."""

    start: Values
    target: Values
    steps: tuple[Step, ...]

    @property
    def duration_s(self) -> float:
        return sum(step.wait_s for step in self.steps)


@dataclass(frozen=True, kw_only=True)
class Intent:
    """What is about to be sent: one step, resolved to an instrument. Inserted before the first byte.

    ``quantity`` is what the instrument is told: ``frequency_hz``, ``level_v`` (synthesizer, zero to peak),
    ``voltage_v``, ``output`` (1 or 0), or ``burst``: a tickle of the frequency ``value`` and the level ``level``.
    """

    setpoint: str
    value: float
    unit: str
    instrument: str
    channel: int | None
    quantity: str
    level: float


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What came of an intent. Times are UTC microseconds, None where that stage was not reached.

    ``readback`` and ``difference`` (readback minus value) are in the unit of the setpoint.
    """

    state: OutcomeState
    sent_us: int | None = None
    acknowledged_us: int | None = None
    verified_us: int | None = None
    readback: float | None = None
    difference: float | None = None
    error: str | None = None
