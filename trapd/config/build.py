"""What physics and guard are built from: a `Config`, and the scales of the instruments where they are known."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from math import isfinite
from types import MappingProxyType
from typing import TYPE_CHECKING, Literal, cast

from trapd.config.points import sweeps_of
from trapd.config.records import Config, ElectrodeSection, InterlockSection, ResonatorSection, Sweep
from trapd.errors import ConfigError
from trapd.guard.interlock import InterlockLimits
from trapd.guard.model import GuardModel, Limit, TickleLimits
from trapd.physics import trap as traps
from trapd.physics.resonator import Resonator
from trapd.physics.trap import Electrode, Escape, Trap
from trapd.setpoint import AMPLITUDE, TICKLE_BURST, TICKLE_FREQUENCY, TICKLE_LEVEL, unit_of

if TYPE_CHECKING:
    from trapd_drivers.interfaces import Scale

INTERLOCK_UNIT = "Pa"
_NO_SCALES: Mapping[str, Scale] = MappingProxyType({})


def trap_of(config: Config) -> Trap:
    trap, electrodes = config.trap, {name: _electrode(each) for name, each in config.electrodes.items()}
    curvature = config.drive.curvature
    if trap.geometry == "tensor":
        assert curvature is not None
        escape = (
            None if trap.escape_m is None else Escape(**dict(zip(("x_m", "y_m", "z_m"), trap.escape_m, strict=True)))
        )
        return traps.tensor(drive_curvature=curvature, electrodes=electrodes, escape=escape)
    assert trap.r0_m is not None
    assert trap.z0_m is not None
    if trap.geometry == "ring":
        return traps.ring(r0_m=trap.r0_m, z0_m=trap.z0_m, electrodes=electrodes, drive_curvature=curvature)
    assert trap.kappa is not None
    return traps.linear(
        r0_m=trap.r0_m,
        z0_m=trap.z0_m,
        kappa=trap.kappa,
        phases=cast("Literal[1, 2]", trap.phases),
        electrodes=electrodes,
        drive_curvature=curvature,
    )


def resonator_of(section: ResonatorSection) -> Resonator:
    return Resonator(
        gain=section.gain,
        gain_uncertainty=section.gain_uncertainty,
        center_hz=section.center_hz or 0.0,
        center_uncertainty_hz=section.center_uncertainty_hz,
        loaded_q=section.loaded_q,
    )


def guard_of(config: Config, scales: Mapping[str, Scale] = _NO_SCALES) -> GuardModel:
    """``scales`` by setpoint, in its unit, but ``drive.amplitude`` has that of the synthesizer's level (V peak); and those
    of the tickle.

    The limits are those of the file, tightened to what the instruments can do. Without scales (offline) nothing is
    quantised. Raises `ConfigError` where file and instrument have no value in common, or a step is too fine.
    """
    resonator, level = config.drive.resonator, scales.get(AMPLITUDE)
    highest = [
        most for most in (resonator.level_max_v, level.high if level else None) if most is not None and isfinite(most)
    ]
    return GuardModel(
        trap=trap_of(config),
        catalogue=config.species,
        limits={name: _limit(config, name, sweep, scales) for name, sweep in setpoints_of(config).items()},
        resonator=resonator_of(resonator),
        level_max_v=min(highest, default=None),
        level_resolution_v=level.resolution if level else 0.0,
        frequency_fixed=resonator.loaded_q is None,
        margin=config.guard.margin,
        min_secular_frequency_hz=config.guard.min_secular_frequency_hz,
        min_depth_ev=config.guard.min_depth_ev,
        tickle=_tickle(config, scales),
    )


def interlock_of(section: InterlockSection) -> InterlockLimits:
    """Levels are pressures, in Pa."""
    levels = {key: value for key, value in vars(section).items() if key != "instrument"}
    return InterlockLimits(unit=INTERLOCK_UNIT, **levels)


def setpoints_of(config: Config) -> dict[str, Sweep]:
    """The range of every setpoint of the trap: the drive's two, then the electrodes in the order of the file."""
    return sweeps_of(config.drive, config.electrodes)


def _electrode(section: ElectrodeSection) -> Electrode:
    return Electrode(kind=section.kind, weight=section.weight, curvature=section.curvature, field=section.field)


def _tickle(config: Config, scales: Mapping[str, Scale]) -> TickleLimits | None:
    if config.tickle is None:
        return None
    level, frequency, burst = (scales.get(name) for name in (TICKLE_LEVEL, TICKLE_FREQUENCY, TICKLE_BURST))
    if level is None or frequency is None:
        return TickleLimits(level_max_v=config.tickle.level_max_v)
    return TickleLimits(
        level_max_v=min(config.tickle.level_max_v, level.high),
        frequency_resolution_hz=frequency.resolution,
        frequency_hz=(frequency.low, frequency.high),
        burst_s=None if burst is None else (burst.low, burst.high),
    )


def _limit(config: Config, setpoint: str, sweep: Sweep, scales: Mapping[str, Scale]) -> Limit:
    lag_s = config.electrodes[setpoint].lag_s if setpoint in config.electrodes else 0.0
    limit = Limit(low=sweep.low, high=sweep.high, slew_per_s=sweep.slew_per_s, step=sweep.step, lag_s=lag_s)
    scale = scales.get(setpoint)
    if scale is None:
        return limit
    if setpoint == AMPLITUDE:  # a scale in synthesizer volts, so it says nothing of low, high and step here
        return replace(limit, boundaries=scale.boundaries)
    low, high, unit = max(sweep.low, scale.low), min(sweep.high, scale.high), unit_of(setpoint)
    if low > high:
        able = f"{scale.low:.12g} to {scale.high:.12g} {unit}"
        raise ConfigError(
            f"{config.source}: {setpoint} = {sweep.low:.12g} to {sweep.high:.12g} {unit}; expected some of {able}, "
            "the range of its instrument"
        )
    if sweep.step < scale.resolution:
        raise ConfigError(
            f"{config.source}: {setpoint} step = {sweep.step:.12g} {unit}; expected at least {scale.resolution:.12g} "
            f"{unit}, the resolution of its instrument"
        )
    return replace(limit, low=low, high=high, resolution=scale.resolution, boundaries=scale.boundaries)
