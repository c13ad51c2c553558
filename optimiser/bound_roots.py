"""The cells that a bound begins with: every recipe, where its pH and doses may lie.

Owns points 1 to 4 of the derivation in `optimiser.bound`.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from optimiser.bound_cells import FREE, HELD, HIGHEST_PH, LOWEST_PH, RESTS, Cell, Corner
from optimiser.bound_model import Relaxation
from optimiser.recipes import Recipe, recipes

FloatArray = NDArray[np.float64]

RULE_SLACK = 1e-8  # rules are met within 1e-9
LARGEST_DOSE_MG_PER_L = 1e6


def all_recipes(relaxation: Relaxation) -> Iterator[Recipe]:
    """Every recipe that the site allows."""
    treatment = relaxation.treatment
    most = min(treatment.most_reagents, len(treatment.reagents))
    for size in range(max(1, len(treatment.required)), most + 1):
        yield from recipes(relaxation.plant, size)


def least_cost(relaxation: Relaxation, recipe: Recipe) -> float:
    """Separator, equipment and least doses of a recipe, and what is signed for in any case."""
    low, money = relaxation.evaluator.least * (1.0 - RULE_SLACK), relaxation.money
    bought = sum(money.least(r, float(low[r])) for r in recipe.reagents)
    others = (r for r in range(len(relaxation.plant.names)) if r not in recipe.reagents)
    return relaxation.fixed_cost(recipe) + bought + sum(money.sunk(r) for r in others)


def roots(relaxation: Relaxation, recipe: Recipe, most_cost: float) -> list[Cell]:
    """Cells that hold every plan of a recipe costing no more than ``most_cost``."""
    box = _doses(relaxation, recipe, most_cost)
    if box is None:
        return []
    nominal = (Corner(0, (0,) * len(recipe.paced)),)
    floor = least_cost(relaxation, recipe)
    return [
        Cell(recipe, mode, low, high, *box, nominal, bound=floor)
        for mode, low, high in _intervals(relaxation, recipe)
        if low <= high
    ]


def _doses(
    relaxation: Relaxation, recipe: Recipe, most_cost: float
) -> tuple[FloatArray, FloatArray] | None:
    """Box of doses; None where even the least doses cost more."""
    evaluator, money = relaxation.evaluator, relaxation.money
    low = evaluator.least * (1.0 - RULE_SLACK)
    high = np.zeros_like(low)
    room = most_cost - least_cost(relaxation, recipe)
    if room < 0.0:
        return None
    for r in recipe.reagents:
        ceiling = min(float(evaluator.ceiling[r]) * (1.0 + RULE_SLACK), LARGEST_DOSE_MG_PER_L)
        high[r] = money.highest_dose(r, ceiling, room + money.least(r, float(low[r])))
        if high[r] < low[r]:
            return None
    return low, high


def _intervals(relaxation: Relaxation, recipe: Recipe) -> list[tuple[str, float, float]]:
    """Modes and pH intervals."""
    plant, site = relaxation.plant, relaxation.site
    treatment, window, tolerance = relaxation.treatment, site.ph_window, 0.0
    tolerance = treatment.ph_tolerance
    ways = {plant.reagents[plant.index[n]].ph_control for n in treatment.trim_reagents}
    low = LOWEST_PH if "up" in ways else window.low + tolerance - RULE_SLACK
    high = HIGHEST_PH if "down" in ways else window.high - tolerance + RULE_SLACK
    own = recipe.controller
    if own is None:
        return [(FREE, low, high)]
    low, high = max(low, treatment.ph_set_point.low), min(high, treatment.ph_set_point.high)
    ceiling = relaxation.evaluator.ceiling_of(own)
    if ceiling is not None:
        high = min(high, ceiling + RULE_SLACK)
    found = [(HELD, low, high)]
    if low <= high and (plant.held_system is not None or relaxation.has_carbonate(recipe)):
        down = plant.reagents[own].ph_control == "down"
        found.append((RESTS, LOWEST_PH, high) if down else (RESTS, low, HIGHEST_PH))
    return found
