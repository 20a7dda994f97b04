"""Identities of the half period, and its accuracy at every stiffness."""

from __future__ import annotations

import numpy as np
import pytest

from tests.physics.integrator import whole_period
from trapd.physics import collocation
from trapd.physics.collocation import half_period, largest_stiffness


def states(stiffness, count=40, axes=3, traceless=False):
    random = np.random.default_rng(int(stiffness * 7) + axes)
    a, q = (random.normal(size=(count, axes, axes)) for _ in range(2))
    a, q = a + a.swapaxes(1, 2), q + q.swapaxes(1, 2)
    if traceless:
        for matrix in (a, q):
            matrix -= np.trace(matrix, axis1=1, axis2=2)[:, None, None] / axes * np.eye(axes)
    scale = (stiffness / largest_stiffness(a, q))[:, None, None]
    return a * scale, q * scale


@pytest.mark.parametrize("stiffness", [0.5, 1.5, 3.0, 8.0, 50.0, 1000.0])
def test_the_half_period_is_symplectic(stiffness):
    end = half_period(*states(stiffness))
    size = np.abs(end.a).max() ** 2

    def transpose(matrix):
        return matrix.swapaxes(1, 2)

    unity = transpose(end.a) @ end.d - transpose(end.c) @ end.b
    assert np.abs(unity - np.eye(3)).max() < 1e-13 * size
    product = transpose(end.a) @ end.c
    assert np.abs(product - transpose(product)).max() < 1e-12 * size


@pytest.mark.parametrize("stiffness", [0.4, 1.5, 3.0, 8.0, 9.0, 60.0, 900.0])
def test_more_nodes_change_nothing(stiffness, monkeypatch):
    a, q = states(stiffness)
    end = half_period(a, q)
    monkeypatch.setattr(collocation, "_PANEL_NORM", 1.0)
    monkeypatch.setattr(collocation, "_resolution", lambda norm: (20, 1 + int(norm**0.5)))
    finer = half_period(a, q)
    size = np.abs(finer.c).max(axis=(1, 2), keepdims=True)
    for name in "abcd":
        assert np.abs((getattr(end, name) - getattr(finer, name)) / size).max() < 3e-14


@pytest.mark.parametrize("stiffness", [1.0, 5.0, 30.0])
def test_two_halves_make_the_integrator_s_whole_period(stiffness):
    a, q = states(stiffness, count=3)
    end = half_period(a, q)
    for k in range(3):
        first = np.block([[end.a[k], end.b[k]], [end.c[k], end.d[k]]])
        flip = np.diag([1, 1, 1, -1, -1, -1])
        second = flip @ np.linalg.inv(first) @ flip  # the drive is even in time
        whole = whole_period(a[k], q[k])
        assert second @ first == pytest.approx(whole, abs=1e-9 * np.abs(whole).max() ** 2)


def test_in_a_source_free_trap_the_slow_modes_share_out_what_the_drive_gives():
    # Laplace: trace A = trace Q = 0, so to lowest order sum beta^2 = trace Q^2 / 2 (Dehmelt's pseudopotential [mem])
    a, q = states(0.01, traceless=True)
    end = half_period(a * 1e-3, q)
    sin2 = np.trace(end.sin2, axis1=1, axis2=2)
    expected = (np.pi / 2) ** 2 * np.einsum("sij,sji->s", q, q) / 2
    assert sin2 == pytest.approx(expected, rel=1e-3)
