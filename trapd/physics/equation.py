"""From volts and hertz to the dimensionless equation of motion, and to the axes that move independently.

``u'' + 2 kappa u' + [A + 2 Q cos 2 tau] u = 0`` with tau = Omega t / 2; `Coefficients` holds A, Q and kappa of many states.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import isfinite, pi

import numpy as np
from numpy.typing import NDArray

from trapd.physics.point import AMPLITUDE, FREQUENCY, Point
from trapd.physics.species import Species
from trapd.physics.trap import Array, Trap

Indices = tuple[int, ...]


@dataclass(frozen=True, kw_only=True)
class Coefficients:
    """``a`` and ``q``: (states, d, d) symmetric; ``kappa``: (states,) damping over drive frequency, both angular;
    ``theta``: (states,) the least beta wanted, 0 where none is."""

    a: Array
    q: Array
    kappa: Array
    theta: Array

    def __getitem__(self, rows: NDArray[np.intp] | NDArray[np.bool_] | slice) -> Coefficients:
        return Coefficients(a=self.a[rows], q=self.q[rows], kappa=self.kappa[rows], theta=self.theta[rows])

    def stacked(self, blocks: Sequence[Indices]) -> Coefficients:
        """The same states for groups of axes of one size: all states of the first group, then all of the second, ..."""
        if blocks == [(0, 1, 2)]:
            return self
        count = len(blocks)
        return Coefficients(
            a=stacked(self.a, blocks),
            q=stacked(self.q, blocks),
            kappa=np.tile(self.kappa, count),
            theta=np.tile(self.theta, count),
        )


def stacked(matrices: Array, blocks: Sequence[Indices]) -> Array:
    """(blocks x states, d, d) submatrices of (states, 3, 3) along groups of d axes."""
    pick = np.array(blocks)
    size = pick.shape[1]
    return matrices[:, pick[:, :, None], pick[:, None, :]].swapaxes(0, 1).reshape(-1, size, size)


def coefficients(
    trap: Trap, species: Species, points: Sequence[Point], min_secular_hz: float | None = None
) -> Coefficients:
    """A, Q and kappa of every point, (points, 3, 3) and (points,)."""
    names = trap.electrode_curvature.keys()
    frequencies, volts = [], []
    for point in points:
        if point.electrodes.keys() != names:
            raise ValueError(f"a point must name the electrodes {sorted(names)}, not {sorted(point.electrodes)}")
        frequencies.append(float(point.frequency_hz))
        volts.append([float(point.amplitude_v), *map(point.electrodes.__getitem__, names)])
    frequency, volt = np.array(frequencies), np.array(volts, dtype=float)
    if not (min(frequencies) > 0 and isfinite(sum(frequencies)) and isfinite(volt.sum())):
        raise ValueError("every point needs a positive finite drive frequency, a finite amplitude and finite voltages")
    omega = 2 * pi * frequency
    scale = 2 * species.charge_c / (species.mass_kg * omega**2)
    both = (scale[:, None] * volt @ trap.stacked_curvature).reshape(-1, 2, 3, 3)
    return Coefficients(
        a=both[:, 0],
        q=both[:, 1],
        kappa=species.damping_per_s / omega,
        theta=2 * (min_secular_hz or 0.0) / frequency,
    )


def at_rest(point: Point, setpoint: str) -> Point:
    """The point with one voltage at 0 V; unchanged for the drive frequency."""
    if setpoint == FREQUENCY:
        return point
    if setpoint == AMPLITUDE:
        return replace(point, amplitude_v=0.0)
    return replace(point, electrodes={**point.electrodes, setpoint: 0.0})


def per_volt(trap: Trap, species: Species, points: Sequence[Point], setpoint: str) -> tuple[Array, Array]:
    """dA/dx and dQ/dx of a voltage, each (points, 3, 3); zero for the drive frequency."""
    if setpoint == FREQUENCY:
        return np.zeros((len(points), 3, 3)), np.zeros((len(points), 3, 3))
    unit = trap.stacked_curvature[trap.setpoints.index(setpoint) - 1]
    omega = 2 * pi * np.array([point.frequency_hz for point in points], dtype=float)
    both = ((2 * species.charge_c / (species.mass_kg * omega**2))[:, None] * unit).reshape(-1, 2, 3, 3)
    return both[:, 0], both[:, 1]


def independent_axes(*matrices: Array) -> list[list[Indices]]:
    """Groups of axes that no off-diagonal element of these (..., 3, 3) matrices joins, in lists of equal size."""
    linked = np.logical_or.reduce(np.concatenate([matrix.reshape(-1, 9) for matrix in matrices])).tolist()
    pairs = [(i, j) for i, j in ((0, 1), (0, 2), (1, 2)) if linked[3 * i + j] or linked[3 * j + i]]
    if not pairs:
        return [[(0,), (1,), (2,)]]
    if len(pairs) == 1:
        alone = 3 - sum(pairs[0])
        return [[(alone,)], [pairs[0]]]
    return [[(0, 1, 2)]]
