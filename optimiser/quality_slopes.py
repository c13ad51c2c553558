"""Slopes of predictions and checks with set point and paced doses, by exact derivatives.

Owns the chain rule from the equilibrium's derivatives to `quality.Judged`; values are made in
`optimiser.quality`.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.formula import molar_mass_g_per_mol
from chemistry.state import H2S_SPECIES
from optimiser.points import VENTED_FORMED, VENTED_HELD, Block, Points, Rows

if TYPE_CHECKING:
    from optimiser.quality import Judge, Judged

FloatArray = NDArray[np.float64]

SMALLEST_MG_PER_L = 1e-12
RULE = "rule"


def _directions(judge: Judge, points: Points, rows: Rows, block: Block) -> FloatArray:
    """Change of totals per mg/L of the controller and of every paced reagent."""
    plant = judge.plant
    n, count = block.rows.size, len(plant.names)
    ways = np.zeros((n, 1 + count, len(plant.system.components)))
    controller = points.controller[rows.point[block.rows]]
    ways[:, 0] = np.where(
        (controller >= 0)[:, None], plant.reacting[np.maximum(controller, 0)], 0.0
    )
    # reagents that a point does not dose are left at rest: their components may be absent
    dosed = points.doses[rows.point[block.rows]] > 0.0
    factor = rows.factor[block.rows] * dosed
    ways[:, 1:] = factor[:, :, None] * plant.reacting[None]
    if block.end in (VENTED_FORMED, VENTED_HELD):
        lost = block.lost_slope[None, :] * dosed
        ways[:, 1:] -= lost[:, :, None] * plant.co2
    return ways


def fill_slopes(
    judge: Judge, points: Points, rows: Rows, judged: Judged, total: FloatArray, held: FloatArray,
    share: FloatArray, share_by_mass: FloatArray,
) -> None:  # fmt: skip
    """Fill in the slopes of one block's checks, doses, solids and effluent, in place."""
    block = judged.block
    used = np.flatnonzero((points.doses > 0.0).any(axis=0))
    columns = np.concatenate([[0], 1 + used])
    ways = _directions(judge, points, rows, block)[:, columns]
    free = block.state.sensitivity(ways)
    controlled = block.held
    by_dose = np.where(np.abs(free.ph[:, 0]) < 1e-14, np.inf, free.ph[:, 0])
    dose = np.where(controlled[:, None], -free.ph / by_dose[:, None], 0.0)
    dose[:, 0] = np.where(controlled, 1.0 / by_dose, 0.0)

    def hold(array: FloatArray) -> FloatArray:
        """Slopes at the held pH: column 0 per unit of set point, others per mg/L."""
        first = array[:, :, 0]
        moved = array + first[:, :, None] * dose[:, None, :]
        moved[:, :, 0] = first * dose[:, None, 0]
        return moved

    liquid = hold(free.dissolved)
    solids = hold(free.solids)
    activity = hold(np.swapaxes(free.ln_activity, 1, 2))
    trim, effluent, trim_activity = _trim_slopes(judge, points, rows, block, liquid, activity)
    effluent = effluent + _surplus_slopes(judge, points, rows, block, dose)[:, :, columns]
    mass = np.einsum("p,npk->nk", judge.solid_mass, solids)
    held_slope = np.einsum("pm,npk->nmk", judge.solid_metal, solids)
    metal = judge.jar.slope(liquid, held_slope, judged.at_most)
    metal = metal + share[:, None, None] * held_slope
    metal += (held[:, :, None] * share_by_mass[:, None, None]) * mass[:, None, :]
    free_of_floor = (judged.residual + judged.carried) >= judged.floor
    metal = np.where(free_of_floor[:, :, None], metal, 0.0)
    slope = _check_slopes(judge, judged, total, metal, effluent, activity, trim_activity)
    slope[~block.reached] = 0.0
    judged.slope[:, :, columns] = slope
    judged.metal_slope[:, :, columns] = metal
    judged.dose_slope[:, columns] = dose
    judged.trim_slope[:, columns] = trim
    judged.solid_slope[:, :, columns] = solids
    judged.effluent_slope[:, :, columns] = effluent


def burden_charge(
    judge: Judge, judged: Judged, row: int, charges: Mapping[str, float]
) -> tuple[FloatArray, float]:
    """Charge per litre of a row's effluent, and its slope. [mg/L x currency per kg]"""
    slope = np.zeros(judged.effluent_slope.shape[2])
    value = 0.0
    for name, rate in charges.items():
        here = float(judged.burden[name][row])
        if here > 0.0:
            value += rate * here
            one = burden_slope(judge, name, judged, judged.effluent_slope)
            slope = slope + rate * one[row]
    return slope, value


