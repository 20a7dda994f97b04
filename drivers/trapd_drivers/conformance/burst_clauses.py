"""Clauses 17 to 20: bursts of an RF source. The kit emits its smallest values, for fractions of a second."""

from __future__ import annotations

import time
from functools import partial

from trapd_drivers.conformance.controls import knobs
from trapd_drivers.conformance.setting_clauses import outside, require_measured, require_refused_unsent
from trapd_drivers.conformance.trial import NotTried, Trial, failure_of, require, timed
from trapd_drivers.errors import InstrumentRefused
from trapd_drivers.interfaces import RfSource, Scale

SHORT_S = 0.2
LONG_S = 3.0
_SETTLED_S = 0.2
_LEVEL = 0.05  # of full scale
_MOST_COMMANDS = 8


def clause_17(trial: Trial) -> None:
    """a burst ends by itself in its time, with nobody asking"""
    source, _ = _open(trial)
    off_v = _measured(source)
    error, took_s = timed(partial(source.start_burst, LONG_S))
    require(error is None, f"a burst of {LONG_S:g} s gave {error!r}")
    require(took_s < 0.5 * LONG_S, f"a burst of {LONG_S:g} s was started only after {took_s:.2f} s")
    time.sleep(SHORT_S)
    require(source.read_burst(), f"a burst of {LONG_S:g} s had ended after {SHORT_S:g} s")
    source.set_output(False)
    source.start_burst(SHORT_S)
    trial.proxy.cut()
    source.close()
    time.sleep(SHORT_S + trial.bench.timeout_s)
    again = trial.open()
    assert isinstance(again, RfSource)
    _require_silent(again, off_v, f"{trial.bench.timeout_s:g} s after the end of a burst")


def clause_18(trial: Trial) -> None:
    """a burst outside the scale raises OutOfRange and sends nothing"""
    source, scale = _open(trial)
    for value in outside(scale):
        require_refused_unsent(trial, source, partial(source.start_burst, value), f"a burst of {value:g} s")


def clause_19(trial: Trial) -> None:
    """a burst refused in part leaves the output silent, even where it was on"""
    source, _ = _open(trial)
    trial.require_scpi()
    off_v = _measured(source)
    for sent_before in range(_MOST_COMMANDS):
        source.set_output(True)
        trial.proxy.pass_first, trial.proxy.refuse_next_command = sent_before, True
        error = failure_of(partial(source.start_burst, LONG_S))
        if trial.proxy.refuse_next_command:  # that many commands were not sent
            trial.proxy.refuse_next_command, trial.proxy.pass_first = False, 0
            break
        what = f"a burst whose command {sent_before + 1} was refused"
        require(isinstance(error, InstrumentRefused), f"{what} gave {error!r}, not InstrumentRefused")
        _require_silent(source, off_v, f"after {what}")
    source.set_output(False)


def clause_20(trial: Trial) -> None:
    """a new burst replaces one in progress, off ends it, on means without end"""
    source, _ = _open(trial)
    off_v = _measured(source)
    source.start_burst(LONG_S)
    source.start_burst(SHORT_S)
    time.sleep(SHORT_S + trial.bench.timeout_s)
    require(not source.read_burst(), f"a burst of {SHORT_S:g} s did not replace one of {LONG_S:g} s")
    source.start_burst(LONG_S)
    source.set_output(False)
    _require_silent(source, off_v, "after off in a burst")
    source.set_output(True)
    found_v = _measured(source)
    require(found_v is None or found_v > _tolerance(source), f"{found_v} V measured with the output on after a burst")
    source.set_output(False)


def _open(trial: Trial) -> tuple[RfSource, Scale]:
    """The source, off, at values near the lowest; and the scale of its bursts."""
    trial.require_output()
    source = trial.open()
    if not isinstance(source, RfSource) or source.burst is None:
        raise NotTried("it emits no bursts")
    if not source.burst.low <= SHORT_S < LONG_S <= source.burst.high:
        raise NotTried(f"its bursts cannot be {SHORT_S:g} s and {LONG_S:g} s long")
    for knob in knobs(source):
        knob.set(knob.small(_LEVEL))
    source.set_output(False)
    return source, source.burst


def _measured(source: RfSource) -> float | None:
    time.sleep(_SETTLED_S)
    return source.measure_level_v()


def _tolerance(source: RfSource) -> float:
    """A quarter of the programmed level: less than that is no difference."""
    return 0.25 * knobs(source)[1].small(_LEVEL)


def _require_silent(source: RfSource, off_v: float | None, when: str) -> None:
    """As it was measured with the output off, where the instrument can tell."""
    require(not source.read_burst(), f"a burst is being emitted {when}")
    if off_v is not None:
        require_measured(knobs(source)[1], off_v, _tolerance(source), f"silent {when}")


CLAUSES = (clause_17, clause_18, clause_19, clause_20)
