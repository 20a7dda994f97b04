"""What every simulated instrument does: executes program messages, keeps its status, has a power switch.

Nothing here knows of sockets; `server` brings the messages.
"""

from __future__ import annotations

import random
import threading
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import ClassVar, TypeAlias, TypeVar

from trapd_simulated.arguments import Arguments
from trapd_simulated.clock import Clock
from trapd_simulated.errors import RackUseError, ScpiError, SettingsError
from trapd_simulated.faults import Fault, FaultKind, Faults
from trapd_simulated.settings import InstrumentSettings
from trapd_simulated.status import Event, Status
from trapd_simulated.syntax import HeaderTree, Unit, units

MANUFACTURER = "TRAPD SIMULATED RACK"
SCPI_VERSION = "1999.0"


@dataclass(frozen=True, kw_only=True)
class Call:
    """One command or query about to be executed at rack time ``now_s``."""

    suffix: int
    arguments: Arguments
    now_s: float
    message_available: bool  # an earlier query of the same message has answered


Set: TypeAlias = Callable[[Call], None]
Query: TypeAlias = Callable[[Call], str]
R = TypeVar("R")


class Instrument(ABC):
    """Give `PATTERNS` (command name to header patterns) and `commands` (name to its command and its query form).

    ``lock`` guards all state; every public method takes it.
    """

    PATTERNS: ClassVar[Mapping[str, tuple[str, ...]]]
    MANDATORY: ClassVar[Mapping[str, tuple[str, ...]]] = {
        **{name: (name,) for name in ("*CLS", "*ESE", "*ESR", "*IDN", "*OPC", "*RST", "*SRE", "*STB", "*TST", "*WAI")},
        "error": ("SYSTem:ERRor[:NEXT]",),
        "error-count": ("SYSTem:ERRor:COUNt",),
        "version": ("SYSTem:VERSion",),
    }

    def __init__(self, name: str, settings: InstrumentSettings, clock: Clock, seed: int) -> None:
        self.name = name
        self.settings = settings
        self.dialect = settings.dialect
        self.faults = Faults()
        self.lock = threading.RLock()
        self.clock = clock
        self.random = random.Random(f"{seed}/{name}")
        self.powered = True
        self._by_hand = False
        self._status = Status(self.dialect.error_queue_depth)
        self._last_message_s = float("-inf")
        for command in self.dialect.commands:
            if command not in self.PATTERNS:
                raise SettingsError(
                    f"{name}: dialect.commands has {command!r}: expected one of {', '.join(self.PATTERNS)}"
                )
        self._tree = HeaderTree({**self.MANDATORY, **self.PATTERNS, **self.dialect.commands})
        self._commands = {**self._mandatory_commands(), **self.commands()}

    @abstractmethod
    def commands(self) -> dict[str, tuple[Set | None, Query | None]]: ...

    @abstractmethod
    def reset(self, now_s: float) -> None:
        """Settings and outputs as after power-on (also *RST)."""

    @abstractmethod
    def advance(self, now_s: float) -> None:
        """Let happen what was due by ``now_s`` without anyone asking (a trip)."""

    @abstractmethod
    def trip(self, channel: int) -> None:
        """The protection latches one output off; `RackUseError` when there is no such channel."""

    def execute(self, message: str) -> str | None:
        """One program message as it came over the wire, without terminator; the response message or None."""
        with self.lock:
            now_s = self.clock.now_s()
            self.advance(now_s)
            if not self.powered:
                return None
            too_soon = now_s - self._last_message_s < self.dialect.min_spacing_s
            self._last_message_s = now_s
            if too_soon:
                self._status.queue(self.dialect.spacing_code, "too soon")
                return None
            return self._run_message(message, now_s, self._queue)

    def front_panel(self, message: str) -> str | None:
        """The same by hand at the instrument: no faults, no pacing, no error queue; sets the user request bit."""
        with self.lock:
            if not self.powered:
                raise RackUseError(f"front panel of {self.name}: it is switched off; nothing was changed")
            now_s = self.clock.now_s()
            self.advance(now_s)
            self._status.report(Event.USER_REQUEST)
            self._by_hand = True
            try:
                return self._run_message(message, now_s, self._complain)
            finally:
                self._by_hand = False

    def inject(self, fault: Fault) -> None:
        if fault.kind is FaultKind.TRIP:
            self.trip(fault.channel)
        else:
            self.faults.inject(fault)

    def overrun(self) -> None:
        """A message longer than the input buffer arrived and is lost."""
        with self.lock:
            self._queue(ScpiError(-363))

    def power_off(self) -> None:
        """Outputs lose their drive, settings and status are forgotten; nothing is answered until `power_on`."""
        with self.lock:
            now_s = self.clock.now_s()
            self.advance(now_s)
            self.powered = False
            self.reset(now_s)

    def power_on(self) -> None:
        with self.lock:
            self._status = Status(self.dialect.error_queue_depth)
            self._last_message_s = float("-inf")
            self.powered = True

    def readback(self, true: float, accuracy: float, bias: float, channel: int = 0) -> float:
        """A measurement: ``bias`` (-1 .. 1, fixed for each channel) and noise, together within 0.6 of ``accuracy``."""
        noise = max(-1.0, min(1.0, self.random.gauss(0.0, 0.2)))
        fault = self._fault(FaultKind.READBACK_OFFSET, channel)
        return true + 0.3 * accuracy * (bias + noise) + (fault.value if fault else 0.0)

    def _queue(self, error: ScpiError) -> None:
        self._status.queue(self.dialect.error_codes.get(error.code, error.code), error.detail)

    def _complain(self, error: ScpiError) -> None:
        raise RackUseError(f"front panel of {self.name}: {error}") from error

    def _run_message(self, message: str, now_s: float, report: Callable[[ScpiError], None]) -> str | None:
        """An execution error skips its unit, any other ends the message; what came before stands (488.2 6.1.7)."""
        replies: list[str] = []
        path: tuple[str, ...] = ()
        identified = False
        try:
            for unit in units(message):
                if identified and unit.query:
                    raise ScpiError(-440)
                # SCPI-1999 volume 1, 6.2.4: without a leading colon a header continues where the one before, as it was
                # written, had its last node; common commands leave that path alone.
                header = unit.nodes if unit.from_root or unit.common else path + unit.nodes
                path = path if unit.common else header[:-1]
                try:
                    reply = self._run_unit(unit, header, now_s, bool(replies))
                except ScpiError as error:
                    if not -299 <= error.code <= -200:
                        raise
                    report(error)
                    continue
                if reply is not None:
                    replies.append(reply)
                identified = identified or (unit.query and unit.nodes == ("*IDN",))
        except ScpiError as error:
            report(error)
        return ";".join(replies) if replies else None

    def _run_unit(self, unit: Unit, header: tuple[str, ...], now_s: float, message_available: bool) -> str | None:
        name, suffix = self._tree.find(header)
        command, query = self._commands[name]
        arguments = Arguments(unit.parameters)
        call = Call(suffix=suffix, arguments=arguments, now_s=now_s, message_available=message_available)
        if unit.query and query:
            reply = query(call)
            arguments.done()
            return reply
        if unit.query or not command:
            raise ScpiError(-113, ":".join(unit.nodes) + ("?" if unit.query else ""))
        if unit.common or not self._spoiled():
            command(call)
        return None

    def _spoiled(self) -> bool:
        """Whether a fault keeps this command from being executed."""
        refusal = self._fault(FaultKind.REFUSE_COMMANDS)
        if refusal:
            raise ScpiError(int(refusal.value) or -200, "refused on demand")
        return self._fault(FaultKind.IGNORE_COMMANDS) is not None

    def _fault(self, kind: FaultKind, channel: int = 0) -> Fault | None:
        """A fault that spoils what is being executed; none spoils what is done by hand."""
        return None if self._by_hand else self.faults.take(kind, channel)

    def _mandatory_commands(self) -> dict[str, tuple[Set | None, Query | None]]:
        """IEEE 488.2 10 and SCPI-1999 volume 1, 4.1. No command here overlaps, so *OPC? says nothing about settling."""
        return {
            "*CLS": (_alone(lambda call: self._status.clear()), None),
            "*ESE": (self._set_enable("event_enable", 255), lambda call: str(self._status.event_enable)),
            "*ESR": (None, _alone(lambda call: str(self._status.take_events()))),
            "*IDN": (None, _alone(lambda call: self._identity())),
            "*OPC": (_alone(lambda call: self._status.report(Event.OPERATION_COMPLETE)), lambda call: "1"),
            "*RST": (_alone(lambda call: self.reset(call.now_s)), None),
            # 488.2 11.3.2: bit 6 of the service request enable is ignored.
            "*SRE": (self._set_enable("service_enable", 255 - 64), lambda call: str(self._status.service_enable)),
            "*STB": (None, lambda call: str(self._status.byte(call.message_available))),
            "*TST": (None, lambda call: "0"),
            "*WAI": (_alone(lambda call: None), None),
            "error": (None, _alone(lambda call: self._next_error())),
            "error-count": (None, lambda call: str(self._status.error_count)),
            "version": (None, lambda call: SCPI_VERSION),
        }

    def _set_enable(self, register: str, bits: int) -> Set:
        def run(call: Call) -> None:
            mask = call.arguments.integer(0, 255)
            call.arguments.done()
            setattr(self._status, register, mask & bits)

        return run

    def _next_error(self) -> str:
        code, text = self._status.next_error()
        return f'{code},"{text}"'

    def _identity(self) -> str:
        impostor = self._fault(FaultKind.WRONG_IDENTITY)
        if impostor:
            return impostor.text
        return f"{MANUFACTURER},{self.settings.model},{self.settings.serial},{self.settings.version}"


def _alone(action: Callable[[Call], R]) -> Callable[[Call], R]:
    """``action`` with no parameters allowed, which is found out before it has any effect."""

    def run(call: Call) -> R:
        call.arguments.done()
        return action(call)

    return run
