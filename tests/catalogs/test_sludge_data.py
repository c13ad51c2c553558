"""Densities, classes, thresholds and cake: checksums, sources and agreement with the solids."""

from __future__ import annotations

import numpy as np
import pytest

from catalogs.constants import COMPONENTS, load_system, solid_table
from catalogs.sludge_data import (
    cake_figures,
    disposal_classes,
    leaching_thresholds,
    solid_densities,
)
from chemistry.sludge import BOUND_WATER_FACTOR, CAKE_SOLIDS_FRACTION, formula_masses_g_per_mol


def test_no_row_and_no_digit_was_lost() -> None:
    densities = solid_densities().values()
    assert len(densities) == 115
    assert sum(row.density_kg_per_l for row in densities) == pytest.approx(477.32, abs=1e-9)
    assert len(disposal_classes()) == 4
    assert sum(c.tariff_high_per_wet_t for c in disposal_classes().values()) == 2630.0
    assert len(leaching_thresholds()) == 6
    assert sum(t.threshold_mg_per_l for t in leaching_thresholds().values()) == 116.2
    assert len(cake_figures()) == 4
    assert sum(c.usual for c in cake_figures().values()) == pytest.approx(2.67)


def test_every_row_has_a_source() -> None:
    tables = (solid_densities(), disposal_classes(), leaching_thresholds(), cake_figures())
    assert all(row.source for table in tables for row in table.values())


def test_every_solid_of_the_catalog_has_a_density() -> None:
    assert set(solid_densities()) == set(solid_table())


def test_densities_are_those_of_crystals_not_of_settled_floc() -> None:
    assert all(1.5 < row.density_kg_per_l < 11.5 for row in solid_densities().values())


def test_molar_masses_agree_with_the_formation_reactions() -> None:
    system = load_system(components=COMPONENTS, solids=solid_table())
    listed = [solid_densities()[name].molar_mass_g_per_mol for name in system.solid_names]
    assert np.allclose(listed, formula_masses_g_per_mol(system), atol=2e-3, rtol=0.0)
    assert np.allclose(listed, system.solid_molar_masses_g_per_mol, atol=2e-3, rtol=0.0)


def test_hazardous_sludge_costs_more_than_other_sludge() -> None:
    classes = disposal_classes()
    assert all(c.tariff_low_per_wet_t < c.tariff_high_per_wet_t for c in classes.values())
    plain, hazardous = classes["non_hazardous"], classes["hazardous"]
    assert hazardous.tariff_low_per_wet_t >= plain.tariff_high_per_wet_t


def test_screening_content_is_twenty_times_the_leaching_threshold() -> None:
    assert leaching_thresholds()["Cd"].screening_mg_per_kg == 20.0
    assert leaching_thresholds()["Ba"].screening_mg_per_kg == 2000.0


def test_usual_cake_lies_in_its_range_and_is_what_the_sludge_masses_assume() -> None:
    figures = cake_figures()
    assert all(f.low < f.usual < f.high for f in figures.values())
    assert figures["cake_solids_fraction"].usual == CAKE_SOLIDS_FRACTION
    assert figures["bound_water_factor"].usual == BOUND_WATER_FACTOR
