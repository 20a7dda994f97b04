"""Clauses 1 to 8: threads, time, sessions, identity, status, interrupt."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from contextlib import closing
from functools import partial

from trapd_drivers.conformance.controls import Settings, knobs, readings, starts, switches
from trapd_drivers.conformance.proxy import Mode
from trapd_drivers.conformance.trial import SLACK_S, Broken, Trial, failure_of, name_of, require, timed
from trapd_drivers.errors import Unreachable, WrongIdentity
from trapd_drivers.interfaces import Gauge, Instrument, PhotonCounter, RfSource

_STRANGER = "SOMEBODY ELSE,OTHER,0,0"


def clause_1(trial: Trial) -> None:
    """usable from one thread, whichever it is"""
    failures: list[BaseException] = []

    def use() -> None:
        try:
            instrument = trial.open()
            for read in readings(instrument):
                read()
            instrument.close()
        except BaseException as error:
            failures.append(error)

    thread = threading.Thread(target=use, daemon=True)
    thread.start()
    thread.join(60.0)
    require(not thread.is_alive(), "reading everything in a thread of its own did not end in a minute")
    require(not failures, f"in a thread of its own: {failures[:1]}")


def clause_2(trial: Trial) -> None:
    """every method ends within twice the timeout"""
    limit_s = 2.0 * trial.bench.timeout_s + SLACK_S
    with closing(trial.open()) as instrument:
        methods = len(_methods(instrument))
    faults: tuple[tuple[Mode, int], ...] = (("hang", methods), ("babble", 1), ("trickle", 1))
    for mode, count in faults:
        for index in range(count):
            instrument = trial.open()
            call = _methods(instrument)[index]
            if isinstance(instrument, PhotonCounter) and trial.bench.allow_output:
                instrument.start_count(instrument.gate.low)  # or it has no count to ask for
            sent, trial.proxy.mode = len(trial.proxy.messages), mode
            error, took_s = timed(call)
            name = f"{name_of(call)} of an instrument in the state {mode!r}"
            require(took_s <= limit_s, f"{name} took {took_s:.2f} s")
            require(error is not None or not trial.proxy.messages[sent:], f"{name} returned as if it had been answered")
            trial.proxy.cut()  # before anything passes again, or a late command would
            trial.proxy.mode = "pass"
            instrument.close()


def _methods(instrument: Instrument) -> list[Callable[[], object]]:
    """One of each kind. The settings never arrive: nothing is forwarded while the proxy plays a fault."""
    knob, switch = knobs(instrument)[-1:], switches(instrument)[-1:]
    return [
        instrument.read_identity,
        instrument.read_status,
        *(one.read for one in knob),
        *(partial(one.set, one.rest) for one in knob),
        *(one.read for one in switch),
        *(partial(one.set, False) for one in switch),
        *starts(instrument),
        *((instrument.read_burst,) if isinstance(instrument, RfSource) else ()),
        *((instrument.read_count,) if isinstance(instrument, PhotonCounter) else ()),
        *((instrument.read_value,) if isinstance(instrument, Gauge) else ()),
    ]


def clause_3(trial: Trial) -> None:
    """a dropped session is opened anew, in step and with the same instrument"""
    instrument = trial.open()
    trial.require_scpi()
    read = (*(knob.read for knob in knobs(instrument)), instrument.read_identity)[0]
    before = read()
    _lose(trial, instrument)
    require(read() == before, "the first reading after a lost connection differs from the one before")

    trial.proxy.delay_next_reply_s = 2.0 * trial.bench.timeout_s
    require(failure_of(instrument.read_identity) is not None, "a reply twice the timeout late was accepted")
    require(read() == before, "a late reply answered the next query")
    for one in readings(instrument):
        error = failure_of(one)
        require(error is None, f"after a late reply {name_of(one)} gave {error!r}")

    _lose(trial, instrument)
    sent, trial.proxy.identity = len(trial.proxy.messages), _STRANGER
    for call in (read, *_methods(instrument)[2:]):
        unsent, error = len(trial.proxy.messages), failure_of(call)
        asked = trial.proxy.messages[unsent:]
        require(
            not asked or isinstance(error, WrongIdentity), f"another instrument answers: {name_of(call)} gave {error!r}"
        )
    require(not trial.proxy.commands(sent), f"commanded another instrument: {trial.proxy.commands(sent)}")
    trial.proxy.identity = None
    require(read() == before, "the first instrument is back and was not taken up again")


def _lose(trial: Trial, instrument: Instrument) -> None:
    """Cut the connection while the driver waits for a reply."""
    trial.proxy.mode = "hang"
    cut = threading.Timer(0.05, trial.proxy.cut)
    cut.start()
    error = failure_of(instrument.read_identity)
    cut.join()
    trial.proxy.mode = "pass"
    require(isinstance(error, Unreachable), f"a connection lost in the middle gave {error!r}, not Unreachable")


def clause_4(trial: Trial) -> None:
    """opening, reading and closing change nothing"""
    instrument = trial.open()
    trial.require_scpi()
    before = Settings.of(instrument)
    for read in readings(instrument):
        read()
    instrument.close()
    again = trial.open()
    require(before.hold_at(again), f"settings were {before} and are {Settings.of(again)}")
    require(not trial.proxy.commands(), f"sent without being asked to set anything: {trial.proxy.commands()}")


def clause_5(trial: Trial) -> None:
    """close may be called twice, and after a failure"""
    instrument = trial.open()
    _close(instrument, "the first time")
    _close(instrument, "the second time")
    instrument = trial.open()
    trial.proxy.mode = "hang"
    failure_of(instrument.read_identity)
    _close(instrument, "after a failure")


def _close(instrument: Instrument, when: str) -> None:
    try:
        instrument.close()
    except Exception as error:
        raise Broken(f"close raised {error!r} {when}") from error


def clause_6(trial: Trial) -> None:
    """the identity stays the same"""
    instrument = trial.open()
    first = instrument.read_identity()
    require(instrument.read_identity() == first, "two readings of the identity differ")
    trial.proxy.cut()
    failure_of(instrument.read_identity)
    require(instrument.read_identity() == first, "the identity differs after a lost connection")


def clause_7(trial: Trial) -> None:
    """power-on and queued errors are reported exactly once"""
    instrument = trial.open()
    trial.require_scpi()
    instrument.read_status()
    _require_clean(instrument, "a second reading")
    trial.proxy.queue_error()
    status = instrument.read_status()
    require(len(status.errors) == 1, f"one error was queued, and {len(status.errors)} were reported: {status.errors}")
    _require_clean(instrument, "the reading after an error")
    if not any("*ESR?" in message.upper() for message in trial.proxy.messages):
        return  # an instrument that does not tell of power-on
    trial.proxy.power_on = True
    trial.proxy.cut()
    failure_of(instrument.read_identity)
    require(failure_of(instrument.read_identity) is None, "the instrument was not reachable after a power cycle")
    require(instrument.read_status().power_on, "a power cycle between two calls was not reported")
    _require_clean(instrument, "the reading after power-on")


def _require_clean(instrument: Instrument, which: str) -> None:
    status = instrument.read_status()
    require(not status.power_on and not status.errors, f"{which} is not clean: {status}")


def clause_8(trial: Trial) -> None:
    """interrupt ends a call at once and is harmless when idle"""
    instrument = trial.open(timeout_s=2.0)
    instrument.interrupt()
    error = failure_of(instrument.read_identity)
    require(error is None, f"an interrupt while idle broke the next call: {error!r}")
    trial.proxy.mode = "hang"
    sent_s: list[float] = []

    def interrupt() -> None:
        sent_s.append(time.monotonic())
        instrument.interrupt()

    timer = threading.Timer(0.1, interrupt)
    timer.start()
    error, _ = timed(instrument.read_identity)
    late_s = time.monotonic() - sent_s[0] if sent_s else 0.0
    require(late_s <= 0.1 + SLACK_S, f"an interrupted call ended only {late_s:.2f} s later")
    require(isinstance(error, Unreachable), f"an interrupted call gave {error!r}, not Unreachable")
    require(bool(sent_s), "the call ended before it was interrupted")


CLAUSES = (clause_1, clause_2, clause_3, clause_4, clause_5, clause_6, clause_7, clause_8)
