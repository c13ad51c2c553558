"""The certificate of equilibrium states, worked out again from reactions and log activities."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from chemistry import EquilibriumState, System
from chemistry.formula import charge_of
from tests.chemistry.oracle_activity import WATER_MOL_PER_KG, Coefficients

FloatArray = NDArray[np.float64]

LN10 = float(np.log(10.0))
A_25_DEGC = 0.509


@dataclass(frozen=True)
class Certificate:
    """Worst errors of each water, (n,)."""

    mass_balance: FloatArray
    mass_action: FloatArray
    ionic_strength: FloatArray
    supersaturation: FloatArray
    presence: FloatArray
    least_amount: FloatArray

    def worst(self) -> dict[str, float]:
        """The worst water under each heading."""
        found = {name: float(getattr(self, name).max()) for name in self.__dataclass_fields__}
        return found | {"least_amount": float(self.least_amount.min())}


def certify(state: EquilibriumState) -> Certificate:
    """Check every reaction, balance and solid of a batch of states."""
    system = state.system
    column = {c: i for i, c in enumerate(system.components)}

    def table(items) -> FloatArray:
        rows = np.zeros((len(items), len(column)))
        for i, item in enumerate(items):
            for c, count in item.stoichiometry.items():
                rows[i, column[c]] = count
        return rows

    formed, solid = table(system.species), table(system.solids)
    stoichiometry = np.vstack([np.eye(len(column)), formed])
    charges = np.array([charge_of(c) for c in column] + [s.charge for s in system.species], float)
    ln_k = LN10 * np.array([0.0] * len(column) + [s.log10_k for s in system.species])
    m, amounts = state.species_mol_per_l, state.solids_mol_per_l
    there = state.totals != 0.0
    if "H+" in column:
        there[:, column["H+"]] = True
    whole = (~there).astype(float) @ (stoichiometry != 0.0).T == 0.0
    expected = state.log_activity @ stoichiometry.T + ln_k - ln_gamma(state, charges)
    ln_aw = ln_water(state, charges)[:, None]
    expected += ln_aw * np.array([0.0] * len(column) + [s.water for s in system.species])
    known = whole & (m > 1e-280)
    wrong = np.where(known, np.abs(np.log(np.maximum(m, 1e-300)) - expected), 0.0)
    sums = np.where(whole, m, 0.0) @ stoichiometry + amounts @ solid
    scale = np.where(whole, m, 0.0) @ np.abs(stoichiometry) + amounts @ np.abs(solid)
    miss = np.where(there, np.abs(sums - state.totals) / np.maximum(scale, 1e-300), 0.0)
    strength = 0.5 * np.where(whole, m, 0.0) @ charges**2
    log10_ks = np.array([s.log10_k for s in system.solids])
    si = state.log_activity @ solid.T / LN10 + log10_ks
    si += ln_aw / LN10 * np.array([s.water for s in system.solids])
    si = np.where((~there).astype(float) @ (solid != 0.0).T > 0.0, -np.inf, si)
    present = amounts > 0.0
    return Certificate(
        mass_balance=miss.max(axis=1),
        mass_action=wrong.max(axis=1),
        ionic_strength=np.abs(strength / np.maximum(state.ionic_strength, 1e-300) - 1.0),
        supersaturation=np.where(present, 0.0, np.maximum(si, 0.0)).max(axis=1, initial=0.0),
        presence=np.abs(np.where(present, si, 0.0)).max(axis=1, initial=0.0),
        least_amount=amounts.min(axis=1, initial=0.0),
    )


def ln_gamma(state: EquilibriumState, charges: FloatArray) -> FloatArray:
    """Natural log activity coefficients at 25 C, (n, species).

    By specific ion interaction, or by Davies frozen above I = 0.5.
    """
    if state.system.activity == "ideal":
        return np.zeros((state.totals.shape[0], charges.size))
    assert state.system.temperature_degc == 25.0
    a_ln, squares = A_25_DEGC * LN10, charges**2
    if state.system.activity == "sit":
        m = state.species_mol_per_l
        root = np.sqrt(0.5 * m @ squares)
        term = root / (1.0 + 1.5 * root)
        return m @ interactions_of(state.system) - a_ln * term[:, None] * squares
    held = np.minimum(state.ionic_strength, 0.5)
    term = np.sqrt(held) / (1.0 + np.sqrt(held)) - 0.3 * held
    return -a_ln * term[:, None] * squares


def ln_water(state: EquilibriumState, charges: FloatArray) -> FloatArray:
    """Natural log activity of water at 25 C, (n,): by Gibbs-Duhem with interactions, else 0."""
    if state.system.activity != "sit":
        return np.zeros(state.totals.shape[0])
    m = state.species_mol_per_l
    x = 1.5 * np.sqrt(0.5 * m @ charges**2)
    screening = 2.0 * A_25_DEGC * LN10 / 1.5**3 * (1.0 + x - 2.0 * np.log1p(x) - 1.0 / (1.0 + x))
    pairs = 0.5 * np.einsum("ni,ni->n", m @ interactions_of(state.system), m)
    return -(m.sum(axis=1) - screening + pairs) / float(WATER_MOL_PER_KG)


@cache
def interactions_of(system: System) -> FloatArray:
    """Interaction coefficients of all species in natural-log units, as the oracle reads them."""
    names = system.species_names
    charges = [charge_of(c) for c in system.components] + [s.charge for s in system.species]
    return np.array(Coefficients(system, names, charges, []).pairs, dtype=float)
