"""Gases over a water: Henry's constants of CO2 and H2S and their change with temperature.

Owns the two constants that the equilibrium needs; thresholds in air belong to the catalogs.
"""

from __future__ import annotations

from chemistry.system import GAS_CONSTANT_KJ_PER_MOL_K, LN10, REFERENCE_TEMPERATURE_K

CO2_SPECIES = "CO2(aq)"
H2S_SPECIES = "H2S(aq)"

# log10 K of CO2(g) = CO2(aq) at 25 C and its enthalpy, the slope of the published equation there.
# Source: Plummer & Busenberg 1982, Geochim. Cosmochim. Acta 46, 1011.
LOG10_HENRY_CO2 = -1.468
ENTHALPY_CO2_KJ_PER_MOL = -19.98
# H2S(g) = H2S(aq), from memory.
LOG10_HENRY_H2S = -0.99
ENTHALPY_H2S_KJ_PER_MOL = -18.0

_HENRY = {
    CO2_SPECIES: (LOG10_HENRY_CO2, ENTHALPY_CO2_KJ_PER_MOL),
    H2S_SPECIES: (LOG10_HENRY_H2S, ENTHALPY_H2S_KJ_PER_MOL),
}


def ln_henry(species: str, temperature_degc: float) -> float:
    """Natural log of Henry's constant of a dissolved gas by van 't Hoff. [mol/(kg atm)]

    Parameters
    ----------
    species
        ``CO2(aq)`` or ``H2S(aq)``.
    temperature_degc
        Temperature. [C]

    Raises
    ------
    KeyError
        Another species.

    Examples
    --------
    >>> round(ln_henry("CO2(aq)", 25.0) / LN10, 3), round(ln_henry("CO2(aq)", 10.0) / LN10, 3)
    (-1.468, -1.283)
    """
    log10_k, enthalpy = _HENRY[species]
    shift = 1.0 / (temperature_degc + 273.15) - 1.0 / REFERENCE_TEMPERATURE_K
    return LN10 * log10_k - enthalpy / GAS_CONSTANT_KJ_PER_MOL_K * shift


def ln_henry_slope(species: str, temperature_degc: float) -> float:
    """Change of `ln_henry` with temperature. [1/C]"""
    _, enthalpy = _HENRY[species]
    return enthalpy / (GAS_CONSTANT_KJ_PER_MOL_K * (temperature_degc + 273.15) ** 2)
