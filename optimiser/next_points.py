"""Points around a track: with one reagent more, and moved by a percent.

Owns where the search looks next from a point that it knows; judging happens elsewhere.
"""

from __future__ import annotations

import numpy as np

from optimiser.evaluation import Evaluator
from optimiser.points import Points
from optimiser.polish import Track
from optimiser.polish_step import Bounds
from optimiser.recipes import Recipe, ladder, make_recipe, recipe_of

SETTLE_STEP = 0.01


def with_one_more(
    evaluator: Evaluator, bounds: Bounds, recipe: Recipe, track: Track, demand: dict[float, float]
) -> Points | None:
    """Points of a recipe that has one reagent more than a track's; None where none is allowed.

    The new reagent is tried on a short ladder of doses beside the track's. Where it takes over the
    pH, the old controller becomes a paced bulk reagent at shares of its own dose. ``demand`` is the
    alkali demand (eq/L) at some set points.
    """
    plant = evaluator.plant
    old = track.point
    known = {plant.index[n] for n in recipe_of(plant, old, 0)}
    added = next(i for i in recipe.reagents if i not in known)
    full = make_recipe(plant, recipe.reagents)
    controller = -1 if full.controller is None else full.controller
    ph = float(old.ph[0])
    need = demand[min(demand, key=lambda p: abs(p - ph))]
    base = old.doses[0].copy()
    rows = []
    if controller == added:
        previous = int(old.controller[0])
        if previous < 0:
            rows.append(base)
        else:
            fed = float(track.place.seen.priced.doses[track.place.point, previous])
            for share in (0.5, 0.85, 0.97):
                row = base.copy()
                row[previous] = max(share * fed, float(bounds.dose_low[previous]))
                rows.append(row)
    else:
        for dose in ladder(evaluator, full, added, need, bounds, short=True):
            row = base.copy()
            row[added] = dose
            rows.append(row)
    if not rows:
        return None
    n = len(rows)
    return Points(
        np.array(rows), np.full(n, controller, dtype=np.int64), np.full(n, ph),
        np.full(n, old.trim[0], dtype=np.int64),
    )  # fmt: skip


def moves(point: Points, bounds: Bounds) -> Points | None:
    """Every move of one or two of set point and paced doses by 1 % (set point: 0.02)."""
    columns = [int(j) for j in np.flatnonzero(point.doses[0] > 0.0)]
    axes = ([-1] if point.controller[0] >= 0 else []) + columns
    steps = [(a, s) for a in axes for s in (-1.0, 1.0)]
    combos = [(s,) for s in steps] + [
        (s, t) for i, s in enumerate(steps) for t in steps[i + 1 :] if s[0] != t[0]
    ]
    doses, ph = [], []
    for combo in combos:
        row, here = point.doses[0].copy(), float(point.ph[0])
        for axis, sign in combo:
            if axis < 0:
                here += 2.0 * SETTLE_STEP * sign
            else:
                row[axis] *= 1.0 + SETTLE_STEP * sign
        controller = int(point.controller[0])
        low, high = bounds.ph_low(controller, row), bounds.ph_high(controller, row)
        inside = controller < 0 or low <= here <= high
        kept = row[columns]
        ok = (kept >= bounds.dose_low[columns]).all() and (kept <= bounds.dose_high[columns]).all()
        if inside and ok:
            doses.append(row)
            ph.append(here)
    if not ph:
        return None
    n = len(ph)
    return Points(
        np.array(doses), np.repeat(point.controller, n), np.array(ph), np.repeat(point.trim, n)
    )
