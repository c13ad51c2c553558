"""Conversions against stoichiometry and published equivalents."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from chemistry import units
from chemistry.errors import WaterError

POSITIVE = st.floats(min_value=1e-9, max_value=1e9)


def test_50_mg_of_calcium_carbonate_are_one_milliequivalent() -> None:
    assert units.mg_per_l_as_caco3_to_meq_per_l(50.04) == pytest.approx(1.0, rel=1e-12)
    # CaCO3 is 100.087 g/mol and gives two equivalents.
    assert pytest.approx(100.087 / 2.0, rel=1e-4) == units.MG_CACO3_PER_MEQ


def test_hardness_as_calcium_carbonate_turns_into_calcium_and_magnesium() -> None:
    # Factors printed in water analysis handbooks: 0.4004 mg Ca and 0.2428 mg Mg per mg CaCO3.
    calcium = units.mg_per_l_as_basis_to_mg_per_l(1.0, "CaCO3", 40.078, 2)
    magnesium = units.mg_per_l_as_basis_to_mg_per_l(1.0, "CaCO3", 24.305, 2)
    assert calcium == pytest.approx(0.4004, rel=5e-4)
    assert magnesium == pytest.approx(0.2428, rel=5e-4)


@pytest.mark.parametrize(
    ("basis", "mass", "factor"),
    [("N", 18.039, 1.2879), ("P", 94.970, 3.0661), ("S", 96.056, 2.9961)],
)
def test_ammonium_phosphate_and_sulfate_as_their_element(
    basis: str, mass: float, factor: float
) -> None:
    # NH4 per N, PO4 per P, SO4 per S by molar mass.
    found = units.mg_per_l_as_basis_to_mg_per_l(1.0, basis, mass, -1)
    assert found == pytest.approx(factor, rel=1e-4)
    back = units.mg_per_l_to_mg_per_l_as_element(found, basis, mass)
    assert back == pytest.approx(1.0, rel=1e-12)


def test_an_unknown_basis_is_refused_with_the_known_ones() -> None:
    with pytest.raises(WaterError, match="unknown basis 'Na2O': use CaCO3, N, P or S"):
        units.mg_per_l_as_basis_to_mg_per_l(1.0, "Na2O", 20.0, 1)


def test_quicklime_as_hydrated_lime() -> None:
    # Lime of 72 and 74 % CaO holds 95.1 and 97.8 % Ca(OH)2: lime chapter of the Handbook of
    # Environmental Engineering, within 0.5 %.
    assert units.kg_cao_to_kg_hydrated_lime(72.0) == pytest.approx(95.1, rel=0.005)
    assert units.kg_cao_to_kg_hydrated_lime(74.0) == pytest.approx(97.8, rel=0.005)
    assert units.kg_hydrated_lime_to_kg_cao(units.kg_cao_to_kg_hydrated_lime(3.0)) == pytest.approx(
        3.0, rel=1e-12
    )


def test_short_tons_pounds_and_gallons() -> None:
    assert units.short_ton_to_tonne(1.0) == pytest.approx(0.90718474, rel=1e-12)
    assert units.price_per_short_ton_to_price_per_t(0.90718474) == pytest.approx(1.0)
    # 0.53 and 0.25 USD/lb are 1168 and 551 USD/t: plating survey of the 1990s, section 7.5.3.
    assert units.price_per_lb_to_price_per_t(0.53) == pytest.approx(1168.0, rel=0.002)
    assert units.price_per_lb_to_price_per_t(0.25) == pytest.approx(551.0, rel=0.002)
    assert units.us_gallon_to_l(1.0) == pytest.approx(3.7854, rel=1e-5)


def test_one_milliequivalent_of_base_is_40_g_of_caustic_per_m3() -> None:
    assert units.meq_per_l_to_kg_naoh_per_m3(1.0) == pytest.approx(0.040, rel=1e-3)


def test_a_dose_in_a_flow_and_back() -> None:
    assert units.mg_per_l_to_kg_per_d(250.0, 120.0) == pytest.approx(30.0)
    assert units.kg_per_d_to_mg_per_l(30.0, 120.0) == pytest.approx(250.0)
    # 30 kg/d as 50 % solution of 1.525 kg/L.
    assert units.kg_pure_per_d_to_l_product_per_h(30.0, 0.5, 1.525) == pytest.approx(
        30.0 / 0.5 / 1.525 / 24.0
    )


def test_gas_pressure_as_ppm_in_air() -> None:
    assert units.partial_pressure_atm_to_ppm(1e-5) == pytest.approx(10.0)
    assert units.partial_pressure_atm_to_ppm(1e-5, 0.8) == pytest.approx(12.5)
    assert units.ppm_to_partial_pressure_atm(12.5, 0.8) == pytest.approx(1e-5)


@given(POSITIVE, st.floats(min_value=1.0, max_value=500.0))
def test_mass_and_amount_concentrations_are_inverse(value: float, mass: float) -> None:
    there = units.mg_per_l_to_mol_per_l(value, mass)
    assert units.mol_per_l_to_mg_per_l(there, mass) == pytest.approx(value, rel=1e-12)


def test_arrays_are_converted_elementwise() -> None:
    given_mg = np.array([1.0, 2.0])
    found = units.ug_per_l_to_mg_per_l(given_mg)
    assert found == pytest.approx([0.001, 0.002])
    assert units.g_per_l_to_mg_per_l(found) == pytest.approx([1.0, 2.0])
    assert units.mol_per_l_to_meq_per_l(given_mg, -2) == pytest.approx([2000.0, 4000.0])
    assert units.meq_per_l_to_mg_per_l_as_caco3(given_mg) == pytest.approx([50.04, 100.08])
