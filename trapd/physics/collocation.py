"""Half a drive period, exactly: Gauss-Legendre collocation of ``v'' + [A + 2 Q cos 2 tau] v = 0`` over tau in [0, pi/2].

The solution's second derivative is a polynomial through the Gauss nodes (Hairer, Norsett & Wanner, Solving Ordinary
Differential Equations I, section II.7): of order twice the number of nodes at the end, and symplectic but for
rounding. The drive is even in time, so the half period holds everything: with end values A, B and slopes C, D of the even
and odd solutions, ``sin^2(pi beta / 2) = eig(-B^T C)``.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from math import ceil, pi, sqrt

import numpy as np

from trapd.physics.trap import Array

_PANEL_NORM = 8.0  # largest |K| times (panel / half period)^2 that one panel takes
_WIDEST = 2e4  # beyond this |K| the solution overflows; nothing there is ever accepted


@dataclass(frozen=True, kw_only=True)
class HalfPeriod:
    """End values ``a`` (even), ``b`` (odd) and slopes ``c``, ``d`` after half a drive period, each (states, d, d)."""

    a: Array
    b: Array
    c: Array
    d: Array

    @property
    def sin2(self) -> Array:
        """(states, d, d) whose eigenvalues are sin^2(pi beta / 2); its eigenvectors are displacements at tau = 0."""
        return -self.b.swapaxes(1, 2) @ self.c


@dataclass(frozen=True, kw_only=True)
class _Panel:
    """Collocation of one stretch of the half period for d axes, m nodes: axis by axis, its nodes side by side."""

    cosine: Array  # (m,) 2 cos 2 tau at the nodes
    double: Array  # (m, 1, m) node values from second derivatives at the nodes
    end: Array  # (2, 1, 1, m) end value and end slope from second derivatives
    start: Array  # (d m, 2d) free motion at the nodes
    free: Array  # (2d, 2d) free motion at the end


@cache
def _rule(nodes: int) -> tuple[Array, Array, Array]:
    """Gauss nodes and weights on [0, 1] and the collocation matrix: integrals from 0 to a node of the Lagrange polynomials."""
    k = np.arange(1, nodes)
    off = k / np.sqrt(4.0 * k**2 - 1)
    x, vectors = np.linalg.eigh(np.diag(off, 1) + np.diag(off, -1))
    weights = 2 * vectors[0] ** 2
    legendre = np.ones((nodes + 1, nodes))
    legendre[1] = x
    for j in range(1, nodes):
        legendre[j + 1] = ((2 * j + 1) * x * legendre[j] - j * legendre[j - 1]) / (j + 1)
    integral = np.vstack([x + 1, (legendre[2:] - legendre[:-2]) / (2 * k[:, None] + 1)])
    matrix = integral.T @ ((np.arange(nodes)[:, None] + 0.5) * legendre[:-1] * weights)
    return (x + 1) / 2, weights / 2, matrix / 2


@cache
def _panel(axes: int, nodes: int, panels: int, index: int) -> _Panel:
    at, weights, matrix = _rule(nodes)
    step = pi / 2 / panels
    eye = np.eye(axes)
    return _Panel(
        cosine=2 * np.cos(2 * (index + at) * step),
        double=(step**2 * matrix @ matrix)[:, None, :],
        end=np.stack([step**2 * weights @ matrix, step * weights])[:, None, None, :],
        start=np.hstack([np.kron(eye, one[:, None]) for one in (np.ones(nodes), at * step)]),
        free=np.kron(np.array([[1.0, step], [0.0, 1.0]]), eye).astype(float),
    )


def _resolution(norm: float) -> tuple[int, int]:
    """Nodes and panels for a relative 1e-14, from the largest |K|; certified in tests against more nodes."""
    panels = max(1, ceil(sqrt(norm / _PANEL_NORM)))
    if panels > 1:
        return 14, panels
    return (12 if norm <= 1.5 else 13 if norm <= 3 else 15), 1


def half_period(a: Array, q: Array) -> HalfPeriod:
    """Propagate every state, ``a`` and ``q`` (states, d, d). |K| is capped where the solution would overflow: such states are
    unstable, and so is what is returned."""
    nodes, panels = _resolution(min(stiffest(a, q), _WIDEST))
    end = _propagate(a, q, _panel(a.shape[1], nodes, panels, 0))
    for index in range(1, panels):
        end = _propagate(a, q, _panel(a.shape[1], nodes, panels, index)) @ end
    d = a.shape[1]
    return HalfPeriod(a=end[:, :d, :d], b=end[:, :d, d:], c=end[:, d:, :d], d=end[:, d:, d:])


def largest_stiffness(a: Array, q: Array) -> Array:
    """(states,) a bound of |A + 2 Q cos 2 tau|."""
    bound: Array = (np.abs(a) + 2 * np.abs(q)).sum(axis=2).max(axis=1)
    return bound


def stiffest(a: Array, q: Array) -> float:
    """The largest such bound of these states."""
    return float((np.abs(a) + 2 * np.abs(q)).sum(axis=2).max(initial=0.0))


def _propagate(a: Array, q: Array, panel: _Panel) -> Array:
    """(states, 2d, 2d): displacement and slope at the panel's end from those at its start."""
    states, d, _ = a.shape
    size = len(panel.start)
    stiffness = a[..., None] + panel.cosine * q[..., None]  # (states, d, d, m)
    system = (panel.double * stiffness[:, :, None]).reshape(states, size, size)
    system.reshape(states, -1)[:, :: size + 1] += 1.0
    inner = np.linalg.solve(system, panel.start)
    change = (panel.end * stiffness[:, None]).reshape(states, 2 * d, size) @ inner
    end: Array = panel.free - change
    return end
