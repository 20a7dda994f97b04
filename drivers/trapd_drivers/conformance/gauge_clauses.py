"""Clause 25: a gauge. Its sensor must be on and within its range."""

from __future__ import annotations

import math

from trapd_drivers.conformance.trial import NotTried, Trial, failure_of, require
from trapd_drivers.errors import InstrumentRefused, Malformed
from trapd_drivers.interfaces import Gauge

_NO_NUMBER = "9.91E37"  # SCPI-1999 volume 1, 7.2.1.5 [mem]
_READINGS = 3


def clause_25(trial: Trial) -> None:
    """a value is asked for each time, and where there is none an error says so"""
    gauge = trial.open()
    if not isinstance(gauge, Gauge):
        raise NotTried("no gauge")
    require(bool(gauge.unit), "it does not say in which unit it reads")
    for _ in range(_READINGS):
        sent = len(trial.proxy.messages)
        value = gauge.read_value()
        require(math.isfinite(value) and abs(value) < float(_NO_NUMBER), f"read_value gave {value!r}")
        require(len(trial.proxy.messages) > sent, "read_value did not ask the instrument")
    trial.require_scpi()
    trial.proxy.next_reply = _NO_NUMBER
    error = failure_of(gauge.read_value)
    require(
        isinstance(error, InstrumentRefused | Malformed),
        f"the instrument answered {_NO_NUMBER}, which means that it cannot tell, and read_value gave {error!r}",
    )
    require(failure_of(gauge.read_value) is None, "read_value failed after the instrument could tell again")


CLAUSES = (clause_25,)
