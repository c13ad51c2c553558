"""A batch of waters being solved: totals, what is held fixed, and the iterate.

Owns the arrays and the first guess; `chemistry.kernel` evaluates them, the steps change them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.system import LN10, System

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

ABSENT_LN = -1.0e3  # log activity of a component that a water does not contain


@dataclass(slots=True)
class Batch:
    """Waters being solved: totals, what is held fixed, and the current iterate.

    ``surroundings`` is what the activity model sees of the species, ionic strength first;
    ``ph_ln`` is ln a(H+) where pH is held, else nan; ``co2_ln`` is ln a(CO3) + 2 ln a(H) where
    pCO2 is held, else nan; ``titrant`` is what is added to hold the pH, per mole, and ``pivot`` the
    component whose balance tells its dose.
    """

    totals: FloatArray
    ph_ln: FloatArray
    co2_ln: FloatArray
    titrant: FloatArray
    pivot: IntArray
    present: BoolArray
    ln_activity: FloatArray
    surroundings: FloatArray
    solids: FloatArray
    active: BoolArray
    converged: BoolArray

    def take(self, rows: IntArray | BoolArray) -> Batch:
        """Return the batch of some rows (copies)."""
        return Batch(*(getattr(self, f)[rows] for f in self.__slots__))

    def put(self, rows: IntArray | BoolArray, part: Batch) -> None:
        """Write the iterate of a part back into these rows."""
        for name in ("pivot", "ln_activity", "surroundings", "solids", "active", "converged"):
            getattr(self, name)[rows] = getattr(part, name)


def new_batch(
    system: System, totals: FloatArray, ph: FloatArray, ln_co2: FloatArray, titrant: FloatArray
) -> Batch:
    """Set up a batch: which components are present and a first guess of their activities."""
    n = totals.shape[0]
    proton = system.index.get("H+", -1)
    present = totals != 0.0
    ph_ln = -LN10 * ph
    held = ~np.isnan(ph_ln)
    present |= held[:, None] & (titrant != 0.0)
    if proton >= 0:
        present[:, proton] = True
    if "CO3-2" in system.index:
        present[:, system.index["CO3-2"]] |= ~np.isnan(ln_co2)
    guess = np.log(np.maximum(np.abs(totals), 1e-12)) - 1.0
    guess = np.where(present, guess, ABSENT_LN)
    if proton >= 0:
        proton_total = totals[:, proton]
        acid = np.log(np.maximum(proton_total, 1e-7))
        base = -14.0 * LN10 - np.log(np.maximum(-proton_total, 1e-7))
        guess[:, proton] = np.where(held, ph_ln, np.where(proton_total > 0, acid, base))
    strength = np.clip(0.5 * np.abs(totals) @ system.component_charges**2, 1e-7, 1.0)
    p = len(system.solids)
    return Batch(
        totals=totals, ph_ln=ph_ln, co2_ln=ln_co2, titrant=titrant,
        pivot=pivots(system, titrant, ~np.isnan(ln_co2)), present=present,
        ln_activity=guess, surroundings=_first_surroundings(system, totals, strength),
        solids=np.zeros((n, p)),
        active=np.zeros((n, p), dtype=bool), converged=np.zeros(n, dtype=bool),
    )  # fmt: skip


def _first_surroundings(
    system: System, totals: FloatArray, ionic_strength: FloatArray
) -> FloatArray:
    """A guess: every component a free ion, the ionic strength bounded."""
    free = np.zeros((totals.shape[0], len(system.species_names)))
    free[:, : totals.shape[1]] = np.abs(totals)
    surroundings = free @ system.activity_model.functionals
    surroundings = np.minimum(surroundings, 1.0)
    surroundings[:, 0] = ionic_strength
    return surroundings


def pivots(system: System, titrant: FloatArray, holds_co2: BoolArray) -> IntArray:
    """Component whose balance tells the dose of the titrant: H+, else what moves the pH most.

    Where pCO2 is held the carbonate balance is open, so the carbonate of the titrant counts as the
    protons that it takes up. A titrant that cannot move the pH gets -1.
    """
    carried = titrant.copy()
    proton, carbonate = system.index.get("H+", -1), system.index.get("CO3-2", -1)
    if proton < 0:
        return np.full(titrant.shape[0], -1, dtype=np.int64)
    if carbonate >= 0:
        carried[holds_co2, proton] -= 2.0 * carried[holds_co2, carbonate]
        carried[holds_co2, carbonate] = 0.0
    moved = np.abs(carried * proton_coupling(system))
    pivot = np.where(moved.max(axis=1) > 0.0, np.argmax(moved, axis=1), -1)
    return np.asarray(np.where(carried[:, proton] != 0.0, proton, pivot), dtype=np.int64)


def proton_coupling(system: System) -> FloatArray:
    """Protons in the species that each component forms with protons alone, (components,).

    Positive for bases (carbonate: HCO3-, CO2), negative for acids (ferric iron: its hydroxides).
    """
    formation, proton = system.formation, system.index["H+"]
    partners = np.delete(formation, proton, axis=1) != 0.0
    alone = (partners.sum(axis=1) == 1) & (formation[:, proton] != 0.0)
    return np.asarray((formation[alone] > 0.0).T @ formation[alone, proton], dtype=float)
