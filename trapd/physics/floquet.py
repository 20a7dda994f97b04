"""How an ion moves in one state of the trap, exactly: stability, region, secular frequencies, growth."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise, permutations
from math import isfinite, pi
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trapd.physics.collocation import HalfPeriod, half_period, largest_stiffness
from trapd.physics.depth import depths_ev
from trapd.physics.equation import Coefficients, Indices, coefficients, independent_axes
from trapd.physics.krein import WIDEST, Mask, accepted, clearly_unlocked, regions_passed
from trapd.physics.motion import Motion
from trapd.physics.point import Point
from trapd.physics.species import Species
from trapd.physics.trap import Array, Trap

_SAME = 1e-9  # frequencies, in units of the drive's, that count as equal
_EQUALLY_CLOSE = 1e-6  # difference of squared overlaps that leaves the naming of modes arbitrary
_ORDERS = list(permutations(range(3)))
_FEW = 6  # states
_SURE = 1e-9  # sin^2(pi beta / 2), or a product of them, that rounding cannot have made
_TINY = float(np.finfo(float).tiny)
_REAL = 1e-7  # imaginary part of beta below which it is rounding: eigenvalues that meet are good to its square


@dataclass(frozen=True, kw_only=True)
class _Modes:
    """Modes of some axes: ``beta`` folded (states, d); ``growth`` per unit tau of the displacement (states, d);
    ``shape`` (states, d, d) mean displacement, columns are modes; ``inside`` (states,) accepted as first region, ``stable``
    (states,) in any region."""

    beta: Array
    growth: Array
    shape: Array
    inside: Mask
    stable: Mask


def motion(trap: Trap, species: Species, point: Point) -> Motion:
    """The motion of ``species`` at ``point``. Raises ValueError when the point does not name the trap's electrodes."""
    return motions(trap, species, [point])[0]


def motions(trap: Trap, species: Species, points: Sequence[Point]) -> list[Motion]:
    """`motion` of many points at once, at a fraction of the cost each."""
    if not points:
        return []
    c = coefficients(trap, species, points)
    blocks = independent_axes(c.a, c.q)
    tilted = len(blocks[0]) < 3
    modes = _combine([(alike, _solve(c.stacked(alike))) for alike in blocks], len(points))
    unfolded = _unfolded(c, modes, coupled=tilted)
    depth = depths_ev(trap, species, points, c)
    least: list[float | None] = [None] * len(points) if depth is None else depth.min(axis=1).tolist()
    return [
        Motion(
            ion=species.name,
            **_named(modes, unfolded, row, point.frequency_hz),
            a=_per_axis(c.a[row], tilted=tilted),
            q=_per_axis(c.q[row], tilted=tilted),
            depth_ev=least[row],
        )
        for row, point in enumerate(points)
    ]


def inside(
    trap: Trap, species: Species, points: Sequence[Point], *, min_secular_hz: float | None = None
) -> NDArray[np.bool_]:
    """(points,) whether each lies in the first region (damped: decays, no mode past its first locking), every secular
    frequency above ``min_secular_hz``."""
    if not points:
        return np.zeros(0, dtype=bool)
    c = coefficients(trap, species, points, min_secular_hz)
    parts = [_inside(c.stacked(alike)).reshape(-1, len(points)) for alike in independent_axes(c.a, c.q)]
    held: Mask = parts[0][0] if len(parts) == len(parts[0]) == 1 else np.logical_and.reduce(np.concatenate(parts))
    return held


def mathieu(a: float, q: float) -> tuple[bool, bool, float | None, float | None]:
    """Of ``u'' + (a - 2 q cos 2 tau) u = 0``: stable, first region, unfolded beta (None when not stable), growth per tau."""
    c = Coefficients(a=np.full((1, 1, 1), a), q=np.full((1, 1, 1), q), kappa=np.zeros(1), theta=np.zeros(1))
    modes = _solve(c)
    stable = bool(modes.stable[0])
    beta = float(_unfolded(c, modes, coupled=False)[0, 0]) if stable else None
    return stable, bool(modes.inside[0]), beta, None if stable else float(modes.growth.max())


