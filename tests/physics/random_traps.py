"""Seeded random traps of every kind, with a point near the first region, a setpoint and a range for it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import pi

import numpy as np

from trapd.physics.point import AMPLITUDE, FREQUENCY, Point
from trapd.physics.species import ATOMIC_MASS_KG, ELEMENTARY_CHARGE_C, Species
from trapd.physics.trap import Array, Electrode, Trap, curvature, linear, ring, tensor


@dataclass(frozen=True, kw_only=True)
class Draw:
    trap: Trap
    species: Species
    point: Point
    setpoint: str
    low: float
    high: float

    def at(self, value: float) -> Point:
        if self.setpoint == FREQUENCY:
            return replace(self.point, frequency_hz=value)
        if self.setpoint == AMPLITUDE:
            return replace(self.point, amplitude_v=value)
        return replace(self.point, electrodes={**self.point.electrodes, self.setpoint: value})


def coefficients_at(draw: Draw, point: Point) -> tuple[Array, Array, float]:
    """A, Q and kappa by the textbook formulas, written out once more on purpose."""
    omega = 2 * pi * point.frequency_hz
    static = sum(volts * draw.trap.electrode_curvature[name] for name, volts in point.electrodes.items())
    scale = draw.species.charge_c / (draw.species.mass_kg * omega**2)
    a = 4 * scale * np.asarray(static)
    return a, 2 * scale * point.amplitude_v * draw.trap.drive_curvature, draw.species.damping_per_s / omega


def draw(random: np.random.Generator, *, damped: bool = False, kinds: str = "linear tilted turned ring tensor") -> Draw:
    kind = str(random.choice(kinds.split()))
    trap, strength = _ring(random) if kind == "ring" else _tensor(random) if kind == "tensor" else _linear(random, kind)
    frequency = 10 ** random.uniform(6.3, 7.7)
    omega = 2 * pi * frequency
    species = Species(
        name="ion",
        mass_kg=random.uniform(9, 200) * ATOMIC_MASS_KG,
        charge_c=ELEMENTARY_CHARGE_C * random.integers(1, 3),
        damping_per_s=omega * 10 ** random.uniform(-3, -0.2) if damped else 0.0,
    )
    q = random.uniform(0.1, 0.9)
    volts_per_q = species.mass_kg * omega**2 / (2 * species.charge_c * strength)
    names = list(trap.electrode_curvature)
    static = {name: float(random.normal()) for name in names}
    total = sum(static[name] * trap.electrode_curvature[name] for name in names)
    wanted = random.uniform(0.05, 0.8) * q**2 * species.mass_kg * omega**2 / (4 * species.charge_c)
    scale = wanted / np.abs(total).max()
    point = Point(
        frequency_hz=frequency,
        amplitude_v=q * volts_per_q,
        electrodes={name: value * scale for name, value in static.items()},
    )
    setpoint = str(random.choice(trap.setpoints))
    return Draw(
        trap=trap, species=species, point=point, setpoint=setpoint, **_range(random, trap, species, point, setpoint)
    )


def _range(random: np.random.Generator, trap: Trap, species: Species, point: Point, setpoint: str) -> dict[str, float]:
    if setpoint == FREQUENCY:
        return {"low": 0.3 * point.frequency_hz, "high": 4 * point.frequency_hz}
    if setpoint == AMPLITUDE:
        return {"low": float(random.choice([-5, 0.1])) * point.amplitude_v, "high": 5 * point.amplitude_v}
    stiffest = np.abs(trap.electrode_curvature[setpoint]).max()
    reach = species.mass_kg * (2 * pi * point.frequency_hz) ** 2 / (4 * species.charge_c) / stiffest
    return {"low": -0.4 * reach, "high": 0.4 * reach}


def _source_free(matrix: Array) -> Array:
    return matrix - np.trace(matrix) / 3 * np.eye(3)


def _linear(random: np.random.Generator, kind: str) -> tuple[Trap, float]:
    electrodes = {"endcaps": Electrode(kind="endcap"), "rods": Electrode(kind="rods")}
    drive, r0_m = None, 4e-4
    if kind == "tilted":
        electrodes["tilt"] = Electrode(curvature=_source_free(curvature(*random.normal(size=6)) * 3e5))
    if kind == "turned":
        angle = random.uniform(0, pi)
        drive = np.array([[np.cos(angle), np.sin(angle), 0], [np.sin(angle), -np.cos(angle), 0], [0, 0, 0]]) / r0_m**2
    return linear(r0_m=r0_m, z0_m=2e-3, kappa=0.3, electrodes=electrodes, drive_curvature=drive), r0_m**-2


def _ring(random: np.random.Generator) -> tuple[Trap, float]:
    z0_m = random.uniform(0.5e-3, 1e-3)
    return ring(r0_m=1e-3, z0_m=z0_m, electrodes={"ring": Electrode(kind="ring")}), 4 / (1e-6 + 2 * z0_m**2)


def _tensor(random: np.random.Generator) -> tuple[Trap, float]:
    free = _source_free if random.random() < 0.5 else np.asarray
    drive, one, two = (free(curvature(*random.normal(size=6)) * 1e6) for _ in range(3))
    electrodes = {"one": Electrode(curvature=one), "two": Electrode(curvature=two)}
    return tensor(drive_curvature=drive, electrodes=electrodes), float(np.abs(drive).max())
