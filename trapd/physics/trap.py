"""A trap as the ion at its centre feels it: second derivatives of the potential per volt, and fields per volt.

Ideal electrodes follow from the geometry; a ``curvature`` given for an electrode, or for the drive, replaces its ideal.

- linear: ``phi = phases (U_rods + V cos Omega t)(x^2 - y^2)/(2 r0^2) + kappa U_endcap (z^2 - (x^2 + y^2)/2)/z0^2``
- ring: ``phi = (U_ring + V cos Omega t)(x^2 + y^2 - 2 z^2)/(r0^2 + 2 z0^2)``, endcaps grounded
- tensor: the curvatures as given
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trapd.physics.point import AMPLITUDE, FREQUENCY

Array = NDArray[np.float64]
AXES = ("x", "y", "z")
Kind = Literal["endcap", "rods", "ring", "other"]


@dataclass(frozen=True, kw_only=True, eq=False)
class Electrode:
    """One DC electrode: ``weight`` of the ideal potential of its ``kind``; ``curvature`` (3, 3) in 1/m^2 per volt replaces
    that ideal; ``field`` (3,) is the field per volt at the ion in 1/m."""

    kind: Kind = "other"
    weight: float = 1.0
    curvature: ArrayLike | None = None
    field: ArrayLike | None = None


@dataclass(frozen=True, kw_only=True)
class Escape:
    """How far from the centre an ion is lost along x, y and z, in metres."""

    x_m: float
    y_m: float
    z_m: float


@dataclass(frozen=True, kw_only=True, eq=False)
class Trap:
    """``drive_curvature`` (3, 3) per volt of drive amplitude, ``electrode_curvature`` name -> (3, 3), both symmetric, in
    1/m^2; ``electrode_field`` name -> (3,) in 1/m; ``escape`` None where no depth can be told."""

    drive_curvature: Array
    electrode_curvature: Mapping[str, Array]
    electrode_field: Mapping[str, Array] = field(default_factory=dict)
    escape: Escape | None = None

    @property
    def setpoints(self) -> tuple[str, ...]:
        return (FREQUENCY, AMPLITUDE, *self.electrode_curvature)

    @cached_property
    def escape_squared(self) -> Array | None:
        """(3,) squared escape distances in m^2, None where there are none."""
        if self.escape is None:
            return None
        return np.array([self.escape.x_m, self.escape.y_m, self.escape.z_m]) ** 2

    @cached_property
    def stacked_curvature(self) -> Array:
        """(1 + electrodes, 18): what a volt of drive amplitude, then of each electrode, adds to twice the static curvature and
        to the driven one."""
        static = [np.concatenate([2 * one, 0 * one]) for one in self.electrode_curvature.values()]
        return np.array([np.concatenate([0 * self.drive_curvature, self.drive_curvature]), *static]).reshape(-1, 18)


def curvature(xx: float, yy: float, zz: float, yz: float, xz: float, xy: float) -> Array:
    """The symmetric (3, 3) matrix of six second derivatives."""
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]], dtype=float)


def linear(
    *,
    r0_m: float,
    z0_m: float,
    kappa: float,
    electrodes: Mapping[str, Electrode],
    phases: Literal[1, 2] = 1,
    drive_curvature: ArrayLike | None = None,
) -> Trap:
    """A linear trap: ``r0_m`` centre to rod, ``z0_m`` half the endcap distance, ``phases`` 1 when one rod pair is driven and
    the other grounded, 2 when both are driven in antiphase (rods then stand on them as plus and minus)."""
    _positive(r0_m=r0_m, z0_m=z0_m)
    if phases not in (1, 2):
        raise ValueError(f"phases is 1 or 2, not {phases}")
    rods = phases / r0_m**2 * np.diag([1.0, -1.0, 0.0])
    endcap = kappa / z0_m**2 * np.diag([-1.0, -1.0, 2.0])
    escape = Escape(x_m=r0_m, y_m=r0_m, z_m=z0_m)
    return _build(rods, drive_curvature, {"rods": rods, "endcap": endcap}, electrodes, escape)


def ring(
    *, r0_m: float, z0_m: float, electrodes: Mapping[str, Electrode], drive_curvature: ArrayLike | None = None
) -> Trap:
    """A ring trap: ``r0_m`` the ring's inner radius, ``z0_m`` half the endcap distance; kind "ring" is ring minus endcaps."""
    _positive(r0_m=r0_m, z0_m=z0_m)
    ideal = 2.0 / (r0_m**2 + 2 * z0_m**2) * np.diag([1.0, 1.0, -2.0])
    return _build(ideal, drive_curvature, {"ring": ideal}, electrodes, Escape(x_m=r0_m, y_m=r0_m, z_m=z0_m))


def tensor(*, drive_curvature: ArrayLike, electrodes: Mapping[str, Electrode], escape: Escape | None = None) -> Trap:
    """Any trap, by its second derivatives per volt."""
    return _build(np.zeros((3, 3)), drive_curvature, {}, electrodes, escape)


def _build(
    ideal_drive: Array,
    drive: ArrayLike | None,
    ideals: Mapping[str, Array],
    electrodes: Mapping[str, Electrode],
    escape: Escape | None,
) -> Trap:
    return Trap(
        drive_curvature=ideal_drive if drive is None else _matrix("the drive", drive),
        electrode_curvature={name: _curvature_of(name, electrode, ideals) for name, electrode in electrodes.items()},
        electrode_field={name: _field_of(name, electrode) for name, electrode in electrodes.items()},
        escape=escape,
    )


def _curvature_of(name: str, electrode: Electrode, ideals: Mapping[str, Array]) -> Array:
    if electrode.kind not in (*ideals, "other"):
        known = ", ".join((*ideals, "other"))
        raise ValueError(f"electrode {name!r} has kind {electrode.kind!r}; this geometry knows {known}")
    if electrode.curvature is not None:
        return _matrix(f"electrode {name!r}", electrode.curvature)
    return electrode.weight * ideals.get(electrode.kind, np.zeros((3, 3)))


def _field_of(name: str, electrode: Electrode) -> Array:
    vector = np.zeros(3) if electrode.field is None else np.asarray(electrode.field, dtype=float)
    if vector.shape != (3,) or not np.isfinite(vector).all():
        raise ValueError(f"the field of electrode {name!r} must be three finite numbers")
    return vector


def _matrix(what: str, value: ArrayLike) -> Array:
    matrix = np.asarray(value, dtype=float)
    if matrix.shape != (3, 3) or not np.isfinite(matrix).all() or (matrix != matrix.T).any():
        raise ValueError(f"the curvature of {what} must be a symmetric 3x3 matrix of finite numbers")
    return matrix


def _positive(**lengths: float) -> None:
    for name, value in lengths.items():
        if not value > 0:
            raise ValueError(f"{name} must be positive, not {value}")
