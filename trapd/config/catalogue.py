"""``[[species]]``: the catalogue of what may be in the trap."""

from __future__ import annotations

from dataclasses import replace
from math import nan
from typing import get_args

from trapd.config.electrodes import NAME, WANTED_NAME
from trapd.config.table import Table
from trapd.physics.species import Species, ion
from trapd.setpoint import Presence

_PRESENCES: tuple[Presence, ...] = get_args(Presence)
_NO_SPECIES = Species(name="", mass_kg=nan, charge_c=nan)


def read_species(root: Table) -> dict[str, Species]:
    catalogue: dict[str, Species] = {}
    for table in root.tables("species", labels=("ion", "name")):
        species = replace(_read_one(table), damping_per_s=table.quantity("damping", "rate", default=0.0, least=0.0))
        if species.name in catalogue:
            table.mistakes.note(table.path, f": {species.name} is in the file twice; expected each species once")
        if species.name:
            catalogue[species.name] = species
    return catalogue


def _read_one(table: Table) -> Species:
    if "ion" in table:
        table.refuse(("name", "mass", "charge"), "it follows from the ion; expected one or the other")
        return _read_ion(table)
    if "name" not in table:
        table.mistakes.note(table.path, ': expected ion = "40Ca+", or name, mass and charge')
        return _NO_SPECIES
    charge_c = table.quantity("charge", "charge")
    if charge_c == 0.0:
        table.wrong("charge", "a charge other than zero")
    return Species(name=_name(table), mass_kg=table.quantity("mass", "mass", above=0.0), charge_c=charge_c)


def _name(table: Table) -> str:
    """Names stand beside ions and the words of `trapd ions` on a command line, and must not be mistaken for them."""
    name = table.text("name", WANTED_NAME)
    if name and not NAME.fullmatch(name):
        table.wrong("name", WANTED_NAME)
    if name in _PRESENCES:
        table.wrong("name", f"another name ({', '.join(_PRESENCES)} say what is in the trap)")
    return name


def _read_ion(table: Table) -> Species:
    text = table.text("ion", 'isotope, element and charge such as "40Ca+"')
    if not text:
        return _NO_SPECIES
    try:
        return ion(text)
    except ValueError as error:
        table.wrong("ion", f'isotope, element and charge such as "40Ca+" ({error})')
        return _NO_SPECIES