def _inside(c: Coefficients) -> Mask:
    """`accepted`; for a few states by one propagation, which then costs less than the chains, unless it is a close call."""
    if len(c.a) <= _FEW and not c.kappa.any() and c.theta.max() < 1 and clearly_unlocked(c.a, c.q).all():
        spare = half_period(c.a, c.q).sin2
        if c.theta.any():
            spare = spare - np.sin(pi * c.theta / 2)[:, None, None] ** 2 * np.eye(c.a.shape[1])
        # Its eigenvalues are real, so all are positive exactly when their sum, sum of products of two, and product are.
        sums = [_symmetric_functions(one) for one in spare.tolist()]
        if min(abs(value) for one in sums for value in one) > _SURE:
            return np.array([min(one) > 0 for one in sums])
    return accepted(c)


def _symmetric_functions(matrix: list[list[float]]) -> list[float]:
    """Sums of the products of one, two, ... eigenvalues of a d x d matrix, d up to 3."""
    if len(matrix) == 1:
        return matrix[0]
    if len(matrix) == 2:
        (a, b), (c, d) = matrix
        return [a + d, a * d - b * c]
    (a, b, c), (d, e, f), (g, h, i) = matrix
    x, y, z = e * i - f * h, d * i - f * g, d * h - e * g
    return [a + e + i, x + (a * i - c * g) + (a * e - b * d), a * x - b * y + c * z]


def _solve(c: Coefficients) -> _Modes:
    """Modes of stacked states of any kind."""
    undamped = c.kappa == 0
    if undamped.all() and clearly_unlocked(c.a, c.q).all():
        quick = _symmetric(c.a, c.q)
        if quick[0].min() > _SURE:
            return _held(*quick)
    inside = accepted(c)
    held = np.flatnonzero(inside & undamped)
    other = np.flatnonzero(~(inside & undamped))
    parts = [_held(*_symmetric(c.a[held], c.q[held]))] if len(held) else []
    parts += [_other(c[other], inside[other])] if len(other) else []
    order = np.argsort(np.concatenate([held, other]))

    def joined(name: str) -> Any:
        return np.concatenate([getattr(part, name) for part in parts])[order]

    return _Modes(**{name: joined(name) for name in ("beta", "growth", "shape", "inside", "stable")})


def _held(sin2: Array, start: Array, end: HalfPeriod) -> _Modes:
    """Of undamped states in the first region. Where the drive has turned, after half a period, the motion leans the other way:
    the mean of both displacements, each at its own phase, is the direction of the secular motion."""
    sin2 = np.minimum(np.maximum(sin2, 0.0), 1.0)
    beta = 2 / pi * np.arcsin(np.sqrt(sin2))
    mean = start * np.sqrt(1 - sin2)[:, None, :] + end.a @ start
    shape = mean / np.sqrt(np.maximum((mean * mean).sum(axis=1, keepdims=True), _TINY))
    yes = np.ones(len(sin2), dtype=bool)
    return _Modes(beta=beta, growth=np.zeros(beta.shape), shape=shape, inside=yes, stable=yes)


def _other(c: Coefficients, inside: Mask) -> _Modes:
    """Of states with damping or outside the first region."""
    a = c.a - (c.kappa**2)[:, None, None] * np.eye(c.a.shape[1])
    # Stiffer than this the solution overflows: it is computed at the bound, whose growth the true one exceeds.
    bound = WIDEST / np.maximum(largest_stiffness(a, c.q), WIDEST)
    matrix = half_period(bound[:, None, None] * a, bound[:, None, None] * c.q).sin2
    values, vectors = (matrix[:, :, 0], np.ones_like(matrix)) if matrix.shape[1] == 1 else np.linalg.eig(matrix)
    beta = 2 / pi * np.arcsin(np.sqrt(values.astype(complex)))
    rate, within = np.abs(beta.imag), (beta.real > _REAL) & (beta.real < 1 - _REAL)
    bounded = np.where(c.kappa[:, None] > 0, rate < c.kappa[:, None], (rate < _REAL) & within)
    return _Modes(
        beta=beta.real,
        growth=rate - c.kappa[:, None],
        shape=np.real(vectors),
        inside=inside,
        stable=inside | (bounded.all(axis=1) & (bound == 1)),
    )


