"""Exact derivatives of equilibrium states by the implicit function theorem.

The bordered matrix of the last Newton step is solved once more for the change of log activities,
amounts of solids and ionic strength with the totals.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from chemistry.batch import Batch, BoolArray, FloatArray, IntArray, new_batch
from chemistry.equilibrium import solve_warm
from chemistry.kernel import Kernel
from chemistry.linear import equilibrate_matrix, solve_batch
from chemistry.linearised import Border, Linearised, assemble, linearise
from chemistry.system import LN10

if TYPE_CHECKING:
    from chemistry.state import EquilibriumState

TRACE_MOL_PER_L = 1e-20  # of a component that the water lacks and a direction adds


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
    derivative of the dissolved total of a component is that of the sum over its species. Along a
    component that a water lacks it is the derivative from above, taken at a trace of it.
    """
    n, count = state.totals.shape
    ways = np.broadcast_to(directions, (n, *np.shape(directions)[-2:]))
    kernel, batch = state.kernel, _with_traces(state, ways)
    border = Border.of(kernel, batch)
    slots, used = border.slots, border.used
    columns = kernel.model.leading(batch.surroundings, least=0.0)
    lin = linearise(kernel, batch, border, columns=columns)
    bordered = assemble(kernel, batch, lin, border)
    scaled, row, column = equilibrate_matrix(bordered.matrix)
    rhs = np.zeros((n, scaled.shape[1], ways.shape[1]))
    for j in range(ways.shape[1]):
        rhs[:, :count, j] = _at_rest(kernel, batch, ways[:, j])
    answer = solve_batch(scaled, rhs / row[:, :, None]) / column[:, :, None]
    return _derivatives(kernel, batch, Solved(ways, answer, lin, slots, used))


def _with_traces(state: EquilibriumState, ways: FloatArray) -> Batch:
    """The waters of a state, with a trace of every component that they lack and a way adds."""
    batch = state.batch
    added = ~batch.present & (ways != 0.0).any(axis=1)
    rows = np.flatnonzero(added.any(axis=1))
    if rows.size == 0:
        return batch
    part = batch.take(rows)
    totals = np.where(added[rows], TRACE_MOL_PER_L, part.totals)
    traced = new_batch(state.system, totals, -part.ph_ln / LN10, part.co2_ln, part.titrant)
    traced.ln_activity = np.where(part.present, part.ln_activity, traced.ln_activity)
    traced.surroundings, traced.solids = part.surroundings, part.solids
    traced.active = part.active
    solve_warm(state.kernel, traced)
    whole = batch.take(np.arange(batch.totals.shape[0]))
    whole.put(rows, traced)
    whole.totals[rows], whole.present[rows] = traced.totals, traced.present
    return whole


def _at_rest(kernel: Kernel, batch: Batch, way: FloatArray) -> FloatArray:
    """Right-hand side of the balances for one direction, (n, components)."""
    rhs = way.copy()
    kernel.hold(batch, np.zeros((*rhs.shape, rhs.shape[1])), rhs)
    held = np.flatnonzero(~np.isnan(batch.ph_ln))
    rhs[held, batch.pivot[held]] = 0.0
    if kernel.carbonate >= 0:
        rhs[~np.isnan(batch.co2_ln), kernel.carbonate] = 0.0
    rhs[~batch.present] = 0.0
    return rhs


@dataclass(frozen=True, slots=True)
class Solved:
    """Ways (n, k, components), the bordered system's answers (n, size, k), and its parts."""

    ways: FloatArray
    answer: FloatArray
    lin: Linearised
    slots: IntArray
    used: BoolArray


def _derivatives(kernel: Kernel, batch: Batch, solved: Solved) -> Sensitivity:
    lin, ways, slots = solved.lin, solved.ways, solved.slots
    n, k, count = ways.shape
    dl, dx = solved.answer[:, :count], solved.answer[:, count:]
    followed = lin.follow @ dl  # (n, columns, k)
    slope = kernel.model.offset_slope(batch.surroundings, lin.columns)
    solids = np.zeros((n, batch.solids.shape[1], k))
    dx = np.where(solved.used[:, :, None], dx, 0.0)
    np.put_along_axis(solids, slots[:, :, None], dx, axis=1)
    dissolved, titrant = np.empty((n, count, k)), np.empty((n, k))
    for j in range(k):
        dm = dl[:, :, j] @ kernel.formation_t
        dm += np.einsum("nsy,ny->ns", slope, followed[:, :, j])
        dissolved[:, :, j] = (lin.m * dm) @ kernel.formation
        total = dissolved[:, :, j] + solids[:, :, j] @ kernel.solid_formation
        titrant[:, j], _ = kernel.doses(batch, total - ways[:, j])
    ph = -dl[:, kernel.proton] / LN10 if kernel.proton >= 0 else np.full((n, k), np.nan)
    return Sensitivity(dissolved, ph, solids, titrant, np.swapaxes(dl, 1, 2))
