"""The kinds of alarms, each with what happens if nobody acts and what to do, for a person at 3 a.m.

An alarm needs an action by a person (ISA-18.2 [mem]); what needs none is an entry of the record, and no alarm. A deadband
is applied by whoever watches the number; here a condition holds or it does not.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from trapd.setpoint import Presence

Priority = Literal["high", "medium", "low"]


@dataclass(frozen=True, kw_only=True)
class AlarmKind:
    """A condition is told once it held for ``on_delay_s`` and over once it was away for ``off_delay_s`` (s, monotonic); with
    contents in ``suppressed_in`` it means nothing. ``latched``: seen only once, and shown as it came until acknowledged."""

    name: str
    consequence: str
    action: str
    priority: Priority
    on_delay_s: float = 0.0
    off_delay_s: float = 0.0
    suppressed_in: frozenset[Presence] = frozenset()
    latched: bool = False


_WORDS = {
    # "it" is an instrument
    "instrument_unreachable": ("Nobody sees or controls what it does.", "Check its power, cable and network."),
    "off_not_confirmed": ("High voltage may still be on.", "Switch it off at its front panel, touch nothing before."),
    "power_cycled": ("Its settings are lost, perhaps the ions too.", "Find out why, then set the values again."),
    "protection_tripped": ("It switched itself off, ions may be lost.", "Remove the short or overload first."),
    "identity_changed": ("Its limits may not be those of the trap file.", "Check what is connected there."),
    # a setpoint, an output, a scan, a gauge, an interlock (twice), a schedule
    "readback_differs": ("The ions may be lost.", "Compare it with the instrument's display, then set it again."),
    "output_changed": ("Ions may be lost, or high voltage on.", "Find who is at the instrument, then switch it."),
    "frequency_off_prediction": ("The guard's model may be wrong.", "Scan again, then check gain and species."),
    "gauge_unreadable": ("The pressure is unknown, its interlocks are blind.", "Check its power, cable, range."),
    "interlock_warning": ("It trips if this goes on.", "Look at what it watches and remove the cause."),
    "interlock_tripped": ("Outputs may be off and ions lost.", "Remove the cause before you switch on."),
    "schedule_missed": ("A measurement is missing.", "Read why among its due runs, scan by hand if needed."),
    # the trap's light, the record, the machine's clock, the tickle: there is one, and the source is empty
    "counts_vanished": ("The ion may be dark, hot or lost.", "Check light, shutters and counter, then the ion."),
    "record_unwritable": ("Nothing but off works before it can be written.", "Free or reconnect its disk."),
    "clock_stepped": ("Recorded times do not fit, scans may be missed.", "Check the machine's time service."),
    "tickle_on": ("It heats the ions although no scan runs.", "Switch its generator off at the front panel."),
}
_HIGH = ("off_not_confirmed", "output_changed", "protection_tripped", "interlock_tripped")
_LOW = ("frequency_off_prediction", "gauge_unreadable", "clock_stepped", "schedule_missed")
_LATCHED = ("power_cycled", "protection_tripped", "identity_changed", "clock_stepped", "schedule_missed")
_OF_IONS = ("counts_vanished", "frequency_off_prediction")
_DELAYS_S = {  # until it is told, and until it is over
    "instrument_unreachable": (10.0, 10.0),
    "readback_differs": (2.0, 5.0),
    "counts_vanished": (2.0, 5.0),
    "gauge_unreadable": (10.0, 10.0),
    "interlock_warning": (2.0, 10.0),
    "record_unwritable": (0.0, 10.0),
    "tickle_on": (2.0, 0.0),
}


def kind_of(name: str) -> AlarmKind:
    """That kind. A name that only an older record knows has no words and no delays, and nothing suppresses it."""
    consequence, action = _WORDS.get(name, ("", ""))
    on_delay_s, off_delay_s = _DELAYS_S.get(name, (0.0, 0.0))
    return AlarmKind(
        name=name,
        consequence=consequence,
        action=action,
        priority="high" if name in _HIGH else "low" if name in _LOW else "medium",
        on_delay_s=on_delay_s,
        off_delay_s=off_delay_s,
        suppressed_in=frozenset(("none", "loading")) if name in _OF_IONS else frozenset(),
        latched=name in _LATCHED,
    )


KINDS: Mapping[str, AlarmKind] = {name: kind_of(name) for name in _WORDS}
"""By name. A condition's ``source`` names what the comments above say."""
