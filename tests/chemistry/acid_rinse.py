"""The system and the acid water that several tests of the equilibrium share."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import EquilibriumState, System

FloatArray = NDArray[np.float64]

COMPONENTS = (
    "H+", "Na+", "Ca+2", "Mg+2", "Cu+2", "Zn+2", "Pb+2", "Fe+3", "Cl-", "SO4-2", "CO3-2", "HS-",
)  # fmt: skip
SYSTEM = load_system(components=COMPONENTS, activity="davies")
IDEAL = load_system(components=COMPONENTS, activity="ideal")
PROTON = SYSTEM.index["H+"]

ACID = {
    "Na+": 1e-3, "Ca+2": 1e-3, "Cu+2": 8e-4, "Zn+2": 5e-4, "Pb+2": 1e-4, "Fe+3": 3e-4,
    "Cl-": 2e-3, "SO4-2": 6e-3, "H+": 7.3e-3,
}  # fmt: skip
LIME = {"Ca+2": 1.0, "H+": -2.0}


def vector(moles: dict[str, float], system: System = SYSTEM) -> FloatArray:
    return np.array([moles.get(c, 0.0) for c in system.components])


def assert_same(one: EquilibriumState, other: EquilibriumState, rtol: float = 1e-9) -> None:
    """Same pH, dissolved totals and solids."""
    np.testing.assert_allclose(one.ph, other.ph, atol=1e-9)
    np.testing.assert_allclose(
        one.dissolved_mol_per_l, other.dissolved_mol_per_l, rtol=rtol, atol=1e-15
    )
    np.testing.assert_allclose(one.solids_mol_per_l, other.solids_mol_per_l, rtol=rtol, atol=1e-12)
