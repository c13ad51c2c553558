"""Recipes and where to look for them: who controls the pH, which doses and set points to try.

Owns the enumeration of recipes and the coarse grids; judging and polishing happen elsewhere.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations, product

import numpy as np
from numpy.typing import NDArray

from chemistry.state import equilibrate
from optimiser.evaluation import FEASIBLE_RATIO, Evaluator
from optimiser.largest_dose import USUAL_MOL_PER_L, largest_dose_mol_per_l
from optimiser.plant import Plant
from optimiser.points import Points
from optimiser.polish_step import PENALTY, Bounds

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# Ligand doses tried, mol/L: from a trace to the most that wastewater plants usually dose. Where the
# feed binds more, rungs about as far apart follow.
LIGAND_LADDER = (2e-5, 6e-5, 2e-4, 5e-4, 1.2e-3, 3e-3, 8e-3, USUAL_MOL_PER_L)
SHORT_LADDER = (6e-5, 5e-4, 3e-3, 1.5e-2)
RUNG, SHORT_RUNG = 2.5, 5.0
# Shares of the alkali demand that a bulk alkali beside the controller is tried at.
BULK_SHARES = (0.3, 0.6, 0.85, 0.97)
SHORT_SHARES = (0.5, 0.9)
SET_POINT_STEP = 0.5
SHORT_SET_POINT_STEP = 0.75
STARTS_PER_RECIPE = 3


@dataclass(frozen=True, slots=True)
class Recipe:
    """A set of reagents with the one that controls the pH (None: the pH is not controlled)."""

    controller: int | None
    paced: tuple[int, ...]

    @property
    def reagents(self) -> tuple[int, ...]:
        """All reagents, sorted."""
        own = () if self.controller is None else (self.controller,)
        return tuple(sorted((*own, *self.paced)))


def make_recipe(plant: Plant, reagents: Sequence[int]) -> Recipe:
    """Tell the controller among reagents: alkali before acid, then by the catalog's rank."""
    able = [i for i in reagents if plant.reagents[i].ph_control]
    able.sort(key=lambda i: (plant.reagents[i].ph_control != "up", plant.reagents[i].control_rank))
    if not able:
        return Recipe(None, tuple(reagents))
    return Recipe(able[0], tuple(i for i in reagents if i != able[0]))


def recipe_of(plant: Plant, points: Points, row: int) -> tuple[str, ...]:
    """Names of the reagents of a point, in the plant's order."""
    used = points.doses[row] > 0.0
    if points.controller[row] >= 0:
        used = used.copy()
        used[points.controller[row]] = True
    return tuple(plant.names[i] for i in np.flatnonzero(used))


def recipes(plant: Plant, size: int) -> list[Recipe]:
    """All recipes of one size that the site allows, required reagents included."""
    allowed = [plant.index[name] for name in plant.treatment.reagents]
    required = {plant.index[name] for name in plant.treatment.required}
    return [
        make_recipe(plant, chosen)
        for chosen in combinations(allowed, size)
        if required <= set(chosen)
    ]


def set_point_bounds(evaluator: Evaluator) -> Bounds:
    """Ranges of set point and doses that rules of the site and of reagents leave."""
    plant, site = evaluator.plant, evaluator.site
    treatment, window = plant.treatment, site.ph_window
    tolerance = treatment.ph_tolerance
    trims = {plant.reagents[plant.index[n]].ph_control for n in treatment.trim_reagents}

    def low(controller: int, doses: FloatArray) -> float:
        value = treatment.ph_set_point.low
        if "up" not in trims:
            value = max(value, window.low + tolerance)
        if (doses[plant.is_sulfide] > 0.0).any():
            value = max(value, treatment.sulfide_least_ph + tolerance)
        return value

    def high(controller: int, doses: FloatArray) -> float:
        value = treatment.ph_set_point.high
        if "down" not in trims:
            value = min(value, window.high - tolerance)
        ceiling = evaluator.ceiling_of(controller) if controller >= 0 else None
        return value if ceiling is None else min(value, ceiling)

    high_dose = np.minimum(evaluator.ceiling, 1e5)
    return Bounds(ph_low=low, ph_high=high, dose_low=evaluator.least, dose_high=high_dose)


def trim_for(evaluator: Evaluator, ph: float, preferred: int = -1) -> int:
    """The trim reagent for a water that leaves the tank at this pH; -1 where there is none."""
    window = evaluator.site.ph_window
    way = "down" if ph > 0.5 * (window.low + window.high) else "up"
    able = trim_choices(evaluator, way)
    if preferred in able:
        return preferred
    return able[0] if able else -1


def trim_choices(evaluator: Evaluator, way: str) -> list[int]:
    """Trim reagents that move the pH this way, the cheapest per equivalent first."""
    plant = evaluator.plant
    proton = plant.system.index["H+"]
    found = []
    for name in plant.treatment.trim_reagents:
        i = plant.index[name]
        if plant.reagents[i].ph_control == way:
            strength = max(abs(float(plant.reacting[i, proton])), 1e-12)
            kg = np.array([1e-3 / strength * evaluator.pricing.kg_per_mg_per_l])
            goods, freight = evaluator.pricing.purchase(i, kg)
            found.append((float(goods[0] + freight[0]), i))
    return [i for _, i in sorted(found)]


def alkali_demand(evaluator: Evaluator) -> dict[float, float]:
    """Alkali demand (eq/L) over the set points, by holding the pH with sodium hydroxide."""
    plant = evaluator.plant
    window = plant.treatment.ph_set_point
    ph = np.arange(window.low, window.high + 0.26, 0.5)
    state = equilibrate(plant.system, plant.totals, ph=ph, on_failure="flag")
    proton = plant.system.index["H+"]
    need = plant.totals[proton] - state.totals[:, proton]
    return {float(p): abs(float(n)) + 1e-5 for p, n in zip(ph, need, strict=True)}


