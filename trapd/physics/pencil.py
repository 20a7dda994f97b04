"""Every value of one setpoint at which a stability condition is singular: eigenvalues, so none is missed.

The truncated Fourier matrices of `krein` are polynomials of the setpoint, ``M(t) = M0 + t M1 + t^2 M2`` (affine in a voltage;
quadratic in the drive frequency once multiplied by its square), singular where t is an eigenvalue. With t = t0 + 1/mu the
eigenvalues mu are those of a companion matrix of M(t0)^-1: the shift t0 is chosen where M(t0) is far from singular.
Harmonics stand in the order cos 0, then cos and sin of 1, 2, 3, ... (periodic) or of 1, 3, 5, ... (antiperiodic).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache
from itertools import pairwise
from math import ceil, sqrt

import numpy as np
from numpy.typing import NDArray

from trapd.physics.collocation import largest_stiffness
from trapd.physics.equation import Coefficients
from trapd.physics.krein import WIDEST, harmonics
from trapd.physics.trap import Array

_SHIFTS = (0.4142, 0.8189, 0.1271, 0.6180)  # of the searched range, in order of trial
_NEARLY_SINGULAR = 1e7  # largest |1/t - t0| over the range before another shift is tried
_WIDEST_SPAN = 20.0  # of a frequency range
_NEARLY_REAL = 1e-5  # eigenvalues that meet are good to the root of rounding; one too many costs a test, no more


@dataclass(frozen=True, kw_only=True)
class Line:
    """States along one setpoint, rows side by side, in the range [low, high] (rows,).

    A voltage: ``c`` at 0 V, ``a_slope`` and ``q_slope`` (rows, d, d) per volt (not from another voltage, whose rounding would
    drown a state near 0 V). The drive frequency: ``c`` at ``frequency_hz`` (rows,), A, Q ~ 1/f^2 and kappa, theta ~ 1/f.
    """

    c: Coefficients
    frequency_hz: Array | None
    a_slope: Array
    q_slope: Array
    low: Array
    high: Array

    def __getitem__(self, rows: NDArray[np.intp] | NDArray[np.bool_]) -> Line:
        return Line(
            c=self.c[rows],
            frequency_hz=None if self.frequency_hz is None else self.frequency_hz[rows],
            a_slope=self.a_slope[rows],
            q_slope=self.q_slope[rows],
            low=self.low[rows],
            high=self.high[rows],
        )

    def at(self, values: Array) -> Coefficients:
        """Coefficients at one value for each row."""
        c = self.c
        if self.frequency_hz is not None:
            ratio = self.frequency_hz / values
            square = (ratio**2)[:, None, None]
            return Coefficients(a=c.a * square, q=c.q * square, kappa=c.kappa * ratio, theta=c.theta * ratio)
        volts = values[:, None, None]
        return Coefficients(a=c.a + volts * self.a_slope, q=c.q + volts * self.q_slope, kappa=c.kappa, theta=c.theta)

    @property
    def moves(self) -> NDArray[np.bool_]:
        """(rows,) whether the setpoint has any effect on the motion."""
        if self.frequency_hz is not None:
            return np.ones(len(self.low), dtype=bool)
        moves: NDArray[np.bool_] = (self.a_slope != 0).any(axis=(1, 2)) | (self.q_slope != 0).any(axis=(1, 2))
        return moves

    def clipped(self) -> Line:
        """The same line, its range cut to where a state can be accepted at all (empty: high below low)."""
        low, high = self.low.copy(), self.high.copy()
        a, q = _along(self.c.a), _along(self.c.q)
        stiffest = largest_stiffness(self.c.a, self.c.q) + self.c.kappa**2
        if self.frequency_hz is not None:
            most = stiffest / WIDEST
            if not self.c.kappa.any():
                most = np.maximum(most, (a + np.abs(q)).max(axis=1))
            return replace(self, low=np.maximum(low, self.frequency_hz * np.sqrt(most)))
        if not self.c.kappa.any():
            for sign in (1.0, -1.0):
                _cut(low, high, 1 - a - sign * q, _along(self.a_slope) + sign * _along(self.q_slope))
        slope = largest_stiffness(self.a_slope, self.q_slope)
        reach = np.where(slope > 0, (WIDEST + stiffest) / np.where(slope > 0, slope, 1.0), np.inf)
        return replace(self, low=np.maximum(low, -reach), high=np.minimum(high, reach))


def _along(matrices: Array) -> Array:
    """(rows, directions) v . M v along the axes and the diagonals between them."""
    d = matrices.shape[1]
    pairs = [(i, j) for i in range(d) for j in range(i)]
    diagonal = np.diagonal(matrices, axis1=1, axis2=2)
    both = [(diagonal[:, i] + diagonal[:, j]) / 2 + s * matrices[:, i, j] for i, j in pairs for s in (1, -1)]
    return np.column_stack([diagonal, *both])


def _cut(low: Array, high: Array, rest: Array, slope: Array) -> None:
    """Narrow [low, high] to ``rest - x slope > 0`` for every direction (rows, directions)."""
    end = rest / np.where(slope == 0, 1.0, slope)
    np.minimum(high, np.where(slope > 0, end, np.inf).min(axis=1), out=high)
    np.maximum(low, np.where(slope < 0, end, -np.inf).max(axis=1), out=low)
    high[((slope == 0) & (rest <= 0)).any(axis=1)] = -np.inf


@dataclass(frozen=True, kw_only=True)
class _Basis:
    """Functions of time: harmonic ``order`` (n,), ``turn`` (n, n) from cosines to sines of one harmonic times the order,
    ``drive`` (n, n) the action of 2 cos 2 tau."""

    order: Array
    turn: Array
    drive: Array

    def only(self, pick: NDArray[np.intp]) -> _Basis:
        square = np.ix_(pick, pick)
        return _Basis(order=self.order[pick], turn=self.turn[square], drive=self.drive[square])


@cache
def _periodic(count: int) -> _Basis:
    """1/sqrt 2, then cos and sin of 2, 4, ... tau."""
    order = np.concatenate([[0], np.repeat(2.0 * np.arange(1, count + 1), 2)])
    size = len(order)
    drive = np.eye(size, k=2)
    drive[0, 1], drive[0, 2] = sqrt(2), 0.0
    turn = np.diag(np.where(np.arange(size - 1) % 2 == 1, order[1:], 0.0), k=1)
    return _Basis(order=order, turn=turn, drive=drive + drive.T)


@cache
def _antiperiodic(count: int) -> _Basis:
    """cos and sin of 1, 3, ... tau."""
    order = np.repeat(2.0 * np.arange(count + 1) + 1, 2)
    size = len(order)
    drive = np.eye(size, k=2) + np.diag([0.5, -0.5] + [0.0] * (size - 2))
    turn = np.diag(np.where(np.arange(size - 1) % 2 == 0, order[1:], 0.0), k=1)
    return _Basis(order=order, turn=turn, drive=drive + drive.T)


def crossings(line: Line) -> Array:
    """(rows, n) values of the setpoint, ascending, NaN-padded, that hold every edge of the accepted set strictly inside
    [low, high] (and more: edges of higher regions). Rows on which the setpoint has no effect have none."""
    found = []
    for part in _parts(line):
        values = np.concatenate([_roots(part, *pencil) for pencil in _pencils(part)], axis=1)
        values[~((values > part.low[:, None]) & (values <= part.high[:, None]))] = np.nan
        found.append(values)
    values = np.concatenate(found, axis=1)
    values[values >= line.high[:, None]] = np.nan
    return np.sort(values, axis=1)


def _parts(line: Line) -> list[Line]:
    """The same line in ranges that one shift can see: an edge far below it would drown in the powers of the frequency."""
    if line.frequency_hz is None:
        return [line]
    span = line.high / line.low
    count = max(1, ceil(np.log(span.max()) / np.log(_WIDEST_SPAN)))
    cuts = [line.low * span ** (k / count) for k in range(count + 1)]
    return [replace(line, low=low, high=high) for low, high in pairwise(cuts)]


def _pencils(line: Line) -> list[tuple[_Basis, Array, Array, float]]:
    """Of every condition: basis, the constant (rows,) and the rate (rows,) of the turn, and the turn's symmetry.

    ``(n + theta)^2 - K + kappa^2`` where a least beta is wanted, else ``n^2 + 2 kappa d/dtau - K`` (the displacement's own
    equation); with damping the latter for harmonics 1, 3, ... too; and the undriven symmetry classes of v.
    """
    c = line.c
    count = harmonics(_stiffest(line))
    cosines, sines = np.arange(0, 2 * count + 2, 2), np.arange(1, 2 * count + 2, 2)
    odd, square = _antiperiodic(count), c.kappa**2
    still = np.zeros_like(square)
    pencils = [(odd.only(cosines), square, still, 0.0), (odd.only(sines), square, still, 0.0)]
    if c.theta.any():
        pencils.append((_periodic(count), square + c.theta**2, 2 * c.theta, 1.0))
    elif c.kappa.any():
        pencils.append((_periodic(count), still, 2 * c.kappa, -1.0))
    else:
        pencils.append((_periodic(count).only(np.concatenate([[0], sines[:-1]])), still, still, 0.0))
    if c.kappa.any():
        pencils.append((odd, still, 2 * c.kappa, -1.0))
    return pencils


def _stiffest(line: Line) -> float:
    ends = [largest_stiffness(c.a, c.q) for c in (line.at(line.low), line.at(line.high))]
    return float(np.minimum(np.maximum(*ends) + line.c.kappa.max(initial=0.0) ** 2, WIDEST).max(initial=0.0))


def _roots(line: Line, basis: _Basis, constant: Array, rate: Array, symmetry: float) -> Array:
    """Real eigenvalues (rows, n) of one pencil, NaN elsewhere, in units of the setpoint."""
    eye, square = np.eye(line.c.a.shape[1]), np.diag(basis.order**2)
    turn = basis.turn + symmetry * basis.turn.T
    level = constant[:, None, None] * np.eye(len(basis.order))
    turning = rate[:, None, None] * turn

    def grow(time: Array, space: Array) -> Array:
        rows, n, d = len(line.low), len(basis.order), len(eye)
        product: Array = time[..., :, None, :, None] * space[..., None, :, None, :] + np.zeros((rows, 1, 1, 1, 1))
        return product.reshape(rows, n * d, n * d)

    def stiffness(a: Array, q: Array) -> Array:
        return grow(np.eye(len(basis.order)), a) + grow(basis.drive, q)

    second: Array | None = None
    zeroth = grow(level, eye) - stiffness(line.c.a, line.c.q)
    if line.frequency_hz is not None:
        unit = line.frequency_hz
        first, second = grow(turning, eye), grow(square, eye)
    else:
        unit = np.maximum(np.abs(line.low), np.abs(line.high))
        zeroth = zeroth + grow(square + turning, eye)
        first = -unit[:, None, None] * stiffness(line.a_slope, line.q_slope)
    return unit[:, None] * _eigenvalues(zeroth, first, second, line.low / unit, line.high / unit)


def _eigenvalues(zeroth: Array, first: Array, second: Array | None, low: Array, high: Array) -> Array:
    """Real t of ``det(zeroth + t first + t^2 second) = 0``, (rows, n), NaN elsewhere."""
    inverse = np.zeros((len(zeroth), len(zeroth[0]) * (1 if second is None else 2)), dtype=complex)
    shift = np.zeros(len(zeroth))
    rows = np.arange(len(zeroth))
    for fraction in _SHIFTS:
        shift[rows] = low[rows] + fraction * (high - low)[rows]
        companion = _companion(zeroth[rows], first[rows], None if second is None else second[rows], shift[rows])
        inverse[rows] = np.linalg.eigvals(companion)
        rows = rows[np.abs(inverse[rows]).max(axis=1) * (high - low)[rows] > _NEARLY_SINGULAR]
        if not len(rows):
            break
    with np.errstate(divide="ignore", invalid="ignore"):
        values = shift[:, None] + 1 / inverse
    near = np.abs(values.imag) <= _NEARLY_REAL * np.maximum(np.abs(values.real), high[:, None] - low[:, None])
    return np.where(near, values.real, np.nan)


def _companion(zeroth: Array, first: Array, second: Array | None, shift: Array) -> Array:
    t = shift[:, None, None]
    here = zeroth + t * first if second is None else zeroth + t * first + t**2 * second
    slopes = first if second is None else np.concatenate([first + 2 * t * second, second], axis=2)
    try:
        ratio = np.linalg.solve(here, slopes)
    except np.linalg.LinAlgError:  # a mode that nothing confines, whatever the setpoint: no edge is lost
        size = np.abs(here).max() * 1e-13
        ratio = np.linalg.solve(here + size * np.eye(here.shape[1]), slopes)
    if second is None:
        return -ratio
    n = here.shape[1]
    below = np.concatenate([np.eye(n), np.zeros((n, n))], axis=1) + np.zeros((len(here), 1, 1))
    return np.concatenate([-ratio, below], axis=1)