def _symmetric(a: Array, q: Array) -> tuple[Array, Array, HalfPeriod]:
    """sin^2(pi beta/2) (states, d) and displacements at tau = 0 (states, d, d) of undamped states in the first region. There
    sin^2 = P W with P = B^T D > 0 and W = -D^-1 C symmetric (see `krein`): so modes that meet stay real and independent."""
    end = half_period(a, q)
    if a.shape[1] == 1:
        return end.sin2[:, :, 0], np.ones_like(a), end
    p, basis = np.linalg.eigh(end.b.swapaxes(1, 2) @ end.d)
    root = basis * np.sqrt(np.maximum(p, 0.0))[:, None, :]
    symmetric = -root.swapaxes(1, 2) @ np.linalg.solve(end.d, end.c) @ root
    values, vectors = np.linalg.eigh(symmetric)
    return values, root @ vectors, end


def _combine(parts: Sequence[tuple[Sequence[Indices], _Modes]], states: int) -> _Modes:
    """All three axes side by side, from groups stacked as in `Coefficients.stacked`."""
    if parts[0][0] == [(0, 1, 2)]:
        return parts[0][1]
    beta, growth, shape = np.zeros((states, 3)), np.zeros((states, 3)), np.zeros((states, 3, 3))
    inside, stable = np.ones(states, dtype=bool), np.ones(states, dtype=bool)
    for blocks, modes in parts:
        for index, axes in enumerate(blocks):
            rows = slice(index * states, (index + 1) * states)
            beta[:, axes], growth[:, axes] = modes.beta[rows], modes.growth[rows]
            shape[:, np.array(axes)[:, None], axes] = modes.shape[rows]
            inside &= modes.inside[rows]
            stable &= modes.stable[rows]
    return _Modes(beta=beta, growth=growth, shape=shape, inside=inside, stable=stable)


def _unfolded(c: Coefficients, modes: _Modes, *, coupled: bool) -> Array:
    """(states, d); NaN where a coupled state beyond the first region leaves it open."""
    beta = modes.beta.copy()
    for row in np.flatnonzero(modes.stable & ~modes.inside):
        passed = np.full(beta.shape[1], np.nan) if coupled else regions_passed(c[row : row + 1])
        beta[row] = passed + np.where(passed % 2 == 0, beta[row], 1 - beta[row])
    return beta


def _named(modes: _Modes, unfolded: Array, row: int, frequency_hz: float) -> dict[str, Any]:
    if not modes.stable[row]:
        growth = float(modes.growth[row].max())
        return {
            "stable": False,
            "first_region": False,
            "secular_frequencies_hz": None,
            "degenerate": False,
            "beta": None,
            "growth_per_s": growth * pi * frequency_hz if growth > 0 else None,
        }
    order, ambiguous = _closest(modes.shape[row])
    folded, beta = modes.beta[row].tolist(), unfolded[row].tolist()
    return {
        "stable": True,
        "first_region": bool(modes.inside[row]),
        "secular_frequencies_hz": tuple(folded[mode] * frequency_hz / 2 for mode in order),
        "degenerate": ambiguous or any(high - low < _SAME for low, high in pairwise(sorted(folded))),
        "beta": tuple(beta[mode] for mode in order) if all(map(isfinite, beta)) else None,
        "growth_per_s": None,
    }


def _closest(shape: Array) -> tuple[tuple[int, ...], bool]:
    """Which mode is closest to x, y and z, by the sum of squared overlaps; and whether another order is as close."""
    x, y, z = (shape * shape).tolist()
    (second, _), (best, order) = sorted((x[i] + y[j] + z[k], (i, j, k)) for i, j, k in _ORDERS)[-2:]
    return order, second > best - _EQUALLY_CLOSE


def _per_axis(matrix: Array, *, tilted: bool) -> tuple[float, ...] | tuple[tuple[float, ...], ...]:
    if tilted:
        return tuple(tuple(row) for row in matrix.tolist())
    return tuple(np.diagonal(matrix).tolist())
