"""The edges of intervals, to rounding: secant steps on the reduced condition that vanishes there, many edges side by side."""

from __future__ import annotations

from collections.abc import Callable
from enum import Enum

import numpy as np
from numpy.typing import NDArray

from trapd.physics.equation import Coefficients
from trapd.physics.krein import first_harmonic, mean_stiffness
from trapd.physics.pencil import Line
from trapd.physics.trap import Array

_REACH = 1e-4  # of the value: farther than this an eigenvalue of the pencil is never wrong
_FIRST_STEP = 1e-3  # of the reach
_STEPS = 5


class Side(Enum):
    """Which condition ends the accepted set."""

    ZERO = "beta = 0"
    ONE = "beta = 1"
    PAST = "past beta = 1"
    WANTED = "least beta"


Condition = Callable[[Coefficients], Array]


def polish(line: Line, values: Array) -> tuple[Array, list[Side], NDArray[np.intp]]:
    """For each row of the line the edge next to its value: its exact place, its side, the axis that dominates the lost mode."""
    conditions = _conditions(line)
    sides = list(conditions)
    found = [_nearest(line, condition, values) for condition in conditions.values()]
    choice = np.abs([eigenvalues for eigenvalues, _ in found]).argmin(axis=0)
    exact, axis = values.copy(), np.zeros(len(values), dtype=np.intp)
    for index, side in enumerate(sides):
        rows = np.flatnonzero(choice == index)
        if len(rows):
            eigenvalues, vectors = found[index]
            exact[rows] = _secant(line[rows], conditions[side], values[rows], eigenvalues[rows])
            weight = (vectors[rows].reshape(len(rows), -1, line.c.a.shape[1]) ** 2).sum(axis=1)
            axis[rows] = weight.argmax(axis=1)
    return exact, [sides[index] for index in choice], axis


def _conditions(line: Line) -> dict[Side, Condition]:
    conditions: dict[Side, Condition] = {
        Side.WANTED if line.c.theta.any() else Side.ZERO: mean_stiffness,
        Side.ONE: lambda c: first_harmonic(c)[0],
    }
    if line.c.kappa.any():
        conditions[Side.PAST] = _undamped_harmonic
    return conditions


def _undamped_harmonic(c: Coefficients) -> Array:
    """The first harmonic of v, which obeys K - kappa^2 without damping."""
    a = c.a - (c.kappa**2)[:, None, None] * np.eye(c.a.shape[1])
    return first_harmonic(Coefficients(a=a, q=c.q, kappa=0 * c.kappa, theta=c.theta))[0]


def _nearest(line: Line, condition: Condition, values: Array) -> tuple[Array, Array]:
    """The eigenvalue nearest to 0 of each row, and its vector."""
    matrices = condition(line.at(values))
    if matrices.shape[1] == 1:
        return matrices[:, 0, 0], np.ones((len(values), 1))
    eigenvalues, vectors = np.linalg.eigh(matrices)
    rows, index = np.arange(len(values)), np.abs(eigenvalues).argmin(axis=1)
    return eigenvalues[rows, index], vectors[rows, :, index]


def _secant(line: Line, condition: Condition, values: Array, eigenvalues: Array) -> Array:
    """Root of the nearest eigenvalue, given at the start; the start where the steps lead away (eigenvalues that only touch)."""
    reach = _REACH * np.maximum(np.abs(values), 1e-3 * (line.high - line.low))
    before, here = values + _FIRST_STEP * reach, values
    y_before, y_here = _nearest(line, condition, before)[0], eigenvalues
    for _ in range(_STEPS):
        change = y_here - y_before
        step = np.where(change == 0, 0.0, y_here * (here - before) / np.where(change == 0, 1.0, change))
        if (np.abs(step) <= np.finfo(float).eps * np.abs(here)).all():
            break
        step = np.where(np.abs(here - step - values) > reach, 0.0, step)
        before, y_before, here = here, y_here, here - step
        y_here = _nearest(line, condition, here)[0]
    return np.where(np.abs(here - values) < reach, here, values)
