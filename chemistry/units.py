"""Unit conversions, each named at both ends, and the labels that units are printed with.

Owns every conversion factor of the product; molar masses come from `chemistry.formula`.
Numbers and arrays are both taken and given back.
"""

from __future__ import annotations

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import WaterError
from chemistry.formula import molar_mass_g_per_mol

Amount = TypeVar("Amount", float, NDArray[np.float64])

MG_PER_G = 1000.0
KG_PER_TONNE = 1000.0
KG_PER_POUND = 0.45359237
"""International avoirdupois pound, exact by the 1959 agreement. [kg]"""
POUNDS_PER_SHORT_TON = 2000.0
L_PER_US_GALLON = 3.785411784
"""US liquid gallon of 231 cubic inches, exact. [L]"""
MG_CACO3_PER_MEQ = 50.04
"""Half the molar mass of CaCO3 (100.087 g/mol, rounded as the trade does). [mg/meq]"""
PPM_PER_ATM = 1.0e6


def mg_per_l_to_mol_per_l(mass_mg_per_l: Amount, molar_mass_g_per_mol: float) -> Amount:
    """Convert mass concentration [mg/L] to amount concentration [mol/L]."""
    return mass_mg_per_l / (molar_mass_g_per_mol * MG_PER_G)


def mol_per_l_to_mg_per_l(amount_mol_per_l: Amount, molar_mass_g_per_mol: float) -> Amount:
    """Convert amount concentration [mol/L] to mass concentration [mg/L]."""
    return amount_mol_per_l * (molar_mass_g_per_mol * MG_PER_G)


def ug_per_l_to_mg_per_l(mass_ug_per_l: Amount) -> Amount:
    """Convert micrograms to milligrams per litre."""
    return mass_ug_per_l / 1000.0


def g_per_l_to_mg_per_l(mass_g_per_l: Amount) -> Amount:
    """Convert grams to milligrams per litre."""
    return mass_g_per_l * MG_PER_G


def mol_per_l_to_meq_per_l(amount_mol_per_l: Amount, charge: float) -> Amount:
    """Convert mol/L of an ion to meq/L of its charge, as a positive amount of either sign."""
    return amount_mol_per_l * (abs(charge) * 1000.0)


def mg_per_l_as_caco3_to_meq_per_l(mass_mg_per_l_as_caco3: Amount) -> Amount:
    """Convert mg/L as CaCO3 to meq/L: 50.04 mg are 1 meq (common practice).

    Examples
    --------
    >>> round(mg_per_l_as_caco3_to_meq_per_l(200.0), 3)
    3.997
    """
    return mass_mg_per_l_as_caco3 / MG_CACO3_PER_MEQ


def meq_per_l_to_mg_per_l_as_caco3(amount_meq_per_l: Amount) -> Amount:
    """Convert meq/L to mg/L as CaCO3: 50.04 mg are 1 meq (common practice)."""
    return amount_meq_per_l * MG_CACO3_PER_MEQ


def mg_per_l_as_caco3_to_mg_per_l(
    mass_mg_per_l_as_caco3: Amount, molar_mass_g_per_mol: float, charge: float
) -> Amount:
    """Convert mg/L as CaCO3 to mg/L of an ion with this molar mass and charge.

    Examples
    --------
    Calcium hardness of 100 mg/L as CaCO3 is 40 mg/L of calcium:

    >>> round(mg_per_l_as_caco3_to_mg_per_l(100.0, 40.078, 2), 2)
    40.05
    """
    return mass_mg_per_l_as_caco3 / MG_CACO3_PER_MEQ * (molar_mass_g_per_mol / abs(charge))


def mg_per_l_as_element_to_mg_per_l(
    mass_mg_per_l_as_element: Amount, element: str, molar_mass_g_per_mol: float
) -> Amount:
    """Convert mg/L as an element (N, P, S) to mg/L of an ion that holds one atom of it.

    Parameters
    ----------
    mass_mg_per_l_as_element
        Mass of the element in a litre. [mg/L as the element]
    element
        Symbol of the element.
    molar_mass_g_per_mol
        Molar mass of the whole ion. [g/mol]

    Examples
    --------
    >>> round(mg_per_l_as_element_to_mg_per_l(14.007, "N", 18.039), 3)
    18.039
    """
    return mass_mg_per_l_as_element * (molar_mass_g_per_mol / _mass_of(element))


def mg_per_l_to_mg_per_l_as_element(
    mass_mg_per_l: Amount, element: str, molar_mass_g_per_mol: float
) -> Amount:
    """Convert mg/L of an ion with one atom of the element to mg/L as the element."""
    return mass_mg_per_l * (_mass_of(element) / molar_mass_g_per_mol)


