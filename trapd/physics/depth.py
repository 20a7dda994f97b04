"""Well depth in the pseudopotential picture, the DC potential included: the energy an ion needs to reach its escape distance.

Along an axis e at distance L the harmonic potential, carried on to the electrode, is worth
``Q^2 |H_rf e|^2 L^2 / (4 m Omega^2) + Q (e . H_dc e) L^2 / 2 = m Omega^2 L^2 / 8 (|Q e|^2 / 2 + e . A e)``;
for ideal linear and ring traps the textbook depths (Dehmelt 1967 [mem]).
"""

from __future__ import annotations

from collections.abc import Sequence
from math import inf, pi, sqrt

import numpy as np

from trapd.physics.equation import Coefficients, at_rest, coefficients, per_volt
from trapd.physics.interval import Edge, Interval, intersect, whole_range
from trapd.physics.point import AMPLITUDE, FREQUENCY, Point
from trapd.physics.species import ELEMENTARY_CHARGE_C, Species
from trapd.physics.trap import AXES, Array, Trap


def depths_ev(trap: Trap, species: Species, points: Sequence[Point], c: Coefficients) -> Array | None:
    """(points, 3) depth along x, y and z in eV for the ion's whole charge, from the coefficients of these points; None when
    the trap has no escape distances."""
    if trap.escape_squared is None:
        return None
    total: Array = _unit(trap.escape_squared, species, points) * (np.einsum("sii->si", c.a) + _driven(c.q))
    return total


def _unit(escape_squared: Array, species: Species, points: Sequence[Point]) -> Array:
    """(points, 3) m Omega^2 L^2 / 8 in eV."""
    frequency = np.array([point.frequency_hz for point in points])
    scale: Array = species.mass_kg * (2 * pi * frequency[:, None]) ** 2 * escape_squared / (8 * ELEMENTARY_CHARGE_C)
    return scale


def _driven(q: Array) -> Array:
    """(points, 3) |Q e|^2 / 2."""
    half: Array = (q * q).sum(axis=1) / 2
    return half


def depth_intervals(
    trap: Trap,
    species: Species,
    points: Sequence[Point],
    setpoint: str,
    low: float,
    high: float,
    *,
    min_depth_ev: float,
) -> list[list[Interval]]:
    """For each point all maximal intervals of ``setpoint`` in [low, high] in which the depth along x, y and z is
    ``min_depth_ev`` or more, the other setpoints as they are. ValueError where the trap has no escape distances."""
    whole = whole_range(trap, setpoint, low, high)
    if trap.escape_squared is None:
        raise ValueError("this trap has no escape distances, so no depth")
    unit = _unit(trap.escape_squared, species, points)
    c = coefficients(trap, species, [at_rest(point, setpoint) for point in points])
    a_slope, q_slope = per_volt(trap, species, points, setpoint)
    static, driven = unit * np.einsum("sii->si", c.a), unit * _driven(c.q)
    slope, square = unit * np.einsum("sii->si", a_slope), unit * _driven(q_slope)
    result = []
    for row, point in enumerate(points):
        found = whole
        for axis, name in enumerate(AXES):
            if setpoint == FREQUENCY:
                spans = _inverse_square(driven[row, axis] * point.frequency_hz**2, min_depth_ev - static[row, axis])
            elif setpoint == AMPLITUDE:
                spans = _square(square[row, axis], min_depth_ev - static[row, axis])
            else:
                spans = _linear(slope[row, axis], min_depth_ev - static[row, axis] - driven[row, axis])
            rule = Edge(kind="rule", species=species.name, mode=name, rule="min_depth")
            found = intersect(found, [Interval(low=a, high=b, low_by=rule, high_by=rule) for a, b in spans])
        result.append(found)
    return result


def _linear(slope: float, rest: float) -> list[tuple[float, float]]:
    """Where slope x >= rest."""
    if slope == 0:
        return [(-inf, inf)] if rest <= 0 else []
    return [(rest / slope, inf)] if slope > 0 else [(-inf, rest / slope)]


def _square(factor: float, rest: float) -> list[tuple[float, float]]:
    """Where factor x^2 >= rest, for a factor that is not negative."""
    if rest <= 0:
        return [(-inf, inf)]
    if factor == 0:
        return []
    edge = sqrt(rest / factor)
    return [(-inf, -edge), (edge, inf)]


def _inverse_square(factor: float, rest: float) -> list[tuple[float, float]]:
    """Where factor / x^2 >= rest, for positive x and a factor that is not negative."""
    if rest <= 0:
        return [(0.0, inf)]
    return [(0.0, sqrt(factor / rest))] if factor > 0 else []
