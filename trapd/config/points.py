"""``[points.NAME]``: named operating points, within the limits. The guard judges the rest when they are used."""

from __future__ import annotations

from collections.abc import Mapping

from trapd.config.electrodes import NAME, WANTED_NAME
from trapd.config.quantity import Dimension, closest
from trapd.config.records import DriveSection, ElectrodeSection, Sweep
from trapd.config.table import Mistakes, Table
from trapd.setpoint import AMPLITUDE, FREQUENCY, unit_of


def sweeps_of(drive: DriveSection, electrodes: Mapping[str, ElectrodeSection]) -> dict[str, Sweep]:
    """The range of every setpoint, the drive's first, then in the order of the file."""
    sweeps = {FREQUENCY: drive.frequency, AMPLITUDE: drive.amplitude}
    return sweeps | {name: electrode.voltage for name, electrode in electrodes.items()}


def read_points(table: Table, sweeps: Mapping[str, Sweep], mistakes: Mistakes) -> dict[str, dict[str, float]]:
    """``table`` is ``[points]`` itself. The first point must name the drive frequency: offline commands begin there."""
    points: dict[str, dict[str, float]] = {}
    for name in table.names():
        path = f"points.{name}"
        if not NAME.fullmatch(name):
            mistakes.note(path, f": expected {WANTED_NAME}")
            continue
        section = table.table(name, "points.NAME", f"a table [{path}]")
        if not points and FREQUENCY not in section:
            mistakes.note(
                path, f': "{FREQUENCY}" is missing; expected it in the first point, where offline commands begin'
            )
        points[name] = _read_point(section, sweeps, mistakes)
    return points


def _read_point(section: Table, sweeps: Mapping[str, Sweep], mistakes: Mistakes) -> dict[str, float]:
    values = {}
    for setpoint in section.names():
        if setpoint in sweeps:
            values[setpoint] = _read_value(section, setpoint, sweeps[setpoint])
        elif setpoint == "drive":
            mistakes.note(f"{section.path}.drive", f': expected the name in quotes, "{FREQUENCY}" or "{AMPLITUDE}"')
        else:
            mistakes.note(f"{section.path}.{setpoint}", f": unknown setpoint{closest(setpoint, sweeps)}")
    return values


def _read_value(section: Table, setpoint: str, sweep: Sweep) -> float:
    dimension: Dimension = "frequency" if setpoint == FREQUENCY else "voltage"
    value = section.quantity(setpoint, dimension)
    if value < sweep.low or value > sweep.high:
        unit = unit_of(setpoint)
        section.wrong(setpoint, f"a value within its limits, {sweep.low:.12g} to {sweep.high:.12g} {unit}")
    return value
