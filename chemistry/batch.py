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

    ``ph_ln`` is ln a(H+) where pH is held, else nan; ``co2_ln`` is ln a(CO3) + 2 ln a(H) where
    pCO2 is held, else nan; ``titrant`` is what is added to hold the pH, per mole.
    """

    totals: FloatArray
    ph_ln: FloatArray
    co2_ln: FloatArray
    titrant: FloatArray
    present: BoolArray
    ln_activity: FloatArray
    ionic_strength: FloatArray
    solids: FloatArray
    active: BoolArray
    converged: BoolArray

    def take(self, rows: IntArray | BoolArray) -> Batch:
        """Return the batch of some rows (copies)."""
        return Batch(*(getattr(self, f)[rows] for f in self.__slots__))

    def put(self, rows: IntArray | BoolArray, part: Batch) -> None:
        """Write the iterate of a part back into these rows."""
        for name in ("ln_activity", "ionic_strength", "solids", "active", "converged"):
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
        totals=totals, ph_ln=ph_ln, co2_ln=ln_co2, titrant=titrant, present=present,
        ln_activity=guess, ionic_strength=strength, solids=np.zeros((n, p)),
        active=np.zeros((n, p), dtype=bool), converged=np.zeros(n, dtype=bool),
    )  # fmt: skip
