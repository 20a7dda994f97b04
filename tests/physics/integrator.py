"""An independent oracle: adaptive integration of the equation of motion and counting of the solution's zeros.

``v'' + [A + 2 Q cos 2 tau] v = 0`` (A less kappa^2 where there is damping). The motion is in the first region when no solution
that starts at rest, at tau = 0 or at pi/2, has a conjugate point within half a drive period (Morse's index theorem: that
number is the number of negative antiperiodic eigenvalues) and every multiplier of a whole period lies on the unit circle.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

Array = NDArray[np.float64]


def whole_period(a: Array, q: Array, rtol: float = 1e-12) -> Array:
    """(2d, 2d) monodromy over tau in [0, pi] by DOP853, for d x d ``a`` and ``q``."""
    d = len(a)

    def rate(tau: float, flat: Array) -> Array:
        y = flat.reshape(2 * d, 2 * d)
        return np.concatenate([y[d:], -(a + 2 * np.cos(2 * tau) * q) @ y[:d]]).ravel()

    solution = solve_ivp(rate, (0, np.pi), np.eye(2 * d).ravel(), method="DOP853", rtol=rtol, atol=rtol)
    return np.asarray(solution.y[:, -1]).reshape(2 * d, 2 * d)


def conjugate_points(a: Array, q: Array, start: float) -> int:
    """Zeros, in half a period, of the determinant of the solutions that start at rest at tau = ``start``."""
    d = len(a)

    def rate(tau: float, flat: Array) -> Array:
        y = flat.reshape(2 * d, d)
        return np.concatenate([y[d:], -(a + 2 * np.cos(2 * tau) * q) @ y[:d]]).ravel()

    at = np.linspace(start, start + np.pi / 2, 400)
    begin = np.concatenate([np.eye(d), np.zeros((d, d))]).ravel()
    solution = solve_ivp(rate, (at[0], at[-1]), begin, method="DOP853", rtol=1e-10, atol=1e-10, t_eval=at)
    signs = np.sign(np.linalg.det(solution.y.T.reshape(-1, 2 * d, d)[:, :d]))
    return int((signs[1:] != signs[:-1]).sum())


def in_first_region(a: Array, q: Array) -> bool:
    if conjugate_points(a, q, 0.0) or conjugate_points(a, q, np.pi / 2):
        return False
    return bool(np.abs(np.linalg.eigvals(whole_period(a, q))).max() < 1 + 1e-7)


def scan(a: Array, q: Array, kappa: Array, steps: int = 400) -> tuple[Array, NDArray[np.bool_]]:
    """For many states at once, (states, d, d), by fixed steps (classical Runge-Kutta, good to 1e-8): the largest multiplier
    of a displacement over one period, and whether solutions at rest have conjugate points, at the start and a half period
    later (states, 2)."""
    states, d, _ = a.shape
    shifted = a - kappa[:, None, None] ** 2 * np.eye(d)
    halves, zeros = [], []
    for start in (0.0, np.pi / 2):
        y, tau, step = np.zeros((states, 2 * d, 2 * d)) + np.eye(2 * d), start, np.pi / 2 / steps
        sign, crossed = np.ones(states), np.zeros(states, dtype=bool)

        def rate(tau: float, y: Array) -> Array:
            return np.concatenate([y[:, d:], -(shifted + 2 * np.cos(2 * tau) * q) @ y[:, :d]], axis=1)

        for _ in range(steps):
            k1 = rate(tau, y)
            k2 = rate(tau + step / 2, y + step / 2 * k1)
            k3 = rate(tau + step / 2, y + step / 2 * k2)
            k4 = rate(tau + step, y + step * k3)
            y, tau = y + step / 6 * (k1 + 2 * k2 + 2 * k3 + k4), tau + step
            crossed |= np.sign(np.linalg.det(y[:, :d, :d])) != sign
        halves.append(y)
        zeros.append(crossed)
    growth = np.abs(np.linalg.eigvals(halves[1] @ halves[0])).max(axis=1) * np.exp(-np.pi * kappa)
    return growth, np.stack(zeros, axis=1)
