"""The burden of a water: its salts one by one, their sum, sulfide and hardness.

Owns what each number counts, so that a limit, a charge and a report mean the same.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from chemistry.formula import molar_mass_g_per_mol
from chemistry.system import System
from chemistry.units import MG_CACO3_PER_MEQ

FloatArray = NDArray[np.float64]

BURDENS = ("Na", "K", "Ca", "Mg", "Cl", "SO4", "TDS", "sulfide", "hardness")
"""Names of the burdens, in the order they are shown."""

_IONS = {"Na": "Na+", "K": "K+", "Ca": "Ca+2", "Mg": "Mg+2", "Cl": "Cl-", "SO4": "SO4-2"}
_MG_CACO3_PER_MOL_HARDNESS = 2.0 * 1000.0 * MG_CACO3_PER_MEQ


def burden_weights(system: System) -> dict[str, FloatArray]:
    """Mass of each burden per mole of component, (components,). [mg/mol]

    ``TDS`` holds the weights of every component but H+, whose count adds by sign (`water_burden`).
    """
    weights: dict[str, FloatArray] = {}
    for burden, component in _IONS.items():
        weights[burden] = _one(system, component, 1000.0 * molar_mass_g_per_mol(component))
    weights["TDS"] = np.array(
        [0.0 if c == "H+" else 1000.0 * molar_mass_g_per_mol(c) for c in system.components]
    )
    weights["sulfide"] = _one(system, "HS-", 1000.0 * molar_mass_g_per_mol("S"))
    weights["hardness"] = _one(system, "Ca+2", _MG_CACO3_PER_MOL_HARDNESS) + _one(
        system, "Mg+2", _MG_CACO3_PER_MOL_HARDNESS
    )
    return weights


def _one(system: System, component: str, value: float) -> FloatArray:
    return np.array([value if c == component else 0.0 for c in system.components])


def water_burden(concentrations_mol_per_l: FloatArray, system: System) -> dict[str, FloatArray]:
    """Burden of waters. [mg/L]

    Parameters
    ----------
    concentrations_mol_per_l : ndarray, shape (components,) or (states, components)
        Dissolved totals of the components (or plain totals for a water without solids), H+ being
        the signed proton count. [mol/L]
    system
        Names the components.

    Returns
    -------
    dict
        Burden name (`BURDENS`) to an array of the leading shape. [mg/L]

    Notes
    -----
    Hardness is calcium and magnesium as CaCO3, sulfide all HS-, H2S and dissolved sulfide complexes
    as S. TDS is the sum of ions counted by component: every component but H+ at the molar mass of
    its free ion, and the proton count as 1.008 mg per mmol where positive (free and bound acid)
    and as OH-, 17.007 mg per mmol, where negative. Carbonate therefore counts as CO3-2 plus the
    protons on it: bicarbonate weighs 61, and dissolved carbon dioxide 62 although it is no ion. Ion
    pairs and complexes count as the ions they are made of. Neutral acids and silica do not appear.
    """
    totals = np.asarray(concentrations_mol_per_l, dtype=float)
    found = {name: totals @ weight for name, weight in burden_weights(system).items()}
    if "H+" in system.index:
        protons = totals[..., system.index["H+"]]
        hydrogen = 1000.0 * molar_mass_g_per_mol("H+")
        hydroxide = 1000.0 * molar_mass_g_per_mol("OH-")
        found["TDS"] = found["TDS"] + np.where(
            protons > 0.0, hydrogen * protons, -hydroxide * protons
        )
    return {name: np.asarray(found[name], dtype=float) for name in BURDENS}
