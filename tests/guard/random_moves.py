"""Seeded random traps and moves: every geometry, tilted ones, one or two species, with and without resonator, lag and steps."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from math import pi
from pathlib import Path

import numpy as np

from tests.guard.orbit import Array, curvatures
from trapd.config.build import guard_of
from trapd.config.records import (
    Config,
    DriveSection,
    ElectrodeKind,
    ElectrodeSection,
    Geometry,
    GuardSection,
    Matrix,
    ResonatorSection,
    Sweep,
    TrapSection,
)
from trapd.guard.limits import realised
from trapd.guard.model import GuardModel
from trapd.physics.species import ATOMIC_MASS_KG, ELEMENTARY_CHARGE_C, Species
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents
from trapd_drivers.interfaces import Scale

_WIDE = 1e9  # volts or hertz that no instrument here gives


@dataclass(frozen=True, kw_only=True)
class Move:
    """One trap, what is in it, where it stands and where it is asked to go."""

    config: Config
    scales: Mapping[str, Scale]
    present: dict[str, float]
    target: dict[str, float]

    @property
    def model(self) -> GuardModel:
        return guard_of(self.config, self.scales)

    @property
    def contents(self) -> Contents:
        return Contents(presence="held", ions=dict.fromkeys(self.config.species, 1))

    def displacement(self, name: str, values: Mapping[str, float]) -> float:
        """What the margin displaces a setpoint by, written out once more."""
        step = self.scales[name].resolution if name in self.scales else 0.0
        if name == AMPLITUDE:
            step *= true_gain(self.config.drive.resonator, values[FREQUENCY])
        return max(self.config.guard.margin * abs(values[name]), step)


def true_gain(resonator: ResonatorSection, frequency_hz: float, error: float = 0.0, shift_hz: float = 0.0) -> float:
    """Electrode volts per synthesizer volt of a resonator whose gain is off by ``error`` and whose centre by ``shift_hz``."""
    gain = resonator.gain * (1 + error)
    if resonator.loaded_q is None or resonator.center_hz is None:
        return gain
    away = 2 * resonator.loaded_q * (frequency_hz - resonator.center_hz - shift_hz) / resonator.center_hz
    return float(gain / (1 + away**2) ** 0.5)


def random_moves(seed: int) -> Iterator[Move]:
    rng = np.random.default_rng(seed)
    while True:
        yield _move(rng)


def _move(rng: np.random.Generator) -> Move:
    frequency_hz = 10 ** rng.uniform(6, 7.4)
    species = _species(rng, frequency_hz)
    bare = _config(rng, species, frequency_hz)
    values = _operating_point(rng, bare, frequency_hz)
    resonant = bool(rng.random() < 0.5)
    target = _elsewhere(rng, bare, values, resonant=resonant)
    typical = {name: max(abs(values[name]), abs(target[name])) for name in values}
    config, scales = _instruments(rng, bare, typical, resonant=resonant)
    model = guard_of(config, scales)
    present = realised(model, values)
    asked = {name: value for name, value in target.items() if value != values[name]}
    reached = realised(model, {**present, **asked})
    return Move(
        config=config,
        scales=scales,
        present=present,
        target={**present, **{name: reached[name] for name in asked}},
    )


def _species(rng: np.random.Generator, frequency_hz: float) -> dict[str, Species]:
    first = Species(
        name="first",
        mass_kg=rng.uniform(9, 200) * ATOMIC_MASS_KG,
        charge_c=rng.choice([1, 2]) * ELEMENTARY_CHARGE_C,
        damping_per_s=2 * pi * frequency_hz * 10 ** rng.uniform(-3, -0.6) if rng.random() < 0.2 else 0.0,
    )
    if rng.random() < 0.5:
        return {"first": first}
    second = Species(  # alike enough in charge to mass to be held together
        name="second",
        mass_kg=rng.uniform(1.4, 2.6) * first.mass_kg if rng.random() < 0.4 else rng.uniform(0.7, 1.4) * first.mass_kg,
        charge_c=first.charge_c,
    )
    if second.mass_kg > 1.4 * first.mass_kg:
        second = replace(second, charge_c=2 * first.charge_c)
    return {"first": first, "second": second}


def _config(rng: np.random.Generator, species: dict[str, Species], frequency_hz: float) -> Config:
    geometry: Geometry = rng.choice(["linear", "ring", "tensor"])
    r0 = rng.uniform(0.3e-3, 1e-3)
    electrodes = dict(_electrodes(rng, geometry, r0))
    driven = None
    if geometry == "tensor":
        weak = rng.uniform(0, 0.5)
        driven = _tilted(rng, np.array([1.0, weak - 1, -weak]) / r0**2, rng.choice([0.0, 0.3, 3.0]))
    wide = Sweep(low=frequency_hz / 4, high=4 * frequency_hz, slew_per_s=1.0, step=1.0)
    return Config(
        source=Path("random.toml"),
        text="",
        trap=TrapSection(
            name="random",
            geometry=geometry,
            r0_m=None if geometry == "tensor" else r0,
            z0_m=None
            if geometry == "tensor"
            else r0 * (rng.uniform(2, 6) if geometry == "linear" else rng.uniform(0.5, 1)),
            kappa=rng.uniform(0.1, 0.5) if geometry == "linear" else None,
            phases=int(rng.choice([1, 2])) if geometry == "linear" else 1,
        ),
        species=species,
        drive=DriveSection(
            instrument=None,
            waveform="sine",
            frequency=wide,
            amplitude=replace(wide, low=0.0, high=_WIDE),
            resonator=ResonatorSection(gain=rng.uniform(10, 100)),
            curvature=driven,
        ),
        electrodes=electrodes,
        instruments={},
        guard=GuardSection(margin=rng.uniform(0.01, 0.08)),
        points={},
        record_file=Path("random.sqlite"),
    )


def _electrodes(rng: np.random.Generator, geometry: Geometry, r0: float) -> Iterator[tuple[str, ElectrodeSection]]:
    wide = Sweep(low=-_WIDE, high=_WIDE, slew_per_s=1.0, step=1.0)

    def electrode(
        name: str, kind: ElectrodeKind, weight: float = 1.0, curvature: Matrix | None = None
    ) -> tuple[str, ElectrodeSection]:
        section = ElectrodeSection(
            name=name, kind=kind, instrument=None, channel=None, voltage=wide, weight=weight, curvature=curvature
        )
        return name, section

    if geometry == "linear":
        if rng.random() < 0.3:
            yield electrode("west", "endcap", 0.5)
            yield electrode("east", "endcap", 0.5)
        else:
            yield electrode("endcaps", "endcap")
        yield electrode("rods", "rods")
    elif geometry == "ring":
        yield electrode("bias", "ring")
    else:
        along = _tilted(rng, np.array([-0.5, -0.5, 1.0]) / r0**2 / 10, rng.choice([0.0, 0.1]))
        yield electrode("along", "other", curvature=along)
    if geometry == "tensor" or rng.random() < 0.35:
        skew = rng.uniform(0.2, 1)
        yield electrode("skew", "other", curvature=_tilted(rng, np.array([1.0, skew - 1, -skew]) / r0**2 / 20, 3.0))
    if rng.random() < 0.3:  # a shim: a field, but no curvature
        yield electrode("shim", "other")


def _tilted(rng: np.random.Generator, principal: Array, angle: float) -> Matrix:
    """Curvatures along axes turned by about ``angle`` radians."""
    turn = angle * rng.normal(size=(3, 3))
    basis, _ = np.linalg.qr(np.eye(3) + turn - turn.T)
    matrix = basis @ np.diag(principal) @ basis.T
    (xx, xy, xz), (_, yy, yz), (_, _, zz) = matrix.tolist()
    return (xx, xy, xz), (xy, yy, yz), (xz, yz, zz)


def _operating_point(rng: np.random.Generator, config: Config, frequency_hz: float) -> dict[str, float]:
    """Somewhere in the lower first region of the first species: q up to 0.8, a of the order of q^2."""
    drive, electrodes = curvatures(config)
    one = config.species["first"]
    scale = one.charge_c / (one.mass_kg * (2 * pi * frequency_hz) ** 2)
    q = rng.uniform(0.1, 0.8)
    values = {FREQUENCY: frequency_hz, AMPLITUDE: q / (2 * scale * float(np.linalg.norm(drive, 2)))}
    for name, curvature in electrodes.items():
        strength = 4 * scale * float(np.linalg.norm(curvature, 2))
        a = q**2 * rng.uniform(-0.2, 0.2)
        if name in ("endcaps", "west", "east", "along"):
            a = abs(a)
        values[name] = rng.choice([a / strength, 0.0], p=[0.9, 0.1]) if strength else rng.uniform(-5, 5)
    return values


def _elsewhere(
    rng: np.random.Generator, config: Config, values: dict[str, float], *, resonant: bool
) -> dict[str, float]:
    """Other values for one, some or all setpoints; with a flat gain the frequency stays."""
    fresh = _operating_point(rng, config, values[FREQUENCY])
    near = {name: value * rng.uniform(0.7, 1.35) for name, value in values.items()}
    source = fresh if rng.random() < 0.5 else near
    moved = rng.random(len(values)) < rng.choice([0.3, 0.6, 1.0])
    target = {
        name: source[name] if moves else value for moves, (name, value) in zip(moved, values.items(), strict=True)
    }
    if rng.random() < 0.04:  # the same in opposite phase: fine there, but not on the way
        target[AMPLITUDE] *= -1
    target[FREQUENCY] = values[FREQUENCY] * (rng.uniform(0.985, 1.015) if resonant and rng.random() < 0.6 else 1.0)
    if target == values:
        target[AMPLITUDE] = near[AMPLITUDE]
    return target


def _instruments(
    rng: np.random.Generator, bare: Config, typical: Mapping[str, float], *, resonant: bool
) -> tuple[Config, dict[str, Scale]]:
    """Resonator, steps, slew, lag and quantisation for these sizes."""
    frequency_hz, spread = typical[FREQUENCY], bare.drive.resonator
    spread = replace(spread, gain_uncertainty=rng.choice([0.0, rng.uniform(0, 0.03)]))
    loaded_q = rng.uniform(50, 300)
    width_hz = frequency_hz / loaded_q
    if resonant:
        center_hz = frequency_hz + rng.uniform(-1, 1) * width_hz
        spread = replace(
            spread, loaded_q=loaded_q, center_hz=center_hz, center_uncertainty_hz=rng.uniform(0, 0.03) * width_hz
        )
    steps = {name: max(size, 1e-3) / rng.uniform(5, 12) for name, size in typical.items()}
    steps[FREQUENCY] = width_hz / rng.uniform(2, 10)
    electrodes = {
        name: replace(
            each,
            voltage=_around(typical[name], steps[name]),
            lag_s=10 ** rng.uniform(-3, 0) if rng.random() < 0.5 else 0.0,
        )
        for name, each in bare.electrodes.items()
    }
    drive = replace(
        bare.drive,
        resonator=spread,
        frequency=Sweep(
            low=frequency_hz / 2, high=2 * frequency_hz, step=steps[FREQUENCY], slew_per_s=steps[FREQUENCY] / 0.05
        ),
        amplitude=_around(typical[AMPLITUDE], steps[AMPLITUDE]),
    )
    guard = bare.guard
    if rng.random() < 0.2:
        guard = replace(guard, min_secular_frequency_hz=frequency_hz * rng.uniform(0.002, 0.02))
    if rng.random() < 0.2 and bare.trap.geometry != "tensor":
        guard = replace(guard, min_depth_ev=rng.uniform(0.001, 0.3))
    config = replace(bare, drive=drive, electrodes=electrodes, guard=guard)
    if rng.random() < 0.5:
        return config, {}
    scales = {name: _scale(step * 10 ** rng.uniform(-3, -0.5)) for name, step in steps.items()}
    gain = true_gain(spread, frequency_hz)
    scales[AMPLITUDE] = _scale(scales[AMPLITUDE].resolution / gain)
    return config, scales


def _around(size: float, step: float) -> Sweep:
    """Limits so wide that they do not interfere."""
    return Sweep(low=-6 * size - step, high=6 * size + step, step=step, slew_per_s=step / 0.05)


def _scale(resolution: float) -> Scale:
    return Scale(low=-_WIDE, high=_WIDE, resolution=resolution, accuracy_absolute=0.0, accuracy_relative=0.0)
