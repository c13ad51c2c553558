"""Floors, variability and gases: checksums, sources and the defaults that fill the gaps."""

from __future__ import annotations

import pytest

from catalogs.constants import species_table
from catalogs.practice_data import (
    LIGAND_FAMILIES,
    floors_mg_per_l,
    gas_solubilities,
    gas_threshold,
    gas_thresholds,
    practical_floor,
    practical_floors,
    variabilities,
    variability_of,
)
from chemistry.analysis import METALS
from chemistry.state import LOG10_HENRY_CO2, LOG10_HENRY_H2S


def test_no_row_and_no_digit_was_lost() -> None:
    assert len(practical_floors()) == 10
    assert sum(f.floor_mg_per_l for f in practical_floors()) == pytest.approx(0.988, abs=1e-12)
    assert len(variabilities()) == 11
    daily = sum(v.daily_ratio for v in variabilities().values())
    assert daily == pytest.approx(39.081, abs=5e-3)
    assert len(gas_thresholds()) == 6
    assert sum(g.limit_ppm for g in gas_thresholds()) == 45131.0
    assert len(gas_solubilities()) == 2
    assert sum(g.log10_k for g in gas_solubilities().values()) == pytest.approx(-2.458)


def test_every_row_has_a_source() -> None:
    assert all(f.source for f in practical_floors())
    assert all(v.source for v in variabilities().values())
    assert all(g.source for g in gas_thresholds())
    assert all(g.source for g in gas_solubilities().values())


def test_floors_use_the_high_end_of_their_source() -> None:
    assert all(0.0 < f.low_mg_per_l <= f.floor_mg_per_l for f in practical_floors())
    assert practical_floor("Cu", "hydroxide").floor_mg_per_l == 0.07
    assert practical_floor("Cd", "sulfide").floor_mg_per_l == 0.008


def test_a_family_without_a_row_takes_the_highest_floor_of_its_metal() -> None:
    assert practical_floor("Cd", "carbonate").floor_mg_per_l == 0.05
    assert practical_floor("Ni", "sulfide").floor_mg_per_l == 0.12


def test_a_metal_without_a_row_takes_the_customary_floor_and_says_so() -> None:
    lead = practical_floor("Pb", "sulfide")
    assert lead.floor_mg_per_l == 0.05
    assert lead.source == "common practice, no source"


def test_an_unknown_family_is_refused() -> None:
    with pytest.raises(KeyError, match=r"unknown family 'hydroxyde'\. Did you mean `hydrox"):
        practical_floor("Cu", "hydroxyde")


def test_the_filled_table_of_floors_has_every_metal_that_precipitation_removes() -> None:
    table = floors_mg_per_l()
    assert set(table) == (set(METALS) - {"Cr(VI)"}) | {"Cr", "Fe"}
    assert all(set(row) == set(LIGAND_FAMILIES) for row in table.values())
    assert table["Cu"]["sulfide"] == 0.02


def test_variability_of_a_metal_is_one_day_and_ten_days_over_the_mean() -> None:
    copper = variability_of("Cu")
    assert copper.daily_ratio == pytest.approx(1.9 / 0.58)
    assert copper.monthly_ratio == pytest.approx(1.0 / 0.58)


def test_oxidation_states_share_the_row_of_their_element() -> None:
    assert variability_of("Cr(III)") == variability_of("Cr")
    assert variability_of("Fe(II)").daily_ratio == pytest.approx(1.2 / 0.41)


def test_days_vary_more_than_months_and_both_more_than_the_mean() -> None:
    for row in variabilities().values():
        assert row.daily_ratio > row.monthly_ratio > 1.0, row.parameter


def test_published_one_day_maxima_are_two_and_a_half_to_five_and_a_half_means() -> None:
    published = [v for v in variabilities().values() if "EPA" in v.source]
    assert len(published) == 9
    assert all(2.5 <= v.daily_ratio <= 5.5 for v in published)


def test_the_default_for_other_metals_is_the_median_of_the_published_ones() -> None:
    metals = [v for n, v in variabilities().items() if n not in ("TSS", "metals", "salts")]
    daily = sorted(v.daily_ratio for v in metals)
    assert (daily[3] + daily[4]) / 2 == pytest.approx(3.8, abs=0.01)
    monthly = sorted(v.monthly_ratio for v in metals if "no source" not in v.note)
    assert (monthly[2] + monthly[3]) / 2 == pytest.approx(1.8, abs=0.02)
    assert variability_of("Co").source == "common practice, no source"
    assert (variability_of("Co").daily_ratio, variability_of("Co").monthly_ratio) == (3.8, 1.8)


def test_a_missing_ten_day_value_is_filled_and_said_so() -> None:
    assert variability_of("Ag").monthly_ratio == 1.8
    assert "no source" in variability_of("Ag").note


def test_salts_vary_less_than_metals() -> None:
    for parameter in ("SO4", "TDS", "hardness", "sulfide"):
        assert variability_of(parameter).parameter == "salts"
    assert variability_of("SO4").daily_ratio < min(
        v.daily_ratio for n, v in variabilities().items() if n != "salts"
    )


def test_the_ceiling_of_hydrogen_sulfide_is_named() -> None:
    ceiling = gas_threshold("H2S")
    assert (ceiling.limit_ppm, ceiling.averaging) == (10.0, "10 minutes")
    assert "NIOSH" in ceiling.source
    with pytest.raises(KeyError, match="no threshold HCN ceiling"):
        gas_threshold("HCN")


def test_henry_constants_agree_with_those_of_the_equilibrium() -> None:
    gases = gas_solubilities()
    assert gases["CO2"].log10_k == LOG10_HENRY_CO2
    assert gases["H2S"].log10_k == LOG10_HENRY_H2S
    assert all(gas.species in species_table() for gas in gases.values())


@pytest.mark.parametrize(("temperature_degc", "log10_k"), [(10.0, -1.270), (40.0, -1.624)])
def test_carbon_dioxide_dissolves_better_in_the_cold_as_published(
    temperature_degc: float, log10_k: float
) -> None:
    """Plummer & Busenberg 1982, equation for KH, evaluated."""
    expected = 10.0**log10_k
    found = gas_solubilities()["CO2"].mol_per_kg_atm(temperature_degc)
    assert found == pytest.approx(expected, rel=0.05)
