"""What is trapped: mass, charge, damping. Ions by name come from the AME2020 tables."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Final

# CODATA 2022. Written out because importing scipy.constants costs 0.1 s of every `trapd judge`; a test compares them.
ELEMENTARY_CHARGE_C: Final = 1.602176634e-19
ATOMIC_MASS_KG: Final = 1.66053906892e-27
ELECTRON_MASS_KG: Final = 9.1093837139e-31

_ION = re.compile(r"(?P<isotope>\d+)(?P<element>[A-Z][a-z]?)(?:(?P<count>\d*)\+|(?P<pluses>\+{2,}))")


@dataclass(frozen=True, kw_only=True)
class Species:
    """One kind of particle: ``mass_kg``, ``charge_c`` (signed), ``damping_per_s`` the velocity damping rate."""

    name: str
    mass_kg: float
    charge_c: float
    damping_per_s: float = 0.0


def ion(text: str) -> Species:
    """The ion written as isotope, element and charge: ``40Ca+``, ``40Ca2+`` or ``40Ca++``.

    The mass is the neutral AME2020 atomic mass less the removed electrons (their binding, below 1e-8 of the mass for
    light charges, is left out). Raises ValueError with one sentence when the text is no such ion.
    """
    match = _ION.fullmatch(text.strip())
    if match is None:
        raise ValueError(
            f"{text!r} is not an ion; expected isotope, element and positive charge, such as 40Ca+ or 40Ca2+"
        )
    charges = len(match["pluses"]) if match["pluses"] else int(match["count"] or 1)
    neutral_u, protons = _atom(text, match["element"], int(match["isotope"]))
    if not 1 <= charges <= protons:
        raise ValueError(f"{text!r}: {match['element']} has {protons} electrons, so {charges} cannot be removed")
    return Species(
        name=f"{match['isotope']}{match['element']}{charges if charges > 1 else ''}+",
        mass_kg=neutral_u * ATOMIC_MASS_KG - charges * ELECTRON_MASS_KG,
        charge_c=charges * ELEMENTARY_CHARGE_C,
    )


def _atom(text: str, element: str, isotope: int) -> tuple[float, int]:
    """Neutral mass in u and number of protons."""
    import periodictable  # 30 ms, and not needed when masses are given

    if element not in {atom.symbol for atom in periodictable.elements}:
        raise ValueError(f"{text!r}: there is no element {element}")
    atom = getattr(periodictable, element)
    if isotope not in atom.isotopes:
        raise ValueError(f"{text!r}: the mass tables have no isotope {isotope} of {element}")
    return float(atom[isotope].mass), int(atom.number)
