"""The trap file as frozen records, SI inside. Built by `trapd.config.read`; nothing here reads a file."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

from trapd.physics.species import Species

Geometry = Literal["linear", "ring", "tensor"]
ElectrodeKind = Literal["endcap", "rods", "ring", "other"]
InterlockAction = Literal["hold", "ramp down", "off"]
ScanMode = Literal["x", "y", "z"]
Matrix = tuple[tuple[float, float, float], tuple[float, float, float], tuple[float, float, float]]


@dataclass(frozen=True, kw_only=True)
class TrapSection:
    """``[trap]``. ``r0_m``, ``z0_m``, ``kappa``, ``phases`` as the geometry needs them; None where it does not.

    ``escape_m`` (x, y, z): how far from the centre an ion is lost; only in tensor geometry, where nothing else says it.
    """

    name: str
    geometry: Geometry
    r0_m: float | None = None
    z0_m: float | None = None
    kappa: float | None = None
    phases: int = 1
    escape_m: tuple[float, float, float] | None = None


@dataclass(frozen=True, kw_only=True)
class Sweep:
    """The allowed range of one setpoint, the mean rate and the largest single command of a ramp."""

    low: float
    high: float
    slew_per_s: float
    step: float


@dataclass(frozen=True, kw_only=True)
class ResonatorSection:
    """``[drive.resonator]``, or a flat gain: then ``center_hz`` and ``loaded_q`` are None."""

    gain: float
    gain_uncertainty: float = 0.0
    center_hz: float | None = None
    center_uncertainty_hz: float = 0.0
    loaded_q: float | None = None
    level_max_v: float | None = None


@dataclass(frozen=True, kw_only=True)
class DriveSection:
    """``[drive]``. ``curvature`` (1/m^2 per volt) overrides the ideal one; never None in tensor geometry, which has no
    ideal. ``warm_up_s`` follows a switch-on."""

    instrument: str | None
    waveform: Literal["sine"]
    frequency: Sweep
    amplitude: Sweep
    resonator: ResonatorSection
    curvature: Matrix | None = None
    warm_up_s: float = 0.0


@dataclass(frozen=True, kw_only=True)
class ElectrodeSection:
    """``[electrodes.NAME]``. ``curvature`` (1/m^2 per volt) overrides the ideal one; ``field`` in 1/m per volt."""

    name: str
    kind: ElectrodeKind
    instrument: str | None
    channel: int | None
    voltage: Sweep
    weight: float = 1.0
    lag_s: float = 0.0
    curvature: Matrix | None = None
    field: tuple[float, float, float] | None = None


@dataclass(frozen=True, kw_only=True)
class InstrumentSection:
    """``[instruments.NAME]``."""

    name: str
    driver: str
    resource: str
    profile: str = "plain"
    timeout_s: float = 1.0


@dataclass(frozen=True, kw_only=True)
class GuardSection:
    margin: float
    min_secular_frequency_hz: float | None = None
    min_depth_ev: float | None = None


@dataclass(frozen=True, kw_only=True)
class LoadingSection:
    """``[loading]``. How long *loading* lasts before it becomes *unknown*."""

    expires_s: float = 600.0


@dataclass(frozen=True, kw_only=True)
class TickleSection:
    """``[tickle]``. ``level_max_v`` (zero to peak) at the generator: never more, whatever a scan asks."""

    instrument: str | None
    level_max_v: float


@dataclass(frozen=True, kw_only=True)
class CounterSection:
    """``[counter]``. Below ``floor_per_s`` counts a second nobody is home, and nothing is tickled."""

    instrument: str | None
    floor_per_s: float


@dataclass(frozen=True, kw_only=True)
class ScanSection:
    """``[scans.NAME]``. ``species`` None: whatever single species is in the trap. ``tickle_v`` zero to peak at the
    generator. ``span_hz``: the full width of the search, a cap. ``target_hz``: stop at this standard uncertainty.
    ``width_hz``: about how wide the line is, full width at half maximum. ``passes``: the most there will be.
    ``min_contrast``: the least that counts as a line, of 1. ``model_uncertainty``: relative standard uncertainty of what
    this file predicts, beside that of the drive's gain: geometry, supplies, stray fields."""

    name: str
    mode: ScanMode
    species: str | None = None
    tickle_v: float
    span_hz: float
    dwell_s: float
    target_hz: float
    width_hz: float = 2000.0
    passes: int = 12
    min_contrast: float = 0.05
    model_uncertainty: float = 0.005
    method: str = "uniform"


@dataclass(frozen=True, kw_only=True)
class DueSection:
    """``[[schedule]]``: ``scan`` is due when ``cron``, five fields in UTC, says so. ``name``: that of the scan unless
    given."""

    name: str
    scan: str
    cron: str


@dataclass(frozen=True, kw_only=True)
class InterlockSection:
    """``[interlocks.NAME]``. Levels in Pa, None where there is none; see `trapd.guard.interlock.InterlockLimits`."""

    name: str
    instrument: str
    action: InterlockAction
    warn_above: float | None = None
    trip_above: float | None = None
    warn_below: float | None = None
    trip_below: float | None = None
    for_s: float = 0.0
    deadband: float = 0.1
    unreadable_s: float = 5.0


@dataclass(frozen=True, kw_only=True)
class ServerSection:
    """``[server]``. ``host``/``port`` of the TCP listener (port 0: any free one). ``socket``: path of the Unix socket, None
    for the usual one in the runtime directory."""

    host: str = "127.0.0.1"
    port: int = 8417
    socket: Path | None = None


@dataclass(frozen=True, kw_only=True)
class Config:
    """One trap file, checked. ``source`` is its path, ``text`` its content as read, for the record."""

    source: Path
    text: str
    trap: TrapSection
    species: Mapping[str, Species]
    drive: DriveSection
    electrodes: Mapping[str, ElectrodeSection]
    instruments: Mapping[str, InstrumentSection]
    guard: GuardSection
    points: Mapping[str, Mapping[str, float]]
    record_file: Path
    server: ServerSection = field(default_factory=ServerSection)
    loading: LoadingSection = field(default_factory=LoadingSection)
    tickle: TickleSection | None = None
    counter: CounterSection | None = None
    scans: Mapping[str, ScanSection] = field(default_factory=dict)
    schedule: tuple[DueSection, ...] = ()
    interlocks: Mapping[str, InterlockSection] = field(default_factory=dict)
