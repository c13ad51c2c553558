"""Titration: the dose of one reagent that brings a water to a pH, and derivatives at that pH.

Each step holds the pH (a convex problem that always has a solution) and asks how many protons
that takes; the dose follows from the proton balance, so the search is on a nearly linear scale.
The result is a plain state of the dosed water, certified on its true totals.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.state import EquilibriumState, Sensitivity, equilibrate
from chemistry.system import System

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

DOSE_ROUNDS = 25
LARGEST_DOSE_MOL_PER_L = 20.0
BALANCE_TOLERANCE = 1e-12


@dataclass(frozen=True, eq=False)
class Titration:
    """Doses (n,) [mol/L] and the states of the dosed waters; ``reached`` tells which hold the pH.

    A dose is 0 and ``reached`` False where no positive dose brings the water to the pH.
    """

    dose: FloatArray
    state: EquilibriumState
    reached: BoolArray


def titrate(
    system: System,
    totals: FloatArray,
    ph: FloatArray,
    reagent: FloatArray,
    *,
    start: EquilibriumState | None = None,
) -> Titration:
    """Find the dose of a reagent that brings each water to its pH.

    Parameters
    ----------
    totals : ndarray, shape (n, components)
        Totals before the dose. [mol/L]
    ph : ndarray, shape (n,)
    reagent : ndarray, shape (components,) or (n, components)
        Moles of each component per mole of reagent.
    start
        States of neighbouring dosed waters at the same pH (n of them).

    Notes
    -----
    With ``P(d)`` the proton total that the pH needs when the other components carry the dose, the
    dose solves ``P(d) = T_H + d v_H``. Newton steps use the exact derivative of ``P``.
    """
    n = totals.shape[0]
    vectors = np.broadcast_to(reagent, (n, system_size := len(system.components)))
    proton = system.index["H+"]
    others = vectors.copy()
    others[:, proton] = 0.0
    per_mole = vectors[:, proton]
    dose = np.zeros(n)
    if start is not None:
        dose = _first_dose(totals, vectors, start)
    reached = np.zeros(n, dtype=bool)
    alive = np.ones(n, dtype=bool)
    log_activity = np.zeros((n, system_size))
    strength = np.zeros(n)
    solids = np.zeros((n, len(system.solids)))
    active = np.zeros((n, len(system.solids)), dtype=bool)
    low, high = np.zeros(n), np.full(n, np.inf)
    warm = start
    rows = np.arange(n)
    for _ in range(DOSE_ROUNDS):
        state = equilibrate(
            system, totals[rows] + dose[rows, None] * others[rows], ph[rows],
            on_failure="flag", start=warm,
        )  # fmt: skip
        log_activity[rows], strength[rows] = state.log_activity, state.ionic_strength
        solids[rows], active[rows] = state.solids_mol_per_l, state.active
        miss = state.totals[:, proton] - totals[rows, proton] - dose[rows] * per_mole[rows]
        _, scale = state.kernel.amounts(state.species_mol_per_l, state.solids_mol_per_l)
        near = np.abs(miss) <= BALANCE_TOLERANCE * scale[:, proton]
        sens = state.sensitivity(others[rows][:, None, :])
        slope = sens.titrant[:, 0] - per_mole[rows]
        low[rows] = np.where(miss < 0, np.maximum(low[rows], dose[rows]), low[rows])
        high[rows] = np.where(miss > 0, np.minimum(high[rows], dose[rows]), high[rows])
        step = np.where(np.abs(slope) > 1e-9, -miss / np.where(slope == 0, 1.0, slope), np.inf)
        new = dose[rows] + step
        new = _inside(new, dose[rows], low[rows], high[rows], miss)
        stuck = (new <= 0.0) & (miss >= 0.0) | (new > LARGEST_DOSE_MOL_PER_L) | ~state.converged
        same = np.abs(new - dose[rows]) <= 1e-15 * np.maximum(np.abs(new), 1e-9)
        reached[rows] = (near | (same & (np.abs(miss) < 1e-9 * scale[:, proton]))) & ~stuck
        alive[rows] = ~reached[rows] & ~stuck
        dose[rows] = np.where(alive[rows], new, dose[rows])
        keep = alive[rows]
        rows = rows[keep]
        if rows.size == 0:
            break
        warm = state.rows(keep)
    guess = _StartValues(log_activity, strength, solids, active, totals)
    dose = np.where(reached, dose, 0.0)
    final = equilibrate(
        system, totals + dose[:, None] * vectors, on_failure="flag", start=guess,  # type: ignore[arg-type]
    )  # fmt: skip
    return Titration(dose, final, reached & final.converged)


@dataclass(slots=True)
class _StartValues:
    """The part of a state that a warm start reads."""

    log_activity: FloatArray
    ionic_strength: FloatArray
    solids_mol_per_l: FloatArray
    active: BoolArray
    totals: FloatArray


def _first_dose(totals: FloatArray, vectors: FloatArray, start: EquilibriumState) -> FloatArray:
    """Dose that the neighbouring states carry, read off a component that nothing else adds."""
    gap = start.totals - totals
    weight = np.square(vectors)
    guess = (gap * vectors).sum(axis=1) / np.maximum(weight.sum(axis=1), 1e-300)
    return np.maximum(guess, 0.0)


def _inside(
    new: FloatArray, old: FloatArray, low: FloatArray, high: FloatArray, miss: FloatArray
) -> FloatArray:
    """Keep a Newton step inside the bracket, else halve it; grow at most tenfold a step."""
    ceiling = np.where(np.isfinite(high), high, 10.0 * old + 1e-2)
    outside = (new <= low) | (new >= ceiling)
    middle = np.where(np.isfinite(high), 0.5 * (low + high), ceiling)
    bisected = np.where(miss < 0, middle, 0.5 * (low + np.minimum(high, old)))
    keep_zero = (miss > 0) & (low == 0.0) & (old == 0.0)
    result = np.where(outside & (np.abs(new - old) > 0), bisected, new)
    return np.where(keep_zero, np.minimum(new, 0.0), result)


def at_held_ph(free: Sensitivity, titrant_column: int) -> tuple[Sensitivity, FloatArray]:
    """Turn derivatives of free states into derivatives with the pH held by a titrant.

    Parameters
    ----------
    free
        Sensitivity along k directions, one of which is the titrant.
    titrant_column
        Which of the k.

    Returns
    -------
    Sensitivity, ndarray (n, k)
        Derivatives at held pH along every direction, and the change of the titrant dose.

    Notes
    -----
    ``d pH = pH_t dt + pH_d dd = 0`` gives ``dd/dt = -pH_t / pH_d``.
    """
    by_dose = free.ph[:, titrant_column]
    safe = np.where(by_dose == 0.0, np.inf, by_dose)
    dose = -free.ph / safe[:, None]
    dose[:, titrant_column] = 0.0

    def held(array: FloatArray) -> FloatArray:
        column = array[:, :, titrant_column]
        return array + column[:, :, None] * dose[:, None, :]

    log_activity = (
        free.ln_activity + free.ln_activity[:, titrant_column][:, None, :] * dose[:, :, None]
    )
    return (
        Sensitivity(
            held(free.dissolved), np.zeros_like(free.ph), held(free.solids), dose, log_activity
        ),
        dose,
    )
