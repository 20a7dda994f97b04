"""The ion, its trap, its light and their slow drifts: frozen records. The defaults are one 40Ca+ in a linear trap.

That trap has r0 = 0.50 mm, z0 = 2.5 mm, kappa = 0.29 and one rod pair driven. What its user cannot know is in it too: the
drive's curvature is 0.1 % below the ideal (and the resonator's gain 0.5 % above nominal), and there are stray fields.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TypeAlias

from trapd_simulated.errors import SettingsError

Vector: TypeAlias = tuple[float, ...]
Tensor: TypeAlias = tuple[Vector, ...]  # second derivatives of a potential: 3x3, symmetric

_ZERO_VECTOR: Vector = (0.0, 0.0, 0.0)
_ZERO_TENSOR: Tensor = (_ZERO_VECTOR,) * 3
_DALTON_KG = 1.66053906892e-27  # CODATA 2022 [mem]
_ELECTRON_U = 5.485799090e-4  # CODATA 2022 [mem]
_CA40_U = 39.962590850  # the neutral atom, AME2020 [mem]
_DAMPING_LIMIT_PER_S = 5e4
_R0_M, _Z0_M, _KAPPA = 0.50e-3, 2.5e-3, 0.29


def _diagonal(x: float, y: float, z: float) -> Tensor:
    return ((x, 0.0, 0.0), (0.0, y, 0.0), (0.0, 0.0, z))


_DRIVE_PER_M2 = _diagonal(0.999 / _R0_M**2, -0.999 / _R0_M**2, 0.0)


def _check_vector(name: str, value: Vector) -> None:
    if len(value) != 3 or not all(map(math.isfinite, value)):
        raise SettingsError(f"{name} = {value}: expected three finite numbers")


def _check_tensor(name: str, value: Tensor) -> None:
    for row in value:
        _check_vector(name, row)
    if len(value) != 3 or any(value[i][j] != value[j][i] for i in range(3) for j in range(i)):
        raise SettingsError(f"{name} = {value}: expected a symmetric 3x3 matrix")


@dataclass(frozen=True, kw_only=True)
class ElectrodeSettings:
    """What one volt on a channel of a DC supply makes at the ion."""

    curvature_per_m2: Tensor = _ZERO_TENSOR
    field_per_m: Vector = _ZERO_VECTOR

    def __post_init__(self) -> None:
        _check_tensor("curvature_per_m2", self.curvature_per_m2)
        _check_vector("field_per_m", self.field_per_m)


def default_electrodes() -> dict[str, dict[int, ElectrodeSettings]]:
    """Of the ideal linear trap; one channel holds all rods' common quadrupole, another a shim along x."""
    end = _KAPPA / _Z0_M**2
    return {
        "dc": {
            1: ElectrodeSettings(curvature_per_m2=_diagonal(-end, -end, 2.0 * end)),
            2: ElectrodeSettings(curvature_per_m2=_diagonal(_R0_M**-2, -(_R0_M**-2), 0.0)),
            3: ElectrodeSettings(field_per_m=(310.0, 0.0, 0.0)),
        }
    }


@dataclass(frozen=True, kw_only=True)
class IonSettings:
    """Counts: dark + R I (1 - C s / (1 + s)), s = A^2 / half_signal^2, A the amplitude of the ion's motion, I the light.

    Damping: G(A) = damping / (1 + A^2 / cooling_half^2). A weak tickle then draws a Lorentzian of full width
    damping / (2 pi) at half maximum; s0 = s on resonance widens it by sqrt(1 + s0) and makes it C s0 / (1 + s0) deep.
    Electrodes are by instrument, then channel; one that is not in the rack is at 0 V. Drifts count from the rack's start.
    """

    mass_kg: float = (_CA40_U - _ELECTRON_U) * _DALTON_KG
    charge_c: float = 1.602176634e-19
    drive_curvature_per_m2: Tensor = _DRIVE_PER_M2
    electrodes: Mapping[str, Mapping[int, ElectrodeSettings]] = field(default_factory=default_electrodes)
    stray_curvature_v_per_m2: Tensor = ((-2.0e5, 2.0e4, 0.0), (2.0e4, 0.5e5, 0.0), (0.0, 0.0, 1.5e5))
    stray_field_v_per_m: Vector = (20.0, -15.0, 3.0)
    tickle_instrument: str = "tickle"
    tickle_field_per_m: Vector = (105.0, 85.0, 40.0)
    escape_m: Vector = (0.4e-3, 0.4e-3, 2.0e-3)  # half the box outside which the ion is lost
    damping_per_s: float = 2.0 * math.pi * 1500.0
    cooling_half_m: float = 8e-6
    rest_m: float = 2e-8  # amplitude below which a moved trap finds no ion
    rate_per_s: float = 30e3
    dark_per_s: float = 200.0
    half_signal_m: float = 0.9e-6
    greatest_contrast: float = 0.9  # C; below 0 a rise
    intensity_rms: float = 0.01  # relative; Ornstein-Uhlenbeck
    intensity_time_s: float = 30.0
    gain_drift_per_h: float = 5e-6  # relative
    stray_curvature_drift_v_per_m2_h: Tensor = ((-300.0, 0.0, 0.0), (0.0, 100.0, 0.0), (0.0, 0.0, 200.0))
    stray_field_drift_v_per_m_h: Vector = (0.1, 0.1, 0.0)

    def __post_init__(self) -> None:
        for name in ("drive_curvature_per_m2", "stray_curvature_v_per_m2", "stray_curvature_drift_v_per_m2_h"):
            _check_tensor(name, getattr(self, name))
        for name in ("stray_field_v_per_m", "tickle_field_per_m", "escape_m", "stray_field_drift_v_per_m_h"):
            _check_vector(name, getattr(self, name))
        for name in ("mass_kg", "cooling_half_m", "rest_m", "half_signal_m", "intensity_time_s"):
            if not getattr(self, name) > 0.0:
                raise SettingsError(f"{name} = {getattr(self, name):g}: expected a number above 0")
        if not 0.0 <= self.damping_per_s <= _DAMPING_LIMIT_PER_S:
            raise SettingsError(f"damping_per_s = {self.damping_per_s:g}: expected 0 .. {_DAMPING_LIMIT_PER_S:g}")
        if not self.greatest_contrast <= 1.0:
            raise SettingsError(f"greatest_contrast = {self.greatest_contrast:g}: expected at most 1")
