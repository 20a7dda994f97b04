"""``[electrodes.NAME]``."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import cast

from trapd.config.drive import read_sweep
from trapd.config.geometry import read_curvature
from trapd.config.records import ElectrodeKind, ElectrodeSection, Geometry
from trapd.config.table import Mistakes, Table

KINDS: Mapping[Geometry, tuple[ElectrodeKind, ...]] = {
    "linear": ("endcap", "rods", "other"),
    "ring": ("ring", "other"),
    "tensor": ("other",),
}
NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_-]*")
WANTED_NAME = "a name of letters, digits, _ and -, beginning with a letter or _"


def read_electrodes(table: Table, geometry: Geometry | None, mistakes: Mistakes) -> dict[str, ElectrodeSection]:
    """``table`` is ``[electrodes]`` itself, its keys the electrodes' names."""
    electrodes = {}
    for name in table.names():
        path = f"electrodes.{name}"
        if not NAME.fullmatch(name):
            mistakes.note(path, f": expected {WANTED_NAME}")
        if name == "drive":
            mistakes.note(path, ": this name belongs to the drive; choose another")
        section = table.table(name, "electrodes.NAME", f"a table [{path}]")
        electrodes[name] = _read_electrode(name, section, geometry)
    return electrodes


def _read_electrode(name: str, table: Table, geometry: Geometry | None) -> ElectrodeSection:
    kind = _kind(table, geometry)
    field = table.numbers("field", "x, y, z")
    curvature = read_curvature(table)
    if kind == "other" and not ("field" in table or "curvature" in table):
        table.wrong(
            "field", 'field or curvature, or both (kind "other" has no ideal ones; all zeros says it does nothing)'
        )
    if kind == "other" or "curvature" in table:
        table.refuse(("weight",), "it scales the ideal curvature of a kind, and here there is none")
    weight = table.number("weight", default=1.0)
    if weight == 0.0:
        table.wrong("weight", "a plain number other than zero")
    wired = "instrument" in table or "channel" in table
    return ElectrodeSection(
        name=name,
        kind=kind,
        instrument=table.text("instrument", "the name of an instrument") if wired else None,
        channel=table.integer("channel", "a channel number, 1 or more", least=1, most=999) if wired else None,
        voltage=read_sweep(table, "voltage", "electrodes.NAME.voltage"),
        weight=weight,
        lag_s=table.quantity("lag", "time", default=0.0, least=0.0),
        curvature=curvature,
        field=cast("tuple[float, float, float] | None", field),
    )


def _kind(table: Table, geometry: Geometry | None) -> ElectrodeKind:
    kinds = KINDS[geometry] if geometry else tuple(dict.fromkeys(kind for some in KINDS.values() for kind in some))
    kind = table.choice("kind", kinds, f" in {geometry} geometry" if geometry else "")
    return kind or "endcap"
