"""What stands in the rack: frozen records and their defaults, which suit a linear trap driven at 21 MHz."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import ClassVar, Literal

from trapd_simulated.errors import SettingsError
from trapd_simulated.ion_settings import IonSettings


def _ascending(names: str, low: float, high: float) -> None:
    if not low < high:
        raise SettingsError(f"{names} = {low:g}, {high:g}: the second must be above the first")


@dataclass(frozen=True, kw_only=True)
class Dialect:
    """What one instrument says or understands differently. The defaults are the plain SCPI-1999 way."""

    addressing: Literal["suffix", "list", "select"] = "suffix"  # VOLT2 tree | VOLT 5,(@2) | INST:NSEL 2;:VOLT 5
    amplitude_unit: Literal["VPK", "VPP", "VRMS", "DBM"] = "VPK"  # of the RF level; DBM into 50 ohm
    level_factor: float = 1.0  # real volts per displayed volt; 2 for "displayed into 50 ohm, load is high impedance"
    replies: Literal["plain", "unit", "header"] = "plain"  # 1.0E+00 | 1.0 V | VOLT 1.0
    numbers: Literal["NR3", "NR2"] = "NR3"
    digits: int = 10  # behind the point of a numeric reply
    output_words: bool = False  # OUTP? answers ON and OFF instead of 1 and 0
    frequency_unit: Literal["HZ", "KHZ", "MHZ"] = "HZ"  # of frequency replies
    frequency_default_unit: Literal["HZ", "KHZ", "MHZ"] = "HZ"  # of a frequency sent without suffix
    pressure_unit: Literal["MBAR", "PA", "TORR"] = "MBAR"
    measures: bool = True  # False: no MEASure subsystem, only the programmed value can be asked for
    min_spacing_s: float = 0.0  # rack time; a message sooner after the one before is dropped
    spacing_code: int = -363  # and this error is queued for it
    error_queue_depth: int = 16
    error_codes: Mapping[int, int] = field(default_factory=dict)  # standard code to the device's own
    commands: Mapping[str, tuple[str, ...]] = field(default_factory=dict)  # command name to its own header patterns
    reply_end: str = "\n"


@dataclass(frozen=True, kw_only=True)
class InstrumentSettings:
    """What every instrument has."""

    KIND: ClassVar[str]
    model: str
    serial: str
    version: str = "1.0"
    port: int = 0  # 0: any free one
    max_clients: int = 8
    dialect: Dialect = field(default_factory=Dialect)


@dataclass(frozen=True, kw_only=True)
class RfSourceSettings(InstrumentSettings):
    """A synthesizer. Volts are real, zero to peak, at its terminals, except ``level_resolution``."""

    KIND: ClassVar = "rf-source"
    model: str = "RF SOURCE"
    serial: str = "SIM-RF"
    frequency_min_hz: float = 1e6
    frequency_max_hz: float = 60e6
    frequency_resolution_hz: float = 1.0
    level_min_v: float = 0.0
    level_max_v: float = 12.5
    level_resolution: float = 1e-4  # in the dialect's amplitude unit, as displayed
    settle_s: float = 1e-3  # time constant of the level after a change or a switch
    range_boundaries_v: tuple[float, ...] = ()  # crossing one interrupts the output
    range_dropout_s: float = 5e-3
    bursts: bool = True  # False: knows no BURSt subsystem
    burst_min_s: float = 1e-5
    burst_max_s: float = 1000.0
    accuracy_absolute_v: float = 2e-3  # of MEASure:AC?, in volts rms
    accuracy_relative: float = 2e-3

    def __post_init__(self) -> None:
        _ascending("frequency_min_hz, frequency_max_hz", self.frequency_min_hz, self.frequency_max_hz)
        _ascending("level_min_v, level_max_v", self.level_min_v, self.level_max_v)
        _ascending("0, frequency_resolution_hz", 0.0, self.frequency_resolution_hz)
        _ascending("0, level_resolution", 0.0, self.level_resolution)
        _ascending("burst_min_s, burst_max_s", self.burst_min_s, self.burst_max_s)
        if self.dialect.amplitude_unit == "DBM":
            _ascending("0, level_min_v (in dBm)", 0.0, self.level_min_v)


@dataclass(frozen=True, kw_only=True)
class ChannelSettings:
    """One channel of a DC supply and the wire to its electrode."""

    low_v: float = -25.0
    high_v: float = 25.0
    resolution_v: float = 1e-3
    slew_v_per_s: float = 2000.0
    lag_s: float = 3e-3  # RC low-pass between terminals and electrode
    accuracy_absolute_v: float = 4e-3
    accuracy_relative: float = 2e-4

    def __post_init__(self) -> None:
        _ascending("low_v, high_v", self.low_v, self.high_v)
        _ascending("0, resolution_v", 0.0, self.resolution_v)
        _ascending("0, slew_v_per_s", 0.0, self.slew_v_per_s)


@dataclass(frozen=True, kw_only=True)
class DcSupplySettings(InstrumentSettings):
    """A DC supply; channel n is the n-th entry, from 1."""

    KIND: ClassVar = "dc-supply"
    model: str = "DC SUPPLY"
    serial: str = "SIM-DC"
    channels: tuple[ChannelSettings, ...] = (
        ChannelSettings(low_v=0.0, high_v=1000.0, resolution_v=1e-2, accuracy_absolute_v=3e-2),
        ChannelSettings(),
        ChannelSettings(),
        ChannelSettings(),
    )


@dataclass(frozen=True, kw_only=True)
class PhotonCounterSettings(InstrumentSettings):
    """Counts what the ion scatters."""

    KIND: ClassVar = "photon-counter"
    model: str = "PHOTON COUNTER"
    serial: str = "SIM-COUNTER"
    gate_min_s: float = 1e-4
    gate_max_s: float = 100.0

    def __post_init__(self) -> None:
        _ascending("gate_min_s, gate_max_s", self.gate_min_s, self.gate_max_s)


@dataclass(frozen=True, kw_only=True)
class GaugeSettings(InstrumentSettings):
    """A vacuum gauge."""

    KIND: ClassVar = "gauge"
    model: str = "VACUUM GAUGE"
    serial: str = "SIM-VACUUM"
    pressure_mbar: float = 2e-10  # until the control port says otherwise
    noise_relative: float = 0.02  # rms of one reading
    pressure_max_mbar: float = 1e-3  # above: over range

    def __post_init__(self) -> None:
        _ascending("0, pressure_mbar", 0.0, self.pressure_mbar)


@dataclass(frozen=True, kw_only=True)
class ResonatorSettings:
    """The true resonator between the drive synthesizer and the electrodes; its user knows it only within errors."""

    instrument: str = "rf"
    center_hz: float = 21.0005e6  # cold
    loaded_q: float = 200.0
    gain: float = 38.2  # electrode volts per synthesizer volt on resonance
    warmup_shift_hz: float = -800.0  # of the center, in the end, at the reference amplitude
    warmup_reference_v: float = 300.0  # electrode amplitude; dissipated power goes with its square
    warmup_time_s: float = 300.0


def default_instruments() -> dict[str, InstrumentSettings]:
    tickle = RfSourceSettings(
        serial="SIM-TICKLE",
        frequency_min_hz=10e3,
        frequency_max_hz=30e6,
        level_max_v=1.0,
        level_resolution=1e-5,
        accuracy_absolute_v=1e-4,
    )
    return {
        "rf": RfSourceSettings(),
        "dc": DcSupplySettings(),
        "tickle": tickle,
        "counter": PhotonCounterSettings(),
        "vacuum": GaugeSettings(),
    }


@dataclass(frozen=True, kw_only=True)
class RackSettings:
    """Instruments by name, in the order of their ports, the resonator on one of the RF sources, and what ion may come.

    ``ion`` None: there is never an ion, nor light.
    """

    instruments: Mapping[str, InstrumentSettings] = field(default_factory=default_instruments)
    resonator: ResonatorSettings = field(default_factory=ResonatorSettings)
    ion: IonSettings | None = field(default_factory=IonSettings)
    control_port: int = 0

    def __post_init__(self) -> None:
        drive = self.instruments.get(self.resonator.instrument)
        if not isinstance(drive, RfSourceSettings):
            raise SettingsError(
                f"resonator.instrument = {self.resonator.instrument!r}: expected the name of an RF source, one of "
                f"{[name for name, one in self.instruments.items() if isinstance(one, RfSourceSettings)]}"
            )
