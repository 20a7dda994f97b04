"""What can go wrong with one instrument on demand: once, a number of times, or until cleared."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from enum import StrEnum

from trapd_simulated.errors import RackUseError


class FaultKind(StrEnum):
    """Each line says what happens and what uses it up. Delays are seconds of the host: they are the network's."""

    HANG = "hang"  # a message is read, neither executed nor answered
    MUTE = "mute"  # a query is executed, its answer never sent
    PARTIAL_LINE = "partial_line"  # the first half of an answer, no newline
    GARBAGE = "garbage"  # random bytes and a newline in place of an answer
    BABBLE = "babble"  # in place of an answer, bytes without end or newline until cleared (N times: until closed)
    SLOW_REPLY = "slow_reply"  # an answer delay_s late; nothing else is served meanwhile
    LATE_REPLY = "late_reply"  # an answer withheld until the next answer, or for delay_s when that is above 0
    LOST_CONNECTION = "lost_connection"  # closed at the next query, which is not executed
    REFUSE_CONNECTIONS = "refuse_connections"  # the port is shut; until cleared
    SECOND_CLIENT = "second_client"  # somebody else holds it: a new connection is closed at once
    REFUSE_SECOND_CLIENT = "refuse_second_client"  # a connection beside a living one is closed at once
    WRONG_IDENTITY = "wrong_identity"  # *IDN? answers text
    STALLED_READER = "stalled_reader"  # stops reading; what was read waits; until cleared
    NETWORK_DELAY = "network_delay"  # a message arrives delay_s late
    IGNORE_COMMANDS = "ignore_commands"  # a command (no query) is accepted and not executed
    REFUSE_COMMANDS = "refuse_commands"  # a command is refused with error code value (-200 when 0)
    READBACK_OFFSET = "readback_offset"  # value is added to a measurement (channel 0: to all)
    TRIP = "trip"  # the protection latches channel off now; cleared over the wire, not here


def fault_kind(name: str) -> FaultKind:
    """By its value; `RackUseError` for any other."""
    try:
        return FaultKind(name)
    except ValueError:
        raise RackUseError(f"no fault {name!r}: there are {', '.join(FaultKind)}; nothing was changed") from None


@dataclass(frozen=True, kw_only=True)
class Fault:
    """``times`` None: until cleared. The other fields matter to the kinds that name them."""

    kind: FaultKind
    times: int | None = None
    delay_s: float = 0.0
    value: float = 0.0
    text: str = "SOMEBODY ELSE,OTHER MODEL,0,0"
    channel: int = 0


class Faults:
    """The faults standing at one instrument; at most one of each kind, a new one replaces the old."""

    def __init__(self) -> None:
        self._change = threading.Condition()
        self._standing: dict[FaultKind, tuple[Fault, int | None]] = {}

    def inject(self, fault: Fault) -> None:
        if fault.times is not None and fault.times < 1:
            raise RackUseError(f"fault {fault.kind}: times = {fault.times}, expected 1 or more; nothing was injected")
        with self._change:
            self._standing[fault.kind] = (fault, fault.times)
            self._change.notify_all()

    def clear(self, kind: FaultKind | None = None) -> None:
        """End one kind, or all."""
        with self._change:
            if kind is None:
                self._standing.clear()
            else:
                self._standing.pop(kind, None)
            self._change.notify_all()

    def standing(self, kind: FaultKind) -> Fault | None:
        """The fault, not used up by looking."""
        entry = self._standing.get(kind)
        return entry[0] if entry else None

    def take(self, kind: FaultKind, channel: int = 0) -> Fault | None:
        """The fault if it stands (for ``channel``), one of its times used up."""
        if not self._standing:
            return None
        with self._change:
            entry = self._standing.get(kind)
            if entry is None or entry[0].channel not in (0, channel):
                return None
            fault, left = entry
            if left == 1:
                del self._standing[kind]
                self._change.notify_all()
            elif left is not None:
                self._standing[kind] = (fault, left - 1)
            return fault

    def wait_cleared(self, kind: FaultKind, at_most_s: float) -> bool:
        """Block until the kind no longer stands; False when ``at_most_s`` ran out first."""
        with self._change:
            return self._change.wait_for(lambda: kind not in self._standing, at_most_s)
