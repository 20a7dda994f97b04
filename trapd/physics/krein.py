"""The first stability region, from Fourier matrices reduced to their lowest harmonics (block continued fractions).

Without damping all unfolded beta lie in (0, 1) if and only if -d^2/dtau^2 - K has d negative periodic and no negative
antiperiodic eigenvalue (Krein's central zone: M. G. Krein 1955; Yakubovich & Starzhinskii 1975 [mem]). Written out for
K = A + 2 Q cos 2 tau the antiperiodic half says that two chains of harmonics 1, 3, 5, ... (cosines, sines) are positive;
reduced to the first harmonic (Schur complement)

    Y -+ Q > 0,    Y = 1 - A - Q X^-1 Q,    X_n = (2n+1)^2 - A - Q X_(n+1)^-1 Q > 0.

Then the harmonics 2n + theta, n != 0, are positive too for any 0 <= theta < 1 (periodic functions odd in time vanish at
both ends of the half period, antiperiodic ones at one end only; theta > 0 lies between the two), and what is left of the mean
motion is one d x d condition: every beta exceeds theta if and only if

    H = A - theta^2 + Q (T+^-1 + T-^-1) Q > 0,    T+-  the chains of (2n +- theta)^2 - A,  n = 1, 2, ...

H is the exact static stiffness where the pseudopotential has A + Q^2/2. In the voltages Y -+ Q is concave and H convex
(as quadratic forms), so the upper edge cannot open a gap and the lower one can.

Damping: v = exp(kappa tau) u has K - kappa^2 in place of K. The displacement stops decaying at theta = i kappa (beta = 0 side)
or 1 + i kappa (beta = 1 side), where the same reductions hold with complex chains. With no negative sine harmonic
sin^2(pi beta/2) = eig(-P W), P = B^T D > 0 and W = D^-1 C symmetric, so all of them are real; a quarter turn of the drive's
phase (Q to -Q) exchanges sines and cosines. So as long as only one kind is locked at beta = 1 the motion is bounded
exactly when every sin^2 lies between -sinh^2(pi kappa/2) and cosh^2(pi kappa/2); both at once in one coupled block is refused.
"""

from __future__ import annotations

from math import ceil, pi, sqrt
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trapd.physics.collocation import HalfPeriod, half_period, largest_stiffness, stiffest
from trapd.physics.equation import Coefficients
from trapd.physics.trap import Array

Mask = NDArray[np.bool_]
Chain = NDArray[Any]  # real, or complex where damping enters

WIDEST = 2000.0
"""Largest |K| looked at. An undamped region is there narrower than the rounding of its own coefficients (exp(-4 sqrt q))."""

_CLEAR = (11 - sqrt(85)) / 2
_ROUNDING = 32 * float(np.finfo(float).eps)


def harmonics(norm: float) -> int:
    """Harmonics kept, for |K| up to ``norm``: each beyond (2n)^2 = |K| gains a factor (q / 4n^2)^2. Certified in tests."""
    return 4 + ceil(sqrt(min(norm, WIDEST)) / 2)


def reduce_chain(levels: Chain, a: Array, q: Array) -> tuple[Chain, Mask]:
    """Lowest link of X_n = levels_n - A - Q X_(n+1)^-1 Q, and whether all links are positive.

    ``levels`` (links, states) from the lowest up, ``a`` and ``q`` (states, d, d); positivity is told for real levels only.
    """
    positive = np.ones(len(a), dtype=bool)
    near = (levels.real <= largest_stiffness(a, q)) & np.isrealobj(levels)
    open_question = np.logical_or.reduce(near, axis=1).tolist()
    undriven = levels[:, :, None, None] * np.eye(a.shape[1]) - a
    link: Chain = undriven[-1]
    for level, asked in zip(undriven[-2::-1], open_question[-2::-1], strict=True):
        link = level - sandwich(q, link)
        if asked:
            positive &= least_eigenvalue(link) > 0
    return link, positive


def sandwich(q: Array, link: Chain) -> Chain:
    """Q X^-1 Q. A link that is exactly singular (a whole-number A on a resting drive) is moved by its rounding."""
    product: Chain
    if q.shape[1] == 1:
        product = q * q / np.where(link == 0, _ROUNDING, link)
        return product
    try:
        product = q @ np.linalg.solve(link, q)
    except np.linalg.LinAlgError:
        product = q @ np.linalg.solve(link + _ROUNDING * np.eye(q.shape[1]), q)
    return product


def least_eigenvalue(matrices: Array) -> Array:
    """(states,) of symmetric (states, d, d)."""
    if matrices.shape[1] == 1:
        return matrices[:, 0, 0]
    least: Array = np.linalg.eigvalsh(matrices)[:, 0].astype(float, copy=False)
    return least


