"""An independent oracle: an ion's orbit over one drive period, integrated, and which stability region it belongs to.

Shares no code with `trapd.physics`. From ``m r'' + m gamma r' + Q [H_dc + H_rf cos Omega t] r = 0``, with time in drive
periods and ``r = exp(-gamma t / 2) v``, follows ``v'' = -k(t) v``, ``k = (Q/m)(H_dc + H_rf cos 2 pi t)/f^2 - (gamma/2f)^2``.

*Step*: the explicit symplectic Runge-Kutta-Nystroem method of order 6, 11 stages (Blanes & Moan 2002, J. Comput. Appl. Math.
142, 313, "SRKN 11 b" [mem]; its order and its agreement with published characteristic values are tested beside this file).

*Region*: zeros of solutions, counted as Morse counts them. Cut the period at times so close that no solution that vanishes at
one vanishes again before the next (Sturm: k < (pi/step)^2). The action of orbits straight between the cuts,
``sum 1/2 [x p]``, is then a quadratic form in the positions at the cuts, and its number of negative directions over the loops
x(T) = +-x(0) is that of negative (anti)periodic eigenvalues of -d^2/dt^2 - k (Milnor, Morse Theory, section 16; Bott 1956,
Comm. Pure Appl. Math. 9, 171); for one axis it is the number of zeros of a solution over the period (Magnus & Winkler,
Hill's Equation, section II). With d axes the motion is in the first region exactly when it is d and 0.
With damping a mode may lock at the first antiperiodic edge (a negative multiplier, one negative direction) while it decays;
past it there are two such directions and no negative multiplier.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import ceil, pi

import numpy as np
from numpy.typing import NDArray

from trapd.config.records import Config
from trapd.physics.species import Species

Array = NDArray[np.float64]

_CHUNK = 1024  # states side by side: they stay in the cache
_DRIFT = [0.123229775946271, 0.290553797799558, -0.127049212625417, -0.246331761062075, 0.357208872795928]
_KICK = [0.0414649985182624, 0.198128671918067, -0.0400061921041533, 0.0752539843015807, -0.0115113874206879]
DRIFTS = [*_DRIFT, 1 - 2 * sum(_DRIFT), *_DRIFT[::-1]]
KICKS = [*_KICK, 0.5 - sum(_KICK), 0.5 - sum(_KICK), *_KICK[::-1]]


@dataclass(frozen=True, kw_only=True)
class Actual:
    """What really stands at the electrodes: ``frequency_hz``, ``amplitude_v`` (zero to peak), ``electrodes`` name -> V."""

    frequency_hz: float
    amplitude_v: float
    electrodes: Mapping[str, float]


@dataclass(frozen=True, kw_only=True)
class Orbits:
    """Of each state: ``first_region``, and ``growth`` of the largest displacement over one period (above 1: it grows)."""

    first_region: NDArray[np.bool_]
    growth: Array


def curvatures(config: Config) -> tuple[Array, dict[str, Array]]:
    """Second derivatives of the potential at the centre per volt, 1/m^2: of the drive (3, 3) and of every electrode."""
    trap, r0, z0 = config.trap, config.trap.r0_m or 0.0, config.trap.z0_m or 0.0

    def rods(x: float, y: float, z: float) -> float:
        return trap.phases * (x * x - y * y) / (2 * r0**2)

    def endcap(x: float, y: float, z: float) -> float:
        return (trap.kappa or 0.0) * (z * z - (x * x + y * y) / 2) / z0**2

    def ring(x: float, y: float, z: float) -> float:
        return (x * x + y * y - 2 * z * z) / (r0**2 + 2 * z0**2)

    def other(x: float, y: float, z: float) -> float:
        return 0.0

    potentials = {"rods": rods, "endcap": endcap, "ring": ring, "other": other}
    driven = {"linear": rods, "ring": ring, "tensor": other}[trap.geometry]

    def second_derivatives(potential: object, given: object, weight: float = 1.0) -> Array:
        if given is not None:
            return np.array(given, dtype=float)
        assert callable(potential)
        e = np.eye(3) * 1e-3
        return weight * np.array(
            [
                [
                    (potential(*(a + b)) - potential(*(a - b)) - potential(*(b - a)) + potential(*(-a - b))) / 4e-6
                    for a in e
                ]
                for b in e
            ]
        )

    electrodes = {
        name: second_derivatives(potentials[each.kind], each.curvature, each.weight)
        for name, each in config.electrodes.items()
    }
    return second_derivatives(driven, config.drive.curvature), electrodes


def follow(config: Config, species: Species, states: Sequence[Actual], *, fineness: float = 1.0) -> Orbits:
    """Integrate one period of every state. ``fineness`` multiplies the number of steps."""
    drive, electrodes = curvatures(config)
    frequency = np.array([state.frequency_hz for state in states])
    amplitude = np.array([state.amplitude_v for state in states])
    volts = np.array([[state.electrodes[name] for name in electrodes] for state in states])
    static = np.einsum("se,eij->sij", volts, np.array(list(electrodes.values())))
    force = (species.charge_c / species.mass_kg / frequency**2)[:, None, None]
    rate = species.damping_per_s / (2 * frequency)
    constant = force * static - (rate**2)[:, None, None] * np.eye(3)
    swinging = force * amplitude[:, None, None] * drive
    first, growth = np.zeros(len(states), dtype=bool), np.zeros(len(states))
    stiffest = np.linalg.norm(constant, axis=(1, 2)) + np.linalg.norm(swinging, axis=(1, 2))
    order = np.argsort(stiffest)
    for rows in (order[i : i + _CHUNK] for i in range(0, len(order), _CHUNK)):
        cuts = max(2, ceil(1.05 * stiffest[rows].max() ** 0.5 / pi))
        steps = ceil(fineness * max(6.0, 24 / cuts, 2.5 * stiffest[rows].max() ** 0.5 / cuts))
        pieces = integrate(constant[rows], swinging[rows], cuts, steps)
        first[rows], growth[rows] = _judged(pieces, rate[rows])
    return Orbits(first_region=first, growth=growth)


def integrate(constant: Array, swinging: Array, cuts: int, steps: int) -> Array:
    """(states, cuts, 6, 6): how (x, p) at each cut of the period follows from the cut before, in ``steps`` steps each."""
    # The states stand last, so that every operation below runs along them.
    fixed = np.ascontiguousarray(constant.transpose(1, 2, 0))[:, :, None, None, :]
    swing = np.ascontiguousarray(swinging.transpose(1, 2, 0))[:, :, None, None, :]
    begin = np.arange(cuts) / cuts
    size = 1 / cuts / steps
    shape = (3, 6, cuts, len(constant))
    x, p = np.zeros(shape), np.zeros(shape)
    for axis in range(3):
        x[axis, axis] = 1
        p[axis, 3 + axis] = 1
    for step in range(steps):
        time = step * size
        for kick, drift in zip(KICKS, [*DRIFTS, 0.0], strict=True):
            k = fixed + swing * np.cos(2 * pi * (begin + time))[:, None]
            k *= kick * size
            for i in range(3):
                p[i] -= k[i, 0] * x[0] + k[i, 1] * x[1] + k[i, 2] * x[2]
            x += drift * size * p
            time += drift * size
    return np.concatenate([x, p]).transpose(3, 2, 0, 1)


def _judged(pieces: Array, rate: Array) -> tuple[NDArray[np.bool_], Array]:
    whole = pieces[:, 0]
    for cut in range(1, pieces.shape[1]):
        whole = pieces[:, cut] @ whole
    multipliers = np.linalg.eigvals(whole)
    growth = np.abs(multipliers).max(axis=1) * np.exp(-rate)
    antiperiodic, periodic = (negative_directions(pieces, sign) for sign in (-1, 1))
    damped = rate > 0
    locked = ((multipliers.real < -1 - 1e-9) & (np.abs(multipliers.imag) < 1e-9)).sum(axis=1)
    first = np.where(damped, (antiperiodic == locked) & (growth < 1), (antiperiodic == 0) & (periodic == 3))
    return first, growth


def negative_directions(pieces: Array, sign: int) -> NDArray[np.intp]:
    """Of the action over the loops that close with ``sign``, for ``pieces`` as from `integrate`."""
    states, cuts = pieces.shape[:2]
    a, b, d = pieces[..., :3, :3], pieces[..., :3, 3:], pieces[..., 3:, 3:]
    inverse = np.linalg.inv(b)
    # A piece from x to y: 1/2 [y . d b^-1 y + x . b^-1 a x - 2 x . b^-1 y], its cross terms x . b^-1 y as b is symplectic's.
    form = np.zeros((states, cuts, 3, cuts, 3))
    for k in range(cuts):
        n, turn = (k + 1) % cuts, sign if k == cuts - 1 else 1
        form[:, k, :, k] += inverse[:, k] @ a[:, k]
        form[:, n, :, n] += d[:, k] @ inverse[:, k]
        form[:, k, :, n] -= turn * inverse[:, k]
        form[:, n, :, k] -= turn * inverse[:, k].swapaxes(1, 2)
    flat = form.reshape(states, 3 * cuts, 3 * cuts)
    eigenvalues = np.linalg.eigvalsh((flat + flat.swapaxes(1, 2)) / 2)
    count: NDArray[np.intp] = (eigenvalues < 0).sum(axis=1)
    return count
