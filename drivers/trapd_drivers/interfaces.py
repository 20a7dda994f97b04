"""What every instrument must do. Each docstring is a numbered contract; the conformance kit has a clause for each line.

All quantities are SI: Hz, s, and volts zero to peak for anything that oscillates. `read_` asks the hardware, `set_`
commands it. No method sleeps longer than the driver's timeout. Nothing here sends ``*RST``.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

from trapd_drivers.errors import InstrumentRefused


@dataclass(frozen=True, kw_only=True)
class Identity:
    """Who answers. ``simulated`` is true only where the instrument itself says so."""

    manufacturer: str
    model: str
    serial: str
    firmware: str
    simulated: bool = False


@dataclass(frozen=True, kw_only=True)
class Status:
    """What `Instrument.read_status` found and thereby cleared.

    ``power_on``: the instrument was switched on since the last call. ``errors``: its error queue, oldest first, as
    (code, text). ``tripped``: the outputs its protection has latched off (channel numbers; 0 where there are no channels).
    """

    power_on: bool
    errors: tuple[tuple[int, str], ...] = ()
    tripped: tuple[int, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Scale:
    """One quantity an instrument can be told: its range, its resolution and how well it reads back.

    ``low`` .. ``high`` inclusive; ``resolution`` > 0 is the distance between programmable values (multiples of it);
    a readback agrees when it is within ``accuracy_absolute + accuracy_relative * |value|``; ``boundaries`` are values
    whose crossing interrupts the output (a range relay), empty when the range is continuous.
    """

    low: float
    high: float
    resolution: float
    accuracy_absolute: float
    accuracy_relative: float
    boundaries: tuple[float, ...] = ()

    def quantise(self, value: float) -> float:
        """The programmable value nearest to ``value``; what the instrument will really take."""
        return round(value / self.resolution) * self.resolution

    def accuracy(self, value: float) -> float:
        """Half width, in the scale's unit, of the band in which a readback of ``value`` agrees."""
        return self.accuracy_absolute + self.accuracy_relative * abs(value)


class Instrument(ABC):
    """Common to all instruments.

    1. Methods other than `interrupt` are called from one thread at a time, the same one until `close`.
    2. Every method returns or raises a `DriverError` within twice the timeout given at construction.
    3. After an error that dropped the session, the next call opens a new one and checks `*IDN?` (or its like) against
       the first identity seen; another instrument raises `WrongIdentity` and nothing is commanded.
    4. Constructing, opening, reading and closing change no output and no setting.
    5. `close` may be called twice, and after a failure.
    """

    resource: str

    @abstractmethod
    def read_identity(self) -> Identity:
        """6. The same for the life of the object, or `WrongIdentity`."""

    @abstractmethod
    def read_status(self) -> Status:
        """7. Reports power-on and queued errors exactly once; a second call right after is clean."""

    @abstractmethod
    def interrupt(self) -> None:
        """8. From any thread: makes a call in progress raise `Unreachable` within 0.1 s. Harmless when idle."""

    @abstractmethod
    def close(self) -> None: ...


class RfSource(Instrument):
    """A synthesizer with one output: a sine of a frequency (Hz) and a level (V, zero to peak, into its real load).

    9.  `set_x` followed by `read_x` gives the quantised value within the scale's accuracy.
    10. `set_x` outside the scale raises `OutOfRange` and sends nothing.
    11. `set_x` raises `InstrumentRefused` when the instrument reports an error for it; the old value stands.
    12. `set_frequency_hz` and `set_level_v` never change the output state; `set_output` never changes either value.
    13. `set_output(False)` is idempotent and is sent even when the output is believed off.

    Where it can emit bursts (what is written below is that of an instrument that cannot):

    17. `start_burst` emits the programmed sine from now on for that time and then nothing, by itself, whatever becomes
        of whoever started it; `read_burst` tells whether it still does.
    18. `start_burst` outside the scale raises `OutOfRange` and sends nothing.
    19. A burst of which any part is refused raises `InstrumentRefused` and emits nothing; the output is silent then,
        even where it was on.
    20. A burst in progress is replaced by a new one and ended at once by `set_output(False)`. `set_output(True)` means
        the sine without end, whatever was before.
    """

    frequency: Scale
    level: Scale
    burst: Scale | None = None
    """Durations of a burst in s, None when the instrument cannot do bursts."""

    @abstractmethod
    def set_frequency_hz(self, frequency_hz: float) -> None: ...

    @abstractmethod
    def read_frequency_hz(self) -> float: ...

    @abstractmethod
    def set_level_v(self, level_v: float) -> None: ...

    @abstractmethod
    def read_level_v(self) -> float:
        """The programmed level."""

    @abstractmethod
    def measure_level_v(self) -> float | None:
        """14. What is at the terminals, None when the instrument cannot tell. About 0 when the output is off."""

    @abstractmethod
    def set_output(self, on: bool) -> None: ...

    @abstractmethod
    def read_output(self) -> bool: ...

    def start_burst(self, duration_s: float) -> None:
        """The programmed sine for ``duration_s`` from now; returns when it has begun."""
        raise InstrumentRefused(f"{self.resource}: cannot emit a burst that ends by itself; nothing was sent")

    def read_burst(self) -> bool:
        """Whether a burst is being emitted now."""
        return False


class DcSupply(Instrument):
    """A supply with independent channels, each a voltage (V) and an output state.

    Clauses 9 to 14 as for `RfSource`, for each channel; and
    15. a command to one channel changes nothing on another;
    16. a channel outside ``channels`` raises `OutOfRange` and sends nothing.
    """

    channels: tuple[int, ...]

    @abstractmethod
    def voltage(self, channel: int) -> Scale: ...

    @abstractmethod
    def set_voltage_v(self, channel: int, voltage_v: float) -> None: ...

    @abstractmethod
    def read_voltage_v(self, channel: int) -> float:
        """The programmed voltage."""

    @abstractmethod
    def measure_voltage_v(self, channel: int) -> float | None:
        """What is at the terminals, None when the instrument cannot tell. Lags the programmed value while slewing."""

    @abstractmethod
    def set_output(self, channel: int, on: bool) -> None: ...

    @abstractmethod
    def read_output(self, channel: int) -> bool: ...


class PhotonCounter(Instrument):
    """Counts photons for a time that it keeps itself: start, then ask until there is a count.

    21. `start_count` returns at once, and so does `read_count`: None while counting.
    22. A finished count stays the same, whenever it is asked for, until the next `start_count`.
    23. `start_count` replaces a count in progress, and nothing of that one is in the new one. Before the first
        `start_count`, and when the instrument has lost the count (power cycle), `read_count` raises `InstrumentRefused`.
    24. `start_count` counts for the quantised time, and outside the scale it raises `OutOfRange` and sends nothing.
    """

    gate: Scale
    """Counting times in s."""

    @abstractmethod
    def start_count(self, gate_s: float) -> None: ...

    @abstractmethod
    def read_count(self) -> int | None: ...


class Gauge(Instrument):
    """An instrument that tells one quantity: a pressure, a temperature, a power.

    25. `read_value` asks the instrument each time. When it cannot tell (switched off, over its range) the call raises
        `InstrumentRefused` or `Malformed`: a number that was true earlier, or that never was, is not returned.
    """

    unit: str
    """The SI unit of what it reads: "Pa", "K", "W"."""

    @abstractmethod
    def read_value(self) -> float: ...
