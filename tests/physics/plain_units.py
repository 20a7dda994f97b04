"""Traps in plain units: a volt on an electrode is an a and a volt of drive is a q, so published numbers serve as they are."""

from __future__ import annotations

from collections.abc import Sequence
from math import pi

import numpy as np

from trapd.physics.point import Point
from trapd.physics.species import Species
from trapd.physics.trap import Electrode, Trap, tensor

FREQUENCY_HZ = 1 / pi  # Omega = 2
PARTICLE = Species(name="particle", mass_kg=1.0, charge_c=1.0)


def damped(kappa: float) -> Species:
    """A particle with damping over drive frequency, both angular, of ``kappa``."""
    return Species(name="particle", mass_kg=1.0, charge_c=1.0, damping_per_s=2 * kappa)


def trap(a: Sequence[float], q: Sequence[float], hold: Sequence[float] = (0, 0, 0)) -> Trap:
    """One volt on electrode "a" is ``a`` along x, y, z; one volt of drive is ``q``; electrode "hold" keeps the rest."""
    return tensor(
        drive_curvature=2 * np.diag(q),
        electrodes={"a": Electrode(curvature=np.diag(a)), "hold": Electrode(curvature=np.diag(hold))},
    )


def one_axis() -> Trap:
    """x is the Mathieu equation of (a, q); y and z are held still."""
    return trap([1, 0, 0], [1, 0, 0], [0, 0.3, 0.3])


def mass_filter() -> Trap:
    """x at (a, q), y at (-a, -q)."""
    return trap([1, -1, 0], [1, -1, 0], [0, 0, 0.3])


def ring() -> Trap:
    """z at (a, q), x and y at (-a/2, -q/2)."""
    return trap([-0.5, -0.5, 1], [-0.5, -0.5, 1])


def point(a: float, q: float) -> Point:
    return Point(frequency_hz=FREQUENCY_HZ, amplitude_v=q, electrodes={"a": a, "hold": 1.0})
