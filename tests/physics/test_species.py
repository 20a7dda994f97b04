"""Species by name."""

from __future__ import annotations

import pytest
import scipy.constants

from trapd.physics import species
from trapd.physics.species import ion


def test_constants_are_codata():
    # CODATA 2018 or 2022, whichever this scipy carries: u differs by 1.4e-9 between them
    assert scipy.constants.e == species.ELEMENTARY_CHARGE_C
    assert scipy.constants.m_u == pytest.approx(species.ATOMIC_MASS_KG, rel=2e-9)
    assert scipy.constants.m_e == pytest.approx(species.ELECTRON_MASS_KG, rel=2e-9)


@pytest.mark.parametrize(
    ("text", "neutral_u", "charges"),
    [("9Be+", 9.012183066, 1), ("27Al+", 26.981538408, 1), ("40Ca+", 39.962590851, 1), ("40Ca2+", 39.962590851, 2)],
)
def test_masses_are_ame2020_less_the_electrons(text, neutral_u, charges):
    # Wang et al. 2021, Chinese Physics C 45, 030003 (AME2020) [mem]
    found = ion(text)
    electron_u = species.ELECTRON_MASS_KG / species.ATOMIC_MASS_KG
    assert found.mass_kg / species.ATOMIC_MASS_KG == pytest.approx(neutral_u - charges * electron_u, rel=5e-9)
    assert found.charge_c == charges * species.ELEMENTARY_CHARGE_C
    assert found.name == text


def test_two_spellings_of_a_charge_are_one_ion():
    assert ion("40Ca++") == ion("40Ca2+") == ion(" 40Ca2+ ")


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("Ca+", "isotope"),
        ("40Ca", "positive charge"),
        ("40Ca-", "positive charge"),
        ("40Xx+", "no element Xx"),
        ("99Ca+", "no isotope 99 of Ca"),
        ("1H2+", "1 electrons"),
        ("40Ca0+", "cannot be removed"),
        ("", "isotope"),
    ],
)
def test_a_text_that_is_no_ion_is_refused_in_one_sentence(text, says):
    with pytest.raises(ValueError, match=says):
        ion(text)
