"""What the published sludge and reagent figures teach, beyond their numbers."""

from __future__ import annotations

import numpy as np
import pytest

from catalogs import load_reagents
from chemistry.formula import molar_mass_g_per_mol
from tests.reference.cases import readings_of
from tests.reference.ligands_and_salts import GYPSUM, limed_acid
from tests.reference.waters import solid_amount


def test_lime_makes_no_gypsum_below_the_threshold_and_most_of_the_sludge_above() -> None:
    threshold = readings_of("F03")["shipped"].measured / molar_mass_g_per_mol("H2SO4")
    acid = np.array([0.98, 1.02, 5.0]) * threshold
    gypsum = solid_amount(limed_acid(acid, 7.0), GYPSUM)
    assert gypsum[0] == 0.0
    assert gypsum[1] > 0.0
    assert gypsum[2] > 0.7 * acid[2]


def test_shipped_reagents_weigh_what_their_formula_weighs() -> None:
    for reagent in load_reagents().values():
        mass = molar_mass_g_per_mol(reagent.formula)
        assert reagent.molar_mass_g_per_mol == pytest.approx(mass, rel=5e-4), reagent.reagent


def test_a_kilogram_of_magnesia_replaces_more_than_a_kilogram_of_caustic() -> None:
    readings = readings_of("G01")
    assert readings["MgOH2"].measured < 0.75 * readings["NaOH"].measured
