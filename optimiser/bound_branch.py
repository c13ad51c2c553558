"""How a cell is split: a telling corner first, then the pH, a dose or a log activity in halves."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from optimiser.bound_cells import HELD, Cell, CellModel, Corner
from optimiser.bound_model import Relaxation
from optimiser.bound_vent import can_vent
from optimiser.points import CLOSED_HELD, VENTED_FORMED, VENTED_HELD, Points
from optimiser.quality import LN10
from optimiser.recipes import trim_for
from optimiser.solver import SolveReport

FloatArray = NDArray[np.float64]

MOST_CORNERS = 3
TELLING_RATIO = 1e-6
PH_STEP = 0.1  # a pH interval this wide counts as much as
SPENT_SHARE = 0.04  # this share of the plan's cost spent on a dose's range
WIDE_RATIO = 4.0


class Branching:
    """Chooses splits for one site."""

    def __init__(self, relaxation: Relaxation, plan_per_year: float) -> None:
        self.relaxation, self.plan = relaxation, plan_per_year

    def split(self, cell: Cell, made: CellModel, report: SolveReport | None) -> list[Cell]:
        """Cells that together hold every plan of a cell."""
        if report is not None and report.termination.has_solution:
            corner = self._telling_corner(cell, made, report)
            if corner is not None:
                held = replace(cell, corners=(*cell.corners, corner))
                rests = replace(cell, corners=(*cell.corners, replace(corner, rests=True)))
                return [held, rests]
        return self._halves(cell)

    def _halves(self, cell: Cell) -> list[Cell]:
        money = self.relaxation.money
        sizes = {-1: (cell.ph_high - cell.ph_low) / PH_STEP}
        for r in cell.recipe.paced:
            spent = money.least(r, float(cell.dose_high[r]))
            spent -= money.least(r, float(cell.dose_low[r]))
            sizes[r] = spent / self.plan / SPENT_SHARE
        axis = max(sizes, key=lambda k: sizes[k])
        if axis < 0:
            middle = 0.5 * (cell.ph_low + cell.ph_high)
            return [replace(cell, ph_high=middle), replace(cell, ph_low=middle)]
        below, above = cell.dose_high.copy(), cell.dose_low.copy()
        low, high = float(cell.dose_low[axis]), float(cell.dose_high[axis])
        middle = np.sqrt(low * high) if high > WIDE_RATIO * low else 0.5 * (low + high)
        below[axis] = above[axis] = middle
        return [replace(cell, dose_high=below), replace(cell, dose_low=above)]

    def _telling_corner(self, cell: Cell, made: CellModel, report: SolveReport) -> Corner | None:
        """The corner, not yet looked at, where the relaxed solution misses a limit by most."""
        if len(cell.corners) >= MOST_CORNERS or cell.mode != HELD:
            return None
        seen = self.relaxation.evaluator.evaluate(self.point(cell, made, report))
        worst, found = TELLING_RATIO, None
        known = {(c.shift, c.signs, c.held_back, c.vented) for c in cell.corners}
        vents = can_vent(self.relaxation.plant, cell.recipe)
        for part in seen.judged:
            block = part.block
            vented = block.end in (VENTED_FORMED, VENTED_HELD)
            held_back = block.end in (CLOSED_HELD, VENTED_HELD)
            if (vented and not vents) or not part.ratio.shape[1]:
                continue
            for k, row in enumerate(block.rows):
                factor = seen.rows.factor[row, list(cell.recipe.paced)]
                signs = tuple(int(s) for s in np.sign(factor - 1.0))
                key = int(np.sign(seen.rows.shift[row])), signs, held_back, vented
                ratio = float(part.ratio[k].max()) if block.reached[k] else -np.inf
                if key not in known and ratio > worst:
                    worst, found = ratio, Corner(key[0], key[1], held_back, vented=vented)
        return found

    def point(self, cell: Cell, made: CellModel, report: SolveReport) -> Points:
        """The operating point that a relaxed solution stands for."""
        plant = self.relaxation.plant
        doses = np.zeros((1, len(plant.names)))
        for r in cell.recipe.paced:
            doses[0, r] = self.relaxation.dose(cell, r).value(report.values)
        nominal = made.rows[cell.corners[0].tag]
        ph = -report.values[nominal.l_key(nominal.proton)] / LN10
        own = cell.recipe.controller
        trim = trim_for(self.relaxation.evaluator, ph)
        return Points(
            doses, np.array([-1 if own is None else own]), np.array([ph]), np.array([trim])
        )
