"""``[drive]`` and ``[drive.resonator]``, and the ranges that electrodes have too."""

from __future__ import annotations

from math import nan
from typing import Literal

from trapd.config.geometry import read_curvature
from trapd.config.keys import LATER_WAVEFORMS
from trapd.config.quantity import Dimension
from trapd.config.records import DriveSection, Geometry, Matrix, ResonatorSection, Sweep
from trapd.config.table import Table

_SWEEP = '{ min = "...", max = "...", slew = "...", step = "..." }'


def read_sweep(table: Table, key: str, section: str, *, low: float | None = None, above: float | None = None) -> Sweep:
    """The range under ``key`` of a frequency or a voltage. Its lower end is ``low`` or more, and ``low`` when the file
    names none; it is more than ``above``."""
    dimension: Dimension = "frequency" if key == "frequency" else "voltage"
    rate: Dimension = "frequency rate" if key == "frequency" else "voltage rate"
    sweep = table.table(key, section, _SWEEP)
    start = sweep.quantity("min", dimension, default=low, least=low, above=above)
    end = sweep.quantity("max", dimension)
    if start > end:
        sweep.wrong("max", "no less than min")
        start = end = nan
    slew_per_s = sweep.quantity("slew", rate, above=0.0)
    step = sweep.quantity("step", dimension, above=0.0)
    return Sweep(low=start, high=end, slew_per_s=slew_per_s, step=step)


def read_drive(table: Table, geometry: Geometry | None) -> DriveSection:
    return DriveSection(
        instrument=table.text("instrument", "the name of an instrument") if "instrument" in table else None,
        waveform=_waveform(table),
        frequency=read_sweep(table, "frequency", "drive.frequency", above=0.0),
        amplitude=read_sweep(table, "amplitude", "drive.amplitude", low=0.0),
        resonator=_resonator(table),
        curvature=_curvature(table, geometry),
        warm_up_s=table.quantity("warm_up", "time", default=0.0, least=0.0),
    )


def _waveform(table: Table) -> Literal["sine"]:
    waveform = table.text("waveform", '"sine"', default="sine")
    if waveform in LATER_WAVEFORMS:
        table.refuse(("waveform",), 'known but not built yet in this version; expected "sine"')
    elif waveform not in ("sine", ""):
        table.wrong("waveform", '"sine"')
    return "sine"


def _curvature(table: Table, geometry: Geometry | None) -> Matrix | None:
    if geometry == "tensor" and "curvature" not in table:
        table.wrong("curvature", "the drive's [xx, yy, zz, yz, xz, xy] per volt, 1/m^2 (tensor geometry)")
    curvature = read_curvature(table)
    if curvature is not None and not any(map(any, curvature)):
        table.wrong("curvature", "numbers that are not all zero")
    return curvature


def _resonator(table: Table) -> ResonatorSection:
    """From its own table, or flat from the keys beside ``gain``."""
    if "resonator" not in table:
        if "gain" not in table:
            table.wrong("gain", 'either gain = "1 V/V" in [drive] or a table [drive.resonator]')
            return ResonatorSection(gain=1.0)
        return _flat(table)
    table.refuse(("gain", "gain_uncertainty", "level_max"), "with [drive.resonator] it belongs in there")
    resonator = table.table("resonator", "drive.resonator", "a table [drive.resonator]")
    flat = _flat(resonator)
    return ResonatorSection(
        gain=flat.gain,
        gain_uncertainty=flat.gain_uncertainty,
        level_max_v=flat.level_max_v,
        center_hz=resonator.quantity("center", "frequency", above=0.0),
        center_uncertainty_hz=resonator.quantity("center_uncertainty", "frequency", default=0.0, least=0.0),
        loaded_q=resonator.number("loaded_q", above=0.0),
    )


def _flat(table: Table) -> ResonatorSection:
    uncertainty = table.quantity("gain_uncertainty", "share", default=0.0, least=0.0)
    if uncertainty >= 1.0:
        table.wrong("gain_uncertainty", "less than 100 %")
    return ResonatorSection(
        gain=table.quantity("gain", "gain", above=0.0),
        gain_uncertainty=uncertainty,
        level_max_v=table.optional_quantity("level_max", "voltage", above=0.0),
    )
