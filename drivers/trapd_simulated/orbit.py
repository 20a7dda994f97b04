"""The equation of motion of one ion over one period of the drive, integrated in laboratory units to a linear map.

    m r'' = -m G r' - Q [H_static + H_drive sin(W t)] r + Q E + Q T c(t),    c' = -w s,  s' = w c

The state is (r, r'/W, c, s, E): position in m, velocity over the drive's W = 2 pi f in m, the tickle as an oscillator
(c, s in volts) and the static field E in V/m, which stays what it is. r is seen when the drive passes zero, rising.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]

SIZE = 11
POSITION, VELOCITY, TICKLE, FIELD = slice(0, 3), slice(3, 6), slice(6, 8), slice(8, 11)
_STEPS = 8  # of one period
_ORDER = 16  # of the Taylor polynomial of one step: (2 pi / 8)^17 / 17! = 5e-17
_DAMPINGS = np.array([0.0, 0.5, 1.0])  # integrated; a damping between them is interpolated


@dataclass(frozen=True, kw_only=True)
class Constants:
    """What the equation holds fixed; curvatures 3x3 in V/m^2."""

    charge_over_mass: float  # C/kg
    drive_hz: float
    drive_curvature: Array
    static_curvature: Array
    tickle_field_per_v: Array  # T, (3,), 1/m
    damping_per_s: float  # G, the greatest there will be


class Trap:
    """The steps of one period, integrated once; each frequency of the tickle then has its `PeriodMap` cheaply."""

    def __init__(self, constants: Constants) -> None:
        self.constants = constants
        self._steps = _integrate(constants)

    def tickled(self, tickle_hz: float) -> PeriodMap:
        angle = 2.0 * math.pi / _STEPS * tickle_hz / self.constants.drive_hz
        maps = np.zeros((len(_DAMPINGS), _STEPS, SIZE, SIZE))
        maps[:, :, :6, :6] = self._steps[..., :6]
        maps[:, :, :6, FIELD] = self._steps[..., 6:9]
        maps[:, :, :6, TICKLE] = self._steps[..., 9:] @ _tickle_series(angle)
        cosine, sine = math.cos(angle), math.sin(angle)
        maps[:, :, TICKLE, TICKLE] = ((cosine, -sine), (sine, cosine))
        maps[:, :, FIELD, FIELD] = np.eye(3)
        while maps.shape[1] > 1:
            maps = maps[:, 1::2] @ maps[:, 0::2]
        return PeriodMap(maps[:, 0])


class PeriodMap:
    """The map of the state over one period, for any damping up to the greatest.

    The damping of one period is small (2e-3 at 5e4 per second): a parabola through three integrations errs by 1e-10.
    """

    def __init__(self, at_dampings: Array) -> None:
        none, half, full = at_dampings
        self._parabola = (none, 4.0 * half - 3.0 * none - full, 2.0 * (full + none) - 4.0 * half)
        self._powers: dict[int, list[Array]] = {}

    def one(self, damping: float) -> Array:
        """(11, 11), ``damping`` as a part of the greatest, 0 .. 1."""
        constant, slope, bend = self._parabola
        return np.asarray(constant + damping * (slope + damping * bend))

    def after(self, state: Array, periods: int, damping: float) -> Array:
        """The state ``periods`` later; entries that are not finite when the orbit has run away."""
        for power in range(periods.bit_length()):
            if periods >> power & 1:
                state = self._power(damping, power) @ state
        return state

    def track(self, state: Array, doublings: int, damping: float) -> Array:
        """(3, 2^doublings): the position now and after each of the next periods."""
        found = np.empty((SIZE, 2**doublings))
        found[:, 0] = state
        for power in range(doublings):
            known = 2**power
            np.matmul(self._power(damping, power), found[:, :known], out=found[:, known : 2 * known])
        return found[POSITION]

    def _power(self, damping: float, power: int) -> Array:
        """The map of 2^power periods; dampings are told apart to a thousandth of the greatest."""
        key = round(1000.0 * damping)
        if key not in self._powers:
            while len(self._powers) >= 8:
                del self._powers[next(iter(self._powers))]
            self._powers[key] = [self.one(key / 1000.0)]
        powers = self._powers[key]
        while len(powers) <= power:
            powers.append(powers[-1] @ powers[-1])
        return powers[power]


def _integrate(constants: Constants) -> Array:
    """(3, steps, 6, 9 + order): position and velocity at the end of each step, at no, half and the greatest damping.

    From position, velocity and field at its start, and from a tickle that grows as a power of the time within the step.
    r is a power series of W t from the start of the step, its coefficients times h^n.
    """
    omega, h = 2.0 * math.pi * constants.drive_hz, 2.0 * math.pi / _STEPS
    scale = constants.charge_over_mass * (h / omega) ** 2
    curvature = scale * np.concatenate((constants.drive_curvature, constants.static_curvature), axis=1)
    damping = (h * constants.damping_per_s / omega * _DAMPINGS)[:, None, None]
    force = _forces(scale, constants.tickle_field_per_v)
    shape = (3, len(_DAMPINGS), _STEPS, force.shape[-1])
    series, sine = np.zeros((_ORDER + 1, *shape)), _sine_series()
    series[0, ..., 0:3] = np.eye(3)[:, None, None, :]
    series[1, ..., 3:6] = h * np.eye(3)[:, None, None, :]
    for n in range(_ORDER - 1):
        driven = np.einsum("nj,nagjb->agjb", sine[n::-1], series[: n + 1])
        pull = curvature @ np.concatenate((driven, series[n])).reshape(6, -1)
        rest = force[n] - pull.reshape(shape) - (n + 1) * damping * series[n + 1]
        series[n + 2] = rest / ((n + 1) * (n + 2))
    slopes = np.tensordot(np.arange(_ORDER + 1) / h, series, axes=1)
    return np.concatenate((series.sum(axis=0), slopes)).transpose(1, 2, 0, 3)


def _forces(scale: float, tickle_field_per_v: Array) -> Array:
    """(order, 3, 1, 1, 9 + order): of each power of the time, what each column of `_integrate` pulls with."""
    force = np.zeros((_ORDER, 3, 1, 1, 9 + _ORDER))
    force[0, :, 0, 0, 6:9] = scale * np.eye(3)
    for n in range(_ORDER):
        force[n, :, 0, 0, 9 + n] = scale * tickle_field_per_v
    return force


@lru_cache(maxsize=1)
def _sine_series() -> Array:
    """(order, steps): sin(W t) around the start of each step."""
    h, n = 2.0 * math.pi / _STEPS, np.arange(_ORDER)[:, None]
    factorials = np.array([math.factorial(one) for one in range(_ORDER)])[:, None]
    return np.asarray(np.sin(h * np.arange(_STEPS) + n * math.pi / 2.0) * h**n / factorials)


def _tickle_series(angle: float) -> Array:
    """(order, 2): what c(t) becomes of c and of s at the start of the step: cos and -sin of ``angle`` over the step."""
    terms = np.cumprod(np.concatenate(([1.0], angle / np.arange(1, _ORDER))))
    phase = np.arange(_ORDER) * (math.pi / 2.0)
    return np.stack((terms * np.cos(phase), -terms * np.sin(phase)), axis=1)