def _surplus_slopes(
    judge: Judge, points: Points, rows: Rows, block: Block, dose: FloatArray
) -> FloatArray:
    """Change of what soluble reagents leave unreacted, (rows, components, 1 + reagents)."""
    plant = judge.plant
    n, count = block.rows.size, len(plant.names)
    slopes = np.zeros((n, len(plant.system.components), 1 + count))
    if not plant.surplus.any():
        return slopes
    point = rows.point[block.rows]
    paced = rows.factor[block.rows] * (points.doses[point] > 0.0)
    slopes[:, :, 1:] = plant.surplus.T[None] * paced[:, None, :]
    used = np.flatnonzero((points.doses > 0.0).any(axis=0))
    columns = np.concatenate([[0], 1 + used])
    own = plant.surplus[np.maximum(points.controller[point], 0)]
    own = np.where((points.controller[point] >= 0)[:, None], own, 0.0)
    slopes[:, :, columns] += own[:, :, None] * dose[:, None, :]
    return slopes


def _trim_slopes(
    judge: Judge, points: Points, rows: Rows, block: Block, liquid: FloatArray, activity: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    n, _, k = liquid.shape
    trim = np.zeros((n, k))
    effluent = liquid.copy()
    trim_activity = activity.copy()
    if block.trim_state is None or not block.trimmed.any():
        return trim, effluent, trim_activity
    some = block.trimmed
    vector = judge.plant.reacting[points.trim[rows.point[block.rows[some]]]]
    ways = np.concatenate([np.swapaxes(liquid[some], 1, 2), vector[:, None, :]], axis=1)
    free = block.trim_state.sensitivity(ways)
    last = np.where(np.abs(free.ph[:, -1]) < 1e-14, np.inf, free.ph[:, -1])
    trim[some] = -free.ph[:, :-1] / last[:, None]
    effluent[some] += vector[:, :, None] * trim[some][:, None, :]
    moved = np.swapaxes(free.ln_activity, 1, 2)
    trim_activity[some] = moved[:, :, :-1] + moved[:, :, -1:] * trim[some][:, None, :]
    return trim, effluent, trim_activity


def _check_slopes(
    judge: Judge, judged: Judged, total: FloatArray, metal: FloatArray, effluent: FloatArray,
    activity: FloatArray, trim_activity: FloatArray,
) -> FloatArray:  # fmt: skip
    gas = iter((activity, trim_activity))
    columns = []
    for number, check in enumerate(judge.checks):
        value = np.maximum(judged.value[:, number], SMALLEST_MG_PER_L)[:, None]
        if check.metals:
            columns.append(metal[:, list(check.metals)].sum(axis=1) / value)
        elif check.burden:
            columns.append(burden_slope(judge, check.burden, judged, effluent) / value)
        elif check.averaging == RULE:
            columns.append(_gas_slope(judge, next(gas)))
        else:
            columns.append(np.zeros((total.shape[0], effluent.shape[2])))
    if not columns:
        return np.zeros((total.shape[0], 0, effluent.shape[2]))
    return np.asarray(np.stack(columns, axis=1), dtype=float)


def burden_slope(judge: Judge, burden: str, judged: Judged, effluent: FloatArray) -> FloatArray:
    """Change of one burden with the discharged totals' changes, (rows, k). [mg/L]"""
    slope = np.einsum("c,nck->nk", judge.burden_weights[burden], effluent)
    if burden == "TDS":
        proton = judge.plant.system.index["H+"]
        acid = judged.block.effluent[:, proton] > 0.0
        hydrogen, hydroxide = (1000.0 * molar_mass_g_per_mol(f) for f in ("H+", "OH-"))
        weight = np.where(acid, hydrogen, -hydroxide)
        slope = slope + weight[:, None] * effluent[:, proton]
    return np.asarray(slope, dtype=float)


def _gas_slope(judge: Judge, activity: FloatArray) -> FloatArray:
    system = judge.plant.system
    if H2S_SPECIES not in system.species_names:
        return np.zeros((activity.shape[0], activity.shape[2]))
    k = system.species_names.index(H2S_SPECIES)
    return np.asarray(np.einsum("c,nck->nk", system.formation[k], activity), dtype=float)
