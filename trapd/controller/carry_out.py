"""One command on the instrument's own thread: send, read back, compare."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass, replace

from trapd.clock import Clock
from trapd.setpoint import Outcome, OutcomeState
from trapd.wiring import Command, measure, output_is_on, read_programmed, send
from trapd_drivers.errors import DriverError, InstrumentRefused, OutOfRange
from trapd_drivers.interfaces import Instrument

SETTLE_S = 0.25
"""How long a terminal reading may take to follow before it counts as different."""

_log = logging.getLogger(__name__)


@dataclass(frozen=True, kw_only=True)
class Carried:
    """An outcome, and when (monotonic) the instrument had the command; the waiting time counts from there."""

    outcome: Outcome
    at_ns: int


def carry_out(command: Command, clock: Clock, *, live: bool) -> Callable[[Instrument], Carried]:
    """A job that never raises: what went wrong is in the outcome.

    The readback is what the terminals show where the instrument can tell, else what it says it was told; the latter must
    agree in any case. ``live``: the output behind the setpoint is on, and must be found so.
    """

    def job(instrument: Instrument) -> Carried:
        sent_us = clock.now_us()
        try:
            send(instrument, command.intent)
        except Exception as error:
            return Carried(outcome=failed(error, sent_us), at_ns=clock.monotonic_ns())
        acknowledged_us, at_ns = clock.now_us(), clock.monotonic_ns()
        try:
            outcome = _verified(instrument, command, clock, live)
        except Exception as error:
            outcome = failed(error, sent_us, acknowledged_us)
        else:
            outcome = replace(outcome, sent_us=sent_us, acknowledged_us=acknowledged_us, verified_us=clock.now_us())
        return Carried(outcome=outcome, at_ns=at_ns)

    return job


def failed(error: Exception, sent_us: int, acknowledged_us: int | None = None) -> Outcome:
    """What an instrument's error says of the command; a bug in a driver is no reason to lose the outcome."""
    state: OutcomeState = "unreachable"
    if isinstance(error, InstrumentRefused | OutOfRange):
        state = "not confirmed"
    elif not isinstance(error, DriverError):
        _log.exception("a bug in a driver", exc_info=error)
        error = RuntimeError(f"a bug in the driver: {type(error).__name__}: {error}")
    return Outcome(state=state, sent_us=sent_us, acknowledged_us=acknowledged_us, error=str(error))


def _verified(instrument: Instrument, command: Command, clock: Clock, live: bool) -> Outcome:
    """State, readback and difference; without the times."""
    intent = command.intent
    if live and not output_is_on(instrument, intent):
        return Outcome(
            state="not confirmed", readback=0.0, difference=-intent.value, error=f"{intent.setpoint}: its output is off"
        )
    readback = _read_back(instrument, command, clock, live)
    difference = readback - intent.value
    if abs(difference) <= command.accuracy:
        return Outcome(state="confirmed", readback=readback, difference=difference)
    if abs(difference) <= command.stop_beyond:
        return Outcome(state="differs", readback=readback, difference=difference)
    return Outcome(
        state="not confirmed",
        readback=readback,
        difference=difference,
        error=f"{intent.setpoint} reads {readback:.8g} {intent.unit} after {intent.value:.8g} {intent.unit}, "
        f"accuracy {command.accuracy:.3g} {intent.unit}",
    )


def _read_back(instrument: Instrument, command: Command, clock: Clock, live: bool) -> float:
    programmed = read_programmed(instrument, command.intent) * command.factor
    if not live or abs(programmed - command.intent.value) > command.accuracy:
        return programmed
    until_ns = clock.monotonic_ns() + int(SETTLE_S * 1e9)
    while True:
        # Looked at before the reading: the one that is given up on was begun after the time had passed.
        late = clock.monotonic_ns() > until_ns
        measured = measure(instrument, command.intent)
        if measured is None:
            return programmed
        value = measured * command.factor
        if late or abs(value - command.intent.value) <= command.accuracy:
            return value
