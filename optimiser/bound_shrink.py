"""Shrinking a cell: the ends of its variables, proven by linear models, become its new intervals.

Owns which variables are worth it and how their ends go back into the cell.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from optimiser.bound_cells import FREE, HELD, PH_SLACK, Cell, CellModel
from optimiser.bound_intervals import Ranges
from optimiser.bound_model import Relaxation
from optimiser.bound_rows import LOOSENED, StateRows
from optimiser.bound_tighten import Ends
from optimiser.quality import LN10

WORTH_A_MODEL = 1e-2  # share of a balance from which the free ion's activity is tightened
NARROW_LN = 0.02  # log activities within this are left alone
MARGIN = 1e-7


def shrink(relaxation: Relaxation, made: CellModel, most_cost: float) -> Cell | None:
    """The cell cut to what plans that cost no more than ``most_cost`` can use; None if nothing."""
    ends = Ends(made.model, most_cost)
    cell = made.cell
    low, high = cell.dose_low.copy(), cell.dose_high.copy()
    for r in cell.recipe.reagents:
        least, most = ends.ends(relaxation.dose_key(r))
        if least > most + MARGIN:
            return None
        low[r] = max(low[r], (least - MARGIN) * cell.dose_high[r])
        high[r] = min(high[r], (most + MARGIN) * cell.dose_high[r])
    control = dict(made.control)
    ranges: dict[str, Ranges] = {}
    for tag, rows in made.rows.items():
        found = _of_state(ends, rows)
        if found is None:
            return None
        ranges[tag] = found
        key = f"control @{tag}"
        if key in made.model.variables:
            size = max(control[tag][1], 1e-6)
            least, most = ends.ends(key)
            if least > most + MARGIN:
                return None
            control[tag] = (
                max(control[tag][0], (least - MARGIN) * size),
                min(control[tag][1], (most + MARGIN) * size),
            )
    cell = replace(cell, dose_low=low, dose_high=high, ranges=ranges, control=control)
    return _cut_ph(cell, ranges, relaxation.plant.system.index["H+"])


def _cut_ph(cell: Cell, ranges: dict[str, Ranges], proton: int) -> Cell | None:
    """Take the nominal state's pH interval over into the cell."""
    if cell.mode not in (HELD, FREE):
        return cell
    nominal = ranges[cell.corners[0].tag]
    low = max(cell.ph_low, -float(nominal.l_high[proton]) / LN10 - PH_SLACK)
    high = min(cell.ph_high, -float(nominal.l_low[proton]) / LN10 + PH_SLACK)
    return replace(cell, ph_low=low, ph_high=high) if low <= high else None


def _of_state(ends: Ends, rows: StateRows) -> Ranges | None:
    ranges = rows.ranges
    l_low, l_high = ranges.l_low.copy(), ranges.l_high.copy()
    for c in np.flatnonzero(ranges.present):
        wide = l_high[c] - l_low[c] > NARROW_LN
        if not wide or (rows.share[c] < WORTH_A_MODEL and c != rows.proton):
            continue
        least, most = ends.ends(rows.l_key(int(c)))
        l_low[c], l_high[c] = max(l_low[c], least - LOOSENED), min(l_high[c], most + LOOSENED)
        if l_low[c] > l_high[c] + LOOSENED:
            return None
    solids, must = ranges.solids.copy(), ranges.must.copy()
    for p in np.flatnonzero(ranges.solids & ~ranges.must):
        least, most = ends.ends(rows.y_key(int(p)))
        if most < 1.0 - 1e-4:
            solids[p] = False
        elif least > 1e-4:
            must[p] = True
    least, most = ends.ends(rows.i_key)
    top = ranges.strength_high
    low = max(ranges.strength_low, (least - MARGIN) * top)
    high = min(top, (most + MARGIN) * top)
    if low > high:
        return None
    return replace(
        ranges, l_low=l_low, l_high=l_high, solids=solids, must=must, strength_low=low,
        strength_high=high,
    )  # fmt: skip