def mean_stiffness(c: Coefficients) -> Array:
    """H of the module's text, (states, d, d): where ``theta`` > 0 every beta must exceed it; else, with damping, H is singular
    where a displacement stops decaying (theta = i kappa); else at beta = 0."""
    n = np.arange(1, 1 + harmonics(stiffest(c.a, c.q)))[:, None]
    wanted, damped = c.theta > 0, bool(c.kappa.any())
    shift = np.where(wanted, c.kappa**2 + c.theta**2, 0.0)[:, None, None] * np.eye(c.a.shape[1])
    if not damped and not wanted.any():
        link, _ = reduce_chain(4.0 * n**2 + 0 * c.theta, c.a, c.q)
        stiffness: Array = c.a + 2 * sandwich(c.q, link)
        return stiffness
    level: Chain = np.where(wanted, 2 * n + np.array([[[1.0]], [[-1.0]]]) * c.theta, 2.0 * n) ** 2  # (2, links, states)
    if damped:
        turn = np.array([[[1.0]], [[-1.0]]]) * np.where(wanted, 0.0, 4 * n * c.kappa)
        level = level + np.where(wanted, c.kappa**2, 0.0) + 1j * turn
    both, q = np.concatenate([*level], axis=1), np.concatenate([c.q, c.q])
    ends = np.real(sandwich(q, reduce_chain(both, np.concatenate([c.a, c.a]), q)[0]))
    total: Array = c.a - shift + ends[: len(c.a)] + ends[len(c.a) :]
    return total


def first_harmonic(c: Coefficients) -> tuple[Array, Mask]:
    """(states, 2d, 2d) symmetric, singular where a displacement of twice the drive's period stops decaying (the beta = 1
    side), and whether the higher harmonics are positive (told without damping only). Without damping the blocks are
    Y - Q (cosines) and -(Y + Q) (sines)."""
    n = np.arange(1, 1 + harmonics(stiffest(c.a, c.q)))[:, None]
    odd = (2 * n + 1.0) + 0 * c.kappa
    damped = bool(c.kappa.any())
    link, positive = reduce_chain(odd**2 + 2j * odd * c.kappa if damped else odd**2, c.a, c.q)
    eye = np.eye(c.a.shape[1])
    y = eye - c.a - sandwich(c.q, link)
    cross = -np.imag(y) - 2 * c.kappa[:, None, None] * eye
    cosines, sines = np.real(y) - c.q, -(np.real(y) + c.q)
    return np.concatenate([np.concatenate([cosines, cross], 2), np.concatenate([cross, sines], 2)], 1), positive


def clearly_unlocked(a: Array, q: Array) -> Mask:
    """(states,) True where a bound of the chain (X_1 > 9 - |A| - |Q|) proves every antiperiodic eigenvalue positive."""
    # By row sums first (Gershgorin): with g = |A| + |Q| it is enough that g + g^2 / (9 - 2 g) < 1.
    if (np.abs(a) + np.abs(q)).sum(axis=2).max() < _CLEAR:
        return np.ones(len(a), dtype=bool)
    rest = 9 - largest_stiffness(a, q)
    eye = np.eye(a.shape[1])
    least = eye - a - q @ q / np.maximum(rest, 1.0)[:, None, None]
    both = np.concatenate([least - q, least + q])
    positive: Mask = (least_eigenvalue(both) > 0).reshape(2, -1).all(axis=0) & (rest > 1)
    return positive


