"""``[trap]``, and the six numbers of a curvature."""

from __future__ import annotations

from math import nan

from trapd.config.records import Geometry, Matrix, TrapSection
from trapd.config.table import Table

GEOMETRIES: tuple[Geometry, ...] = ("linear", "ring", "tensor")
_SHORTEST_M, _LONGEST_M = 1e-6, 10.0
_LAPLACE_TOLERANCE = 1e-6


def read_trap(table: Table) -> TrapSection | None:
    """None, with the mistake noted, when the geometry is none of ours."""
    name = table.text("name", 'the trap\'s name such as "north bench"')
    geometry = table.choice("geometry", GEOMETRIES)
    if geometry is None:
        return None
    if geometry == "tensor":
        table.refuse(("r0", "z0", "kappa", "phases"), "tensor geometry takes [drive] curvature instead")
        return TrapSection(name=name, geometry=geometry, escape_m=_escape(table))
    table.refuse(("escape",), f"{geometry} geometry takes it from r0 and z0")
    r0_m = _distance(table, "r0")
    z0_m = _distance(table, "z0")
    if geometry == "ring":
        table.refuse(("kappa", "phases"), "only linear geometry has it")
        return TrapSection(name=name, geometry=geometry, r0_m=r0_m, z0_m=z0_m)
    kappa = table.number("kappa", above=0.0)
    return TrapSection(name=name, geometry=geometry, r0_m=r0_m, z0_m=z0_m, kappa=kappa, phases=_phases(table))


def _distance(table: Table, key: str) -> float:
    """Within bounds that every trap keeps by far, and whose squares are numbers."""
    distance_m = table.quantity(key, "length")
    if distance_m < _SHORTEST_M or distance_m > _LONGEST_M:
        table.wrong(key, "a length from 1 um to 10 m")
        return nan
    return distance_m


def _escape(table: Table) -> tuple[float, float, float] | None:
    if "escape" not in table:
        return None
    x_m, y_m, z_m = table.quantities("escape", "length", "x, y, z", above=0.0)
    return x_m, y_m, z_m


def _phases(table: Table) -> int:
    wanted = "1 (one rod pair driven, the other grounded) or 2 (both, in antiphase)"
    return table.integer("phases", wanted, least=1, most=2, default=1) or 1


def read_curvature(table: Table, key: str = "curvature") -> Matrix | None:
    """Second derivatives of the potential per volt (1/m^2), in the file as six numbers; None when absent or wrong."""
    six = table.numbers(key, "xx, yy, zz, yz, xz, xy")
    if six is None:
        return None
    xx, yy, zz, yz, xz, xy = six
    if abs(xx + yy + zz) > _LAPLACE_TOLERANCE * max(map(abs, six)):
        table.wrong(key, f"xx + yy + zz = 0 (Laplace's equation), not {xx + yy + zz:g}")
        return None
    return ((xx, xy, xz), (xy, yy, yz), (xz, yz, zz))
