"""Exact derivatives of equilibrium states by the implicit function theorem.

The bordered matrix of the last Newton step is solved once more for the change of log activities,
amounts of solids and ionic strength with the totals.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from chemistry.active_set import slots_of
from chemistry.batch import BoolArray, FloatArray, IntArray
from chemistry.linear import equilibrate_matrix, solve_batch
from chemistry.newton import Linearised, assemble, linearise
from chemistry.system import LN10

if TYPE_CHECKING:
    from chemistry.state import EquilibriumState


@dataclass(frozen=True, eq=False)
class Sensitivity:
    """Derivatives of a batch of states.

    ``dissolved`` (n, components, k), ``ph`` (n, k), ``solids`` (n, solids, k), ``titrant`` (n, k):
    change per mol/L of each of the k directions in which the totals move; ``titrant`` is the amount
    that holding the pH takes. ``ln_activity`` (n, k, components) is the change of log activities.
    """

    dissolved: FloatArray
    ph: FloatArray
    solids: FloatArray
    titrant: FloatArray
    ln_activity: FloatArray


def sensitivity_of(state: EquilibriumState, directions: FloatArray) -> Sensitivity:
    """Derivatives along directions (k, components) or (n, k, components) in the totals.

    Notes
    -----
    A held pH or pCO2 replaces balances by conditions at rest, as in the Newton step; the
    derivative of the dissolved total of a component is that of the sum over its species.
    """
    n, count = state.totals.shape
    ways = np.broadcast_to(directions, (n, *np.shape(directions)[-2:]))
    kernel, batch = state.kernel, state.batch
    slots, used = slots_of(state.active)
    lin = linearise(kernel, batch, slots, used)
    bordered = assemble(kernel, batch, lin, used)
    scaled, row, column = equilibrate_matrix(bordered.matrix)
    rhs = np.zeros((n, scaled.shape[1], ways.shape[1]))
    for j in range(ways.shape[1]):
        rhs[:, :count, j] = _at_rest(state, ways[:, j])
    answer = solve_batch(scaled, rhs / row[:, :, None]) / column[:, :, None]
    return _derivatives(state, ways, answer, lin, slots, used)


def _at_rest(state: EquilibriumState, way: FloatArray) -> FloatArray:
    """Right-hand side of the balances for one direction, (n, components)."""
    batch, kernel = state.batch, state.kernel
    rhs = way.copy()
    kernel.hold(batch, np.zeros((*rhs.shape, rhs.shape[1])), rhs)
    held = np.flatnonzero(~np.isnan(batch.ph_ln))
    rhs[held, batch.pivot[held]] = 0.0
    if kernel.carbonate >= 0:
        rhs[~np.isnan(batch.co2_ln), kernel.carbonate] = 0.0
    rhs[~batch.present] = 0.0
    return rhs


def _derivatives(
    state: EquilibriumState, ways: FloatArray, answer: FloatArray, lin: Linearised,
    slots: IntArray, used: BoolArray,
) -> Sensitivity:  # fmt: skip
    kernel = state.kernel
    count = state.totals.shape[1]
    dl, dx = answer[:, :count], answer[:, count:]
    d_strength = np.einsum("nc,nck->nk", lin.to_strength, dl) / lin.denominator[:, None]
    _, slope = kernel.model.screening(state.ionic_strength)
    n, k = d_strength.shape
    solids = np.zeros((n, state.solids_mol_per_l.shape[1], k))
    np.put_along_axis(solids, slots[:, :, None], np.where(used[:, :, None], dx, 0.0), axis=1)
    dissolved, titrant = np.empty((n, count, k)), np.empty((n, k))
    for j in range(k):
        dm = dl[:, :, j] @ kernel.formation_t
        dm += (slope * d_strength[:, j])[:, None] * kernel.z2
        dissolved[:, :, j] = (lin.m * dm) @ kernel.formation
        total = dissolved[:, :, j] + solids[:, :, j] @ kernel.solid_formation
        titrant[:, j], _ = kernel.doses(state.batch, total - ways[:, j])
    ph = -dl[:, kernel.proton] / LN10 if kernel.proton >= 0 else np.full((n, k), np.nan)
    return Sensitivity(dissolved, ph, solids, titrant, np.swapaxes(dl, 1, 2))