def set_points(evaluator: Evaluator, recipe: Recipe, bounds: Bounds, gap: float) -> FloatArray:
    """Set points to try for a recipe, about ``gap`` apart."""
    if recipe.controller is None:
        return np.array([float(evaluator.plant.feed.ph)])
    doses = np.zeros(len(evaluator.plant.names))
    doses[list(recipe.paced)] = 1.0
    low = bounds.ph_low(recipe.controller, doses)
    high = bounds.ph_high(recipe.controller, doses)
    if low > high:
        return np.array([])
    count = max(1, int(np.ceil((high - low) / gap)))
    return np.linspace(low, high, count + 1)


def ladder(
    evaluator: Evaluator, recipe: Recipe, reagent: int, demand_eq: float, bounds: Bounds,
    *, short: bool,
) -> FloatArray:  # fmt: skip
    """Doses of a paced reagent to try beside the controller, mg/L fed.

    A bulk alkali (or acid) is tried at shares of the demand, a ligand on a geometric ladder.
    """
    plant = evaluator.plant
    known = plant.reagents[reagent]
    proton = plant.system.index["H+"]
    per_mg = abs(float(plant.reacting[reagent, proton]))
    doses: list[float] = []
    if known.ph_control and recipe.controller is not None and per_mg > 0.0:
        shares = SHORT_SHARES if short else BULK_SHARES
        doses += [share * demand_eq / per_mg for share in shares]
    if known.family not in ("hydroxide", "acid") or not doses:
        steps = _ligand_steps(plant, reagent, short=short)
        per_mole = 1000.0 * known.molar_mass_g_per_mol * float(plant.factors[reagent])
        doses += [moles * per_mole for moles in steps]
    low, high = float(bounds.dose_low[reagent]), float(bounds.dose_high[reagent])
    kept = np.unique(np.clip(np.array(doses), low, high))
    return kept[kept > 0.0]


def _ligand_steps(plant: Plant, reagent: int, *, short: bool) -> list[float]:
    """Reacting doses of a ligand to try, up to what the feed can bind of it. [mol/L]"""
    steps = list(SHORT_LADDER if short else LIGAND_LADDER)
    bringing = plant.reagents[reagent].components
    most = largest_dose_mol_per_l(plant.system, plant.totals, bringing)
    if most > USUAL_MOL_PER_L:
        rungs = np.log(most / steps[-1]) / np.log(SHORT_RUNG if short else RUNG)
        steps += list(np.geomspace(steps[-1], most, int(np.ceil(rungs)) + 1)[1:])
    return steps


def grid(
    evaluator: Evaluator, recipe: Recipe, bounds: Bounds, demand_eq: dict[float, float],
    *, short: bool = False,
) -> Points | None:  # fmt: skip
    """Coarse grid of a recipe over set point and paced doses; None where none is allowed.

    ``demand_eq`` is the alkali demand (eq/L) at some set points, for the shares of bulk alkali.
    """
    plant = evaluator.plant
    gap = SHORT_SET_POINT_STEP if short else SET_POINT_STEP
    doses, ph = [], []
    for point in set_points(evaluator, recipe, bounds, gap):
        near = min(demand_eq, key=lambda p: abs(p - point)) if demand_eq else None
        demand = demand_eq[near] if near is not None else 1e-3
        ladders = [ladder(evaluator, recipe, r, demand, bounds, short=short) for r in recipe.paced]
        for combination in product(*ladders):
            row = np.zeros(len(plant.names))
            row[list(recipe.paced)] = combination
            doses.append(row)
            ph.append(float(point))
    if not ph:
        return None
    controller = -1 if recipe.controller is None else recipe.controller
    trims = [trim_for(evaluator, p) for p in ph]
    return Points(
        np.array(doses), np.full(len(ph), controller, dtype=np.int64), np.array(ph),
        np.array(trims, dtype=np.int64),
    )  # fmt: skip


def starts_of(ph: FloatArray, total: FloatArray, violation: FloatArray) -> list[int]:
    """Rows of a recipe's grid to polish: the best basins over the set point, and the nearest miss.

    Notes
    -----
    The nearest miss is left out where one of the others complies. Within the grid a miss weighs
    at least as much as complying costs there: a trace of a reagent that costs next to nothing must
    not be preferred to a dose that works, because no slope leads from the one to the other before
    the first solid forms.
    """
    cost = np.where(np.isfinite(total), total, np.inf)
    miss = np.clip(violation, 0.0, 60.0)
    works = cost[miss <= FEASIBLE_RATIO]
    weight = np.maximum(cost, works.min() if works.size else 0.0)
    found = basins(ph, cost + weight * PENALTY * miss)
    if not found or violation[found].min() <= FEASIBLE_RATIO:
        return found
    nearest = int(np.argmin(np.where(np.isfinite(cost), violation, np.inf)))
    return found if nearest in found else [*found, nearest]


def basins(ph: FloatArray, merit: FloatArray) -> list[int]:
    """Rows of the best local minima of merit over the set point, one per basin."""
    levels = np.unique(ph)
    rows = [int(np.flatnonzero(ph == p)[np.argmin(merit[ph == p])]) for p in levels]
    values = merit[rows]
    padded = np.concatenate([[np.inf], values, [np.inf]])
    minima = (padded[1:-1] <= padded[:-2]) & (padded[1:-1] <= padded[2:]) & np.isfinite(values)
    picked = [rows[k] for k in np.flatnonzero(minima)]
    picked.sort(key=lambda k: float(merit[k]))
    return picked[:STARTS_PER_RECIPE]
