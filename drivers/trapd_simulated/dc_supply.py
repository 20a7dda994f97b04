"""A DC supply of several channels, addressed in any of the three ways SCPI instruments do it."""

from __future__ import annotations

from collections.abc import Callable
from typing import ClassVar, TypeAlias

from trapd_simulated.arguments import Arguments, scales
from trapd_simulated.channel import Channel, Ramp
from trapd_simulated.clock import Clock
from trapd_simulated.dialect import number_reply, quantise, state_reply
from trapd_simulated.errors import RackUseError, ScpiError
from trapd_simulated.instrument import Call, Instrument, Query, Set
from trapd_simulated.settings import DcSupplySettings

_VOLTS = scales("V")
_Bounds: TypeAlias = Callable[[Channel], tuple[float, float]]


class DcSupply(Instrument):
    """Channels are numbered from 1. A command first understands all its channels, then changes any."""

    settings: DcSupplySettings
    PATTERNS: ClassVar = {
        "voltage": ("[SOURce#]:VOLTage[:LEVel][:IMMediate][:AMPLitude]",),
        "output": ("OUTPut#[:STATe]",),
        "protection": ("[SOURce#]:VOLTage:PROTection[:LEVel]",),
        "tripped": ("[SOURce#]:VOLTage:PROTection:TRIPped",),
        "clear": ("[SOURce#]:VOLTage:PROTection:CLEar",),
        "measure": ("MEASure[:SCALar][:VOLTage][:DC]",),
        "select": ("INSTrument:NSELect",),
    }

    def __init__(self, name: str, settings: DcSupplySettings, clock: Clock, seed: int) -> None:
        super().__init__(name, settings, clock, seed)
        now_s = clock.now_s()
        self.channels = {
            number: Channel(one, now_s, self.random.uniform(-1.0, 1.0))
            for number, one in enumerate(settings.channels, start=1)
        }
        self._selected = 1

    def commands(self) -> dict[str, tuple[Set | None, Query | None]]:
        selecting = self.dialect.addressing == "select"
        return {
            "voltage": (self._set_voltage, self._read_voltage),
            "output": (self._set_output, self._states("OUTP", lambda channel: channel.on)),
            "protection": (self._set_protection, self._read_protection),
            "tripped": (None, self._states("VOLT:PROT:TRIP", lambda channel: channel.tripped)),
            "clear": (self._clear, None),
            "measure": (None, self._measure if self.dialect.measures else None),
            "select": (self._select, lambda call: str(self._selected)) if selecting else (None, None),
        }

    def advance(self, now_s: float) -> None:
        for channel in self.channels.values():
            channel.advance(now_s)

    def ramps(self, time_s: float) -> dict[int, Ramp]:
        """The law of each channel in force at rack time ``time_s``."""
        with self.lock:
            self.advance(self.clock.now_s())
            return {number: channel.ramp(time_s) for number, channel in self.channels.items()}

    def next_change_s(self, after_s: float) -> float:
        """When a channel is next told something else behind ``after_s``; infinite when not by now."""
        with self.lock:
            return min(channel.next_change_s(after_s) for channel in self.channels.values())

    def changes(self) -> int:
        """How often a channel's law has changed so far."""
        with self.lock:
            return sum(channel.changes() for channel in self.channels.values())

    def reset(self, now_s: float) -> None:
        self._selected = 1
        for channel in self.channels.values():
            channel.reset(now_s)

    def trip(self, channel: int) -> None:
        if channel not in self.channels:
            raise RackUseError(f"{self.name} has channels {list(self.channels)}, not {channel}; nothing tripped")
        with self.lock:
            now_s = self.clock.now_s()
            self.advance(now_s)
            self.channels[channel].trip(now_s)

    def _addressed(self, call: Call) -> list[Channel]:
        """The channels a command is for; takes the channel list and ends the arguments."""
        numbers: tuple[int, ...] = (call.suffix,)
        if self.dialect.addressing != "suffix":
            if call.suffix != 1:
                raise ScpiError(-114, "channels are not addressed by suffix")
            numbers = (self._selected,)
        if self.dialect.addressing == "list":
            numbers = self._listed(call)
        call.arguments.done()
        self._require(numbers, -114)
        return [self.channels[number] for number in numbers]

    def _listed(self, call: Call) -> tuple[int, ...]:
        numbers = call.arguments.channels()
        self._require(numbers, -222)
        return numbers

    def _require(self, numbers: tuple[int, ...], code: int) -> None:
        for number in numbers:
            if number not in self.channels:
                raise ScpiError(code, f"channel {number}")

    def _values(self, call: Call, bounds: _Bounds) -> list[tuple[Channel, float]]:
        """The first argument as each addressed channel understands it, so that none is changed when one refuses."""
        value = call.arguments.take()
        channels = self._addressed(call)
        return [(one, Arguments((value,)).quantity(_VOLTS, *bounds(one), default_unit="V")) for one in channels]

    def _set_voltage(self, call: Call) -> None:
        for channel, value in self._values(call, _range):
            channel.program(quantise(value, channel.settings.resolution_v), call.now_s)

    def _set_protection(self, call: Call) -> None:
        for channel, value in self._values(call, _protection_range):
            channel.protect(value, call.now_s)

    def _set_output(self, call: Call) -> None:
        on = call.arguments.boolean()
        channels = self._addressed(call)
        if on and any(channel.tripped for channel in channels):
            raise ScpiError(-221, "protection has tripped; clear it first")
        for channel in channels:
            channel.switch(on, call.now_s)

    def _clear(self, call: Call) -> None:
        for channel in self._addressed(call):
            channel.tripped = False

    def _select(self, call: Call) -> None:
        number = call.arguments.integer(1, len(self.channels))
        call.arguments.done()
        self._selected = number

    def _read_voltage(self, call: Call) -> str:
        return self._read(call, "VOLT", lambda channel: channel.programmed_v, _range)

    def _read_protection(self, call: Call) -> str:
        return self._read(call, "VOLT:PROT", lambda channel: channel.protection_v, _protection_range)

    def _read(self, call: Call, header: str, value: Callable[[Channel], float], bounds: _Bounds) -> str:
        wanted = call.arguments.take_before_channels()
        values = []
        for channel in self._addressed(call):
            extreme = Arguments(wanted).extreme(*bounds(channel))
            values.append(value(channel) if extreme is None else extreme)
        return number_reply(self.dialect, header, "V", *values)

    def _states(self, header: str, state: Callable[[Channel], bool]) -> Query:
        return lambda call: state_reply(self.dialect, header, *(state(one) for one in self._addressed(call)))

    def _measure(self, call: Call) -> str:
        """With suffixes too the channels are a list here: MEASure takes no numeric suffix for them."""
        numbers = (self._selected,) if self.dialect.addressing == "select" else self._listed(call)
        call.arguments.done()
        return number_reply(self.dialect, "MEAS:VOLT", "V", *(self._measured_v(one, call.now_s) for one in numbers))

    def _measured_v(self, number: int, now_s: float) -> float:
        channel = self.channels[number]
        true_v = channel.terminal_v(now_s)
        accuracy_v = channel.settings.accuracy_absolute_v + channel.settings.accuracy_relative * abs(true_v)
        return self.readback(true_v, accuracy_v, channel.bias, number)


def _range(channel: Channel) -> tuple[float, float]:
    return channel.settings.low_v, channel.settings.high_v


def _protection_range(channel: Channel) -> tuple[float, float]:
    return 0.0, channel.protection_max_v
