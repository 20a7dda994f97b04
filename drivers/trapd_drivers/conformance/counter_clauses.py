"""Clauses 21 to 24: a photon counter. It counts what there is, dark counts too; nothing is emitted."""

from __future__ import annotations

import math
import time
from functools import partial

from trapd_drivers.conformance.burst_clauses import LONG_S, SHORT_S
from trapd_drivers.conformance.setting_clauses import outside, require_refused_unsent
from trapd_drivers.conformance.trial import SLACK_S, NotTried, Trial, failure_of, require, timed
from trapd_drivers.errors import InstrumentRefused
from trapd_drivers.interfaces import PhotonCounter

_LOOKS_S = 0.005


def clause_21(trial: Trial) -> None:
    """starting and asking return at once, None while counting"""
    counter = _open(trial)
    error, took_s = timed(partial(counter.start_count, LONG_S))
    require(error is None, f"a count of {LONG_S:g} s gave {error!r}")
    require(took_s < 0.5 * LONG_S, f"start_count of {LONG_S:g} s took {took_s:.2f} s")
    start_s = time.monotonic()
    found = counter.read_count()
    took_s = time.monotonic() - start_s
    require(took_s < 0.5 * LONG_S, f"read_count of a count of {LONG_S:g} s took {took_s:.2f} s")
    require(found is None, f"read_count gave {found} while counting, not None")


def clause_22(trial: Trial) -> None:
    """a finished count stays the same"""
    counter = _open(trial)
    counter.start_count(SHORT_S)
    first = _finished(trial, counter, SHORT_S)
    require(type(first) is int and first >= 0, f"a finished count is {first!r}")
    for _ in range(3):
        time.sleep(_LOOKS_S)
        again = counter.read_count()
        require(again == first, f"a finished count of {first} read {again} when asked again")


def clause_23(trial: Trial) -> None:
    """a new count holds nothing of an older one, and no count is told that is not there"""
    counter = _open(trial)
    _require_none(counter, "before the first start_count")
    counter.start_count(SHORT_S)
    alone = _finished(trial, counter, SHORT_S)
    counter.start_count(LONG_S)
    time.sleep(3.0 * SHORT_S)
    counter.start_count(SHORT_S)
    replaced = _finished(trial, counter, SHORT_S)
    most = 2.0 * alone + 8.0 * math.sqrt(alone) + 20.0  # Poisson; four times as much when the older was added
    require(replaced <= most, f"{replaced} counted in {SHORT_S:g} s after a count was replaced, {alone} without")
    trial.require_scpi()
    if any("*ESR?" in message.upper() for message in trial.proxy.messages):
        trial.proxy.power_on = True
        trial.proxy.cut()
        failure_of(counter.read_identity)
        _require_none(counter, "after a power cycle")


def clause_24(trial: Trial) -> None:
    """a count takes its time, and outside the scale it raises OutOfRange and sends nothing"""
    counter = _open(trial)
    start_s = time.monotonic()
    counter.start_count(SHORT_S)
    _finished(trial, counter, SHORT_S)
    took_s = time.monotonic() - start_s
    require(took_s > 0.5 * SHORT_S, f"a count of {SHORT_S:g} s was finished {took_s:.3f} s after its start")
    for value in outside(counter.gate):
        require_refused_unsent(trial, counter, partial(counter.start_count, value), f"a count of {value:g} s")


def _open(trial: Trial) -> PhotonCounter:
    trial.require_output()
    counter = trial.open()
    if not isinstance(counter, PhotonCounter):
        raise NotTried("no photon counter")
    if not counter.gate.low <= SHORT_S < LONG_S <= counter.gate.high:
        raise NotTried(f"it cannot count for {SHORT_S:g} s and for {LONG_S:g} s")
    return counter


def _finished(trial: Trial, counter: PhotonCounter, gate_s: float) -> int:
    most_s = gate_s + trial.bench.timeout_s + SLACK_S
    until_s = time.monotonic() + most_s
    while (count := counter.read_count()) is None:
        require(time.monotonic() < until_s, f"a count of {gate_s:g} s is not finished after {most_s:.1f} s")
        time.sleep(_LOOKS_S)
    return count


def _require_none(counter: PhotonCounter, when: str) -> None:
    error = failure_of(counter.read_count)
    require(isinstance(error, InstrumentRefused), f"read_count gave {error!r} {when}, not InstrumentRefused")


CLAUSES = (clause_21, clause_22, clause_23, clause_24)
