"""Clauses 9 to 16: values, outputs, channels. All but two change settings; the kit puts them back."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from functools import partial

from trapd_drivers.conformance.controls import Knob, knobs, switches
from trapd_drivers.conformance.trial import NotTried, Trial, failure_of, require
from trapd_drivers.errors import InstrumentRefused, OutOfRange
from trapd_drivers.interfaces import DcSupply, Instrument, Scale

_SETTLES_S = 5.0  # the longest wait for terminals to follow
_LOOKS_S = 0.01
_NEAR = 0.2  # a measurement this close to what is programmed is not in the wrong unit
_ABOUT_ZERO = 0.01  # of full scale


def _open(trial: Trial) -> Instrument:
    trial.require_output()
    instrument = trial.open()
    if not knobs(instrument):
        raise NotTried("neither an RF source nor a DC supply")
    return instrument


def clause_9(trial: Trial) -> None:
    """what was set is read back, quantised, within the accuracy"""
    for knob in knobs(_open(trial)):
        for fraction in (0.05, 0.03):
            value = knob.small(fraction)
            knob.set(value)
            found, expected = knob.read(), knob.scale.quantise(value)
            require(
                abs(found - expected) <= knob.scale.accuracy(expected),
                f"{knob.name} set to {value:g} reads {found:g}, expected {expected:g}",
            )


def clause_10(trial: Trial) -> None:
    """a value outside the scale raises OutOfRange and sends nothing"""
    instrument = _open(trial)
    for knob in knobs(instrument):
        for value in outside(knob.scale):
            require_refused_unsent(trial, instrument, partial(knob.set, value), f"{knob.name} = {value:g}")


def outside(scale: Scale) -> tuple[float, ...]:
    beyond = 0.01 * (scale.high - scale.low) + scale.resolution
    return (scale.high + beyond, scale.low - beyond, math.inf, -math.inf, math.nan)


def require_refused_unsent(trial: Trial, instrument: Instrument, call: Callable[[], object], what: str) -> None:
    sent = len(trial.proxy.messages)
    error = failure_of(call)
    require(isinstance(error, OutOfRange), f"{what} gave {error!r}, not OutOfRange")
    instrument.read_identity()  # what was sent before this has passed the proxy when this is answered
    extra = trial.proxy.messages[sent:-1]
    require(not extra, f"{what} was refused, and {extra} sent all the same")


def clause_11(trial: Trial) -> None:
    """an error of the instrument raises InstrumentRefused and the old value stands"""
    instrument = _open(trial)
    trial.require_scpi()
    for knob in knobs(instrument):
        knob.set(knob.small(0.03))
        before = knob.read()
        trial.proxy.refuse_next_command = True
        error = failure_of(partial(knob.set, knob.small(0.05)))
        require(
            isinstance(error, InstrumentRefused), f"{knob.name}: the instrument refused, and the call gave {error!r}"
        )
        require(knob.read() == before, f"{knob.name} was refused and does not read the old value")


def clause_12(trial: Trial) -> None:
    """values do not switch outputs, outputs do not change values"""
    instrument = _open(trial)
    for on in (False, True, False):
        for knob in knobs(instrument):
            knob.set(knob.small(0.03))
        before = [knob.read() for knob in knobs(instrument)]
        for switch in switches(instrument):
            switch.set(on)
        require([knob.read() for knob in knobs(instrument)] == before, f"switching {_word(on)} changed a value")
        for knob in knobs(instrument):
            knob.set(knob.small(0.02))
            states = [switch.read() for switch in switches(instrument)]
            require(states == [on] * len(states), f"setting {knob.name} while {_word(on)} left the outputs {states}")


def _word(on: bool) -> str:
    return "on" if on else "off"


def clause_13(trial: Trial) -> None:
    """off may be repeated and is sent each time"""
    instrument = _open(trial)
    trial.require_scpi()
    for switch in switches(instrument):
        switch.set(False)
        sent = len(trial.proxy.messages)
        switch.set(False)
        require(not switch.read(), f"channel {switch.channel} is on after off was sent twice")
        require(bool(trial.proxy.commands(sent)), f"channel {switch.channel}: the second off was not sent")


def clause_14(trial: Trial) -> None:
    """what is measured is what is at the terminals"""
    instrument = _open(trial)
    tried = False
    states = {switch.channel: switch for switch in switches(instrument)}
    for knob in knobs(instrument):
        if knob.measure is None or knob.measure() is None:
            continue
        tried = True
        value = knob.small(0.05)
        knob.set(value)
        states[knob.channel].set(True)
        require_measured(knob, value, _NEAR * abs(value) + knob.scale.accuracy(value), "on")
        states[knob.channel].set(False)
        require_measured(knob, 0.0, max(knob.scale.accuracy(0.0), _ABOUT_ZERO * knob.scale.high), "off")
    if not tried:
        raise NotTried("the instrument cannot tell what is at its terminals")


def require_measured(knob: Knob, expected: float, tolerance: float, state: str) -> None:
    until_s = time.monotonic() + _SETTLES_S
    while True:
        found = knob.measure() if knob.measure is not None else None
        if found is not None and abs(found - expected) <= tolerance:
            return
        require(
            time.monotonic() < until_s,
            f"{knob.name}: {found} V measured with the output {state}, expected {expected:g} within {tolerance:g}",
        )
        time.sleep(_LOOKS_S)


def clause_15(trial: Trial) -> None:
    """a command to one channel changes nothing on another"""
    instrument = _open_channels(trial)
    if len(instrument.channels) < 2:
        raise NotTried("the supply has one channel")
    for knob in knobs(instrument):
        knob.set(knob.small(0.02))
    for switch in switches(instrument):
        switch.set(False)
    for knob, switch in zip(knobs(instrument), switches(instrument), strict=True):
        others = [channel for channel in instrument.channels if channel != knob.channel]
        before = [(instrument.read_voltage_v(one), instrument.read_output(one)) for one in others]
        knob.set(knob.small(0.04))
        switch.set(True)
        after = [(instrument.read_voltage_v(one), instrument.read_output(one)) for one in others]
        switch.set(False)
        require(after == before, f"a command to channel {knob.channel} changed another: {before} became {after}")


def clause_16(trial: Trial) -> None:
    """a channel that is not there raises OutOfRange and sends nothing"""
    instrument = _open_channels(trial)
    for channel in (0, -1, max(instrument.channels) + 1):
        calls: tuple[Callable[[], object], ...] = (
            partial(instrument.voltage, channel),
            partial(instrument.set_voltage_v, channel, 0.0),
            partial(instrument.read_voltage_v, channel),
            partial(instrument.measure_voltage_v, channel),
            partial(instrument.set_output, channel, False),
            partial(instrument.read_output, channel),
        )
        for call in calls:
            require_refused_unsent(trial, instrument, call, f"channel {channel}")


def _open_channels(trial: Trial) -> DcSupply:
    instrument = _open(trial)
    if not isinstance(instrument, DcSupply):
        raise NotTried("it has no channels")
    return instrument


CLAUSES = (clause_9, clause_10, clause_11, clause_12, clause_13, clause_14, clause_15, clause_16)
