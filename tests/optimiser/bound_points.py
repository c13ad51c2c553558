"""Verified points as values of a cell's relaxation, for the tests of containment."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from optimiser.bound_cells import FREE, HELD, RESTS, Cell, CellModel, Corner
from optimiser.bound_model import Relaxation
from optimiser.bound_rows import StateRows
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.linear_model import Expression, Model
from optimiser.points import CLOSED_FORMED, CLOSED_HELD, VENTED_FORMED, VENTED_HELD, Block
from optimiser.recipes import make_recipe
from optimiser.solver import SolverPort

FloatArray = NDArray[np.float64]


def place_of(
    seen: Evaluation, point: int, corner: Corner, paced: tuple[int, ...]
) -> tuple[Block, int]:
    """Block and position of the state of a corner.

    An end is solved only where it differs: without scale the formed state stands for the held one,
    and without venting the closed one for the vented.
    """
    allowed = [CLOSED_FORMED]
    allowed += [CLOSED_HELD] if corner.held_back else []
    allowed += [VENTED_FORMED] if corner.vented else []
    allowed += [VENTED_HELD] if corner.held_back and corner.vented else []
    places = {}
    for block in seen.blocks:
        for k, row in enumerate(block.rows):
            signs = tuple(int(np.sign(seen.rows.factor[row, r] - 1.0)) for r in paced)
            same = int(np.sign(seen.rows.shift[row])) == corner.shift and signs == corner.signs
            if seen.rows.point[row] == point and same and block.end in allowed:
                places[block.end] = (block, k)
    if corner.vented and VENTED_FORMED in places:
        places.pop(CLOSED_HELD, None)
    return places[max(places)]


def cell_around(
    evaluator: Evaluator, seen: Evaluation, point: int, corners: tuple[Corner, ...], *,
    ph_width: float, dose_ratio: float,
) -> Cell:  # fmt: skip
    """A cell that holds a point somewhere inside."""
    plant, points = evaluator.plant, seen.points
    used = points.doses[point] > 0.0
    own = int(points.controller[point])
    if own >= 0:
        used[own] = True
    recipe = make_recipe(plant, [int(i) for i in np.flatnonzero(used)])
    assert (recipe.controller if recipe.controller is not None else -1) == own
    nominal = Corner(0, (0,) * len(recipe.paced))
    block, k = place_of(seen, point, nominal, recipe.paced)
    mode = FREE if own < 0 else (HELD if block.held[k] else RESTS)
    ph = float(points.ph[point]) if mode == HELD else float(block.state.ph[k])
    chosen = [nominal]
    for corner in corners:
        at, j = place_of(seen, point, corner, recipe.paced)
        rests = mode == HELD and not bool(at.held[j])
        chosen.append(replace(corner, rests=rests))
    fed = seen.priced.doses[point]
    return Cell(
        recipe, mode, ph - 0.4 * ph_width, ph + 0.6 * ph_width, fed / dose_ratio, fed * dose_ratio,
        tuple(chosen),
    )  # fmt: skip


def state_values(rows: StateRows, block: Block, k: int) -> dict[str, float]:
    """Values of a state's variables at a verified state."""
    state = block.state
    activity = np.maximum(state.log_activity[k], -250.0)
    surroundings = state.surroundings[[k]]
    values = {rows.l_key(int(c)): float(activity[c]) for c in np.flatnonzero(rows.ranges.present)}
    screen, _ = rows.system.activity_model.screening(surroundings[:, 0])
    values[rows.d_key] = float(screen[0])
    values[rows.i_key] = float(surroundings[0, 0]) / rows.ranges.strength_high
    m = state.species_mol_per_l[k]
    for s in np.flatnonzero(rows.kept):
        values[rows.m_key(int(s))] = float(m[s] / rows.most[s])
    n = state.solids_mol_per_l[k]
    for p in np.flatnonzero(n > 0.0):
        assert rows.ranges.solids[p], f"{rows.system.solid_names[p]} is there and was ruled out"
    for p in np.flatnonzero(rows.ranges.solids):
        values[rows.n_key(int(p))] = float(n[p] / rows.ranges.solid_high[p])
        values[rows.y_key(int(p))] = float(n[p] > 0.0 or rows.ranges.must[p])
    return values


def point_values(
    relaxation: Relaxation, made: CellModel, seen: Evaluation, point: int
) -> dict[str, float]:
    """Values of all doses and states of a relaxation at a verified point."""
    cell, doses = made.cell, seen.priced.doses[point]
    values = {
        relaxation.dose_key(r): float(doses[r] / cell.dose_high[r]) for r in cell.recipe.reagents
    }
    for corner in cell.corners:
        block, k = place_of(seen, point, corner, cell.recipe.paced)
        values |= state_values(made.rows[corner.tag], block, k)
        if corner.vented:
            waters = block.state.totals[k]
            vent = relaxation.vent(cell, relaxation._signs(cell, corner))
            carbonate = relaxation.plant.system.index["CO3-2"]
            values[f"kept @{corner.tag}"] = float(waters[carbonate]) / max(vent.kept_high, 1e-9)
        key = f"control @{corner.tag}"
        if key in made.model.variables:
            values[key] = float(block.dose[k]) / max(made.control[corner.tag][1], 1e-6)
    return values


def broken(model: Model, values: dict[str, float], tolerance: float) -> list[str]:
    """Ranges and rows among known variables that values miss by more than a tolerance."""
    found = []
    for key, x in values.items():
        variable = model.variables[key]
        if not variable.low - tolerance <= x <= variable.high + tolerance:
            found.append(f"{key} = {x:.9g} outside {variable.low:.9g} to {variable.high:.9g}")
    for row in model.rows.values():
        if row.terms and row.terms.keys() <= values.keys() and row.excess(values) > tolerance:
            side = Expression(row.terms).value(values)
            found.append(f"{row.key}: {side:.9g} {row.sense.value} {row.rhs:.9g}")
    return found


def least_cost_at(model: Model, values: dict[str, float], solver: SolverPort) -> float:
    """Cost that the relaxation gives a point: purchases and class free, the rest as it is."""
    fixed = Model(model.name)
    fixed.rows, fixed.costs = dict(model.rows), dict(model.costs)
    for key, variable in model.variables.items():
        if key in values:
            x = float(np.clip(values[key], variable.low, variable.high))
            fixed.variables[key] = replace(variable, low=x, high=x)
        else:
            fixed.variables[key] = variable
    report = solver.solve(fixed)
    assert report.termination.has_solution, "no purchase or class fits the point"
    return report.objective