def mg_per_l_as_basis_to_mg_per_l(
    mass_mg_per_l_as_basis: Amount, basis: str, molar_mass_g_per_mol: float, charge: float
) -> Amount:
    """Convert mg/L on a reporting basis (CaCO3, N, P, S) to mg/L of the ion itself.

    Raises
    ------
    WaterError
        The basis is unknown.
    """
    if basis == "CaCO3":
        return mg_per_l_as_caco3_to_mg_per_l(mass_mg_per_l_as_basis, molar_mass_g_per_mol, charge)
    if basis in ("N", "P", "S"):
        return mg_per_l_as_element_to_mg_per_l(mass_mg_per_l_as_basis, basis, molar_mass_g_per_mol)
    raise WaterError(f"unknown basis {basis!r}: use CaCO3, N, P or S")


def kg_cao_to_kg_hydrated_lime(mass_kg_as_cao: Amount) -> Amount:
    """Convert lime as CaO to Ca(OH)2 by molar mass: CaO + H2O = Ca(OH)2 (stoichiometry)."""
    return mass_kg_as_cao * (molar_mass_g_per_mol("Ca(OH)2") / molar_mass_g_per_mol("CaO"))


def kg_hydrated_lime_to_kg_cao(mass_kg_hydrated_lime: Amount) -> Amount:
    """Convert Ca(OH)2 to the CaO that it holds (stoichiometry)."""
    return mass_kg_hydrated_lime * (molar_mass_g_per_mol("CaO") / molar_mass_g_per_mol("Ca(OH)2"))


def short_ton_to_tonne(mass_short_ton: Amount) -> Amount:
    """Convert short tons of 2000 lb to tonnes of 1000 kg.

    Examples
    --------
    >>> round(short_ton_to_tonne(1.0), 4)
    0.9072
    """
    return mass_short_ton * (POUNDS_PER_SHORT_TON * KG_PER_POUND / KG_PER_TONNE)


def price_per_short_ton_to_price_per_t(price_per_short_ton: Amount) -> Amount:
    """Convert a price per short ton to a price per tonne."""
    return price_per_short_ton / (POUNDS_PER_SHORT_TON * KG_PER_POUND / KG_PER_TONNE)


def price_per_lb_to_price_per_t(price_per_lb: Amount) -> Amount:
    """Convert a price per pound to a price per tonne."""
    return price_per_lb / (KG_PER_POUND / KG_PER_TONNE)


def degf_to_degc(temperature_degf: Amount) -> Amount:
    """Convert degrees Fahrenheit to degrees Celsius.

    Examples
    --------
    >>> degf_to_degc(68.0)
    20.0
    """
    return (temperature_degf - 32.0) / 1.8


def us_gallon_to_l(volume_us_gallon: Amount) -> Amount:
    """Convert US liquid gallons to litres."""
    return volume_us_gallon * L_PER_US_GALLON


def partial_pressure_atm_to_ppm(pressure_atm: Amount, air_pressure_atm: float = 1.0) -> Amount:
    """Convert a gas pressure over the water [atm] to ppm by volume in air of this pressure."""
    return pressure_atm * (PPM_PER_ATM / air_pressure_atm)


def ppm_to_partial_pressure_atm(gas_ppm: Amount, air_pressure_atm: float = 1.0) -> Amount:
    """Convert ppm by volume in air of this pressure to a partial pressure. [atm]"""
    return gas_ppm * (air_pressure_atm / PPM_PER_ATM)


def mg_per_l_to_kg_per_d(dose_mg_per_l: Amount, flow_m3_per_d: float) -> Amount:
    """Convert a concentration in a flow to a daily mass: mg/L equals g/m3."""
    return dose_mg_per_l * (flow_m3_per_d / 1000.0)


def kg_per_d_to_mg_per_l(mass_kg_per_d: Amount, flow_m3_per_d: float) -> Amount:
    """Convert a daily mass in a flow to a concentration: mg/L equals g/m3."""
    return mass_kg_per_d / (flow_m3_per_d / 1000.0)


def kg_pure_per_d_to_l_product_per_h(
    mass_kg_pure_per_d: Amount, strength_fraction: float, density_kg_per_l: float
) -> Amount:
    """Convert a daily mass of pure compound to litres per hour of the product as delivered."""
    return mass_kg_pure_per_d / (strength_fraction * density_kg_per_l * 24.0)


def meq_per_l_to_kg_naoh_per_m3(base_meq_per_l: Amount) -> Amount:
    """Convert base [meq/L] to kg of NaOH per m3 of water: one meq is 40 mg."""
    return base_meq_per_l * (molar_mass_g_per_mol("NaOH") / 1000.0)


def _mass_of(element: str) -> float:
    return molar_mass_g_per_mol(element)