def locked_harmonics(a: Array, q: Array) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Number of negative antiperiodic eigenvalues of -d^2/dtau^2 - K, cosines and sines, each (states,)."""
    n = np.arange(0, 1 + harmonics(stiffest(a, q)))
    eye = np.eye(a.shape[1])
    link = (2 * n[-1] + 1.0) ** 2 * eye - a
    shared = _negatives(link)
    for k in n[-2:0:-1]:
        link = (2 * k + 1.0) ** 2 * eye - a - sandwich(q, link)
        shared = shared + _negatives(link)
    y = eye - a - sandwich(q, link)
    return shared + _negatives(y - q), shared + _negatives(y + q)


def _negatives(matrices: Array) -> NDArray[np.intp]:
    values = matrices[:, :, 0] if matrices.shape[1] == 1 else np.linalg.eigvalsh(matrices)
    count: NDArray[np.intp] = (values < 0).sum(axis=1)
    return count


def accepted(c: Coefficients) -> Mask:
    """(states,) inside the first region (damped: decaying, no mode past its first locking), every beta above ``theta``."""
    margin, counted = room(c)
    return counted & (margin > 0)


def room(c: Coefficients) -> tuple[Array, Mask]:
    """How far inside each state is, (states,): the least of the quantities that vanish at an edge, less their rounding; and
    whether no mode is past its first locking. A state is accepted when the first is positive and the second true."""
    margin, counted = np.full(len(c.a), -1.0), np.zeros(len(c.a), dtype=bool)
    near = np.flatnonzero((largest_stiffness(c.a, c.q) + c.kappa**2 < WIDEST) & (c.theta < 1))
    if len(near):
        margin[near], counted[near] = (_damped_room if c.kappa.any() else _undamped_room)(c[near])
    return margin, counted


def _undamped_room(c: Coefficients) -> tuple[Array, Mask]:
    d = c.a.shape[1]
    first, positive = first_harmonic(c)
    upper = np.minimum(least_eigenvalue(first[:, :d, :d]), least_eigenvalue(-first[:, d:, d:]))
    positive &= upper > 0
    lower = np.full(len(c.a), -1.0)
    inside = np.flatnonzero(positive)
    if len(inside):
        # H is what is left of these terms, and where nothing confines an axis it is their rounding alone.
        size = np.sqrt((c.a * c.a).sum(axis=(1, 2))) + (c.q * c.q).sum(axis=(1, 2)) + c.theta**2
        lower[inside] = least_eigenvalue(mean_stiffness(c[inside])) - _ROUNDING * size[inside]
    return np.minimum(lower, upper), positive


def _damped_room(c: Coefficients) -> tuple[Array, Mask]:
    d = c.a.shape[1]
    a = c.a - (c.kappa**2)[:, None, None] * np.eye(d)
    cosines, sines = locked_harmonics(a, c.q)
    end = half_period(a, np.where(sines > 0, -1.0, 1.0)[:, None, None] * c.q)
    low = np.where(c.theta > 0, np.sin(pi * c.theta / 2) ** 2, -(np.sinh(pi * c.kappa / 2) ** 2))
    high = np.cosh(pi * c.kappa / 2) ** 2
    # All sin^2 within their bounds have no larger sum of squares; the others would drown in rounding what follows.
    squares = np.einsum("sij,sji->s", end.sin2, end.sin2)
    tame = np.flatnonzero((np.minimum(cosines, sines) == 0) & (squares <= 1.001 * d * high**2))
    margin, counted = np.full(len(a), -1.0), np.zeros(len(a), dtype=bool)
    if len(tame):
        sin2 = real_sin2(end, tame)
        spare = np.minimum(sin2[:, 0] - low[tame], high[tame] - sin2[:, -1])
        # Slopes are integrals of K: where it is small so is their rounding.
        margin[tame] = spare - _ROUNDING * np.minimum(high, largest_stiffness(a, c.q))[tame]
        counted[tame] = (cosines + sines)[tame] == (sin2 > 1).sum(axis=1)
    return margin, counted


def real_sin2(end: HalfPeriod, rows: NDArray[np.intp]) -> Array:
    """Ascending eigenvalues sin^2(pi beta / 2), (rows, d), of states without a negative sine harmonic, where P = B^T D is
    positive and the eigenvalues are those of the symmetric -P^(1/2) D^-1 C P^(1/2)."""
    if end.a.shape[1] == 1:
        scalar: Array = end.sin2[rows, :, 0]
        return scalar
    b, c, d = end.b[rows], end.c[rows], end.d[rows]
    p, w = np.linalg.eigh(b.swapaxes(1, 2) @ d)
    root = w * np.sqrt(np.maximum(p, 0.0))[:, None, :]
    return np.linalg.eigvalsh(-root.swapaxes(1, 2) @ np.linalg.solve(d, c) @ root)


def regions_passed(c: Coefficients) -> Array:
    """Whole part of the unfolded beta of every axis of one state without coupling, (d,): pairs of edges passed on the way up,
    negative antiperiodic and periodic eigenvalues (Sturm's oscillation theorem)."""
    diagonal = np.arange(c.a.shape[1])
    a = (c.a[0, diagonal, diagonal] - c.kappa[0] ** 2)[:, None, None]
    q = c.q[0, diagonal, diagonal][:, None, None]
    cosines, sines = locked_harmonics(a, q)
    n = np.arange(1, 1 + harmonics(stiffest(a, q)))
    link = 4.0 * n[-1] ** 2 - a
    periodic = 2 * _negatives(link)
    for k in n[-2::-1]:
        link = 4.0 * k**2 - a - sandwich(q, link)
        periodic = periodic + 2 * _negatives(link)
    periodic = periodic + _negatives(-a - 2 * sandwich(q, link))
    passed: Array = (cosines + sines + periodic - 1) / 2
    return passed
