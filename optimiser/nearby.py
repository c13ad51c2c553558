"""Plans of sites that differ a little: the same chemistry under other limits, tariffs or prices.

Owns the cheap copy of an evaluator and the polish from a known point; what is changed, and what
follows from it, is for `optimiser.marginal` and `optimiser.entry_prices`.
"""

from __future__ import annotations

import copy
from dataclasses import dataclass
from typing import Any

import numpy as np

from optimiser.costing import Pricing
from optimiser.evaluation import Evaluator, Place
from optimiser.points import Points
from optimiser.polish import Track, polish
from optimiser.quality import Judge
from optimiser.recipes import recipe_of, set_point_bounds
from optimiser.site import Site
from optimiser.solver import SolverPort

Data = dict[str, Any]

RADIUS = 0.05
STEPS = 6
NEAR_STEPS = 14
STANDING_RADII = (0.05, 0.01, 0.05)
RESOLUTION = 2e-5  # share of the cost that a polish stops at; smaller differences say nothing


@dataclass(frozen=True, eq=False, kw_only=True)
class Standing:
    """The plan that everything is compared with, polished until it stands still."""

    evaluator: Evaluator
    solver: SolverPort
    track: Track

    @property
    def place(self) -> Place:
        """The plan's point with its states and slopes."""
        return self.track.place

    @property
    def total(self) -> float:
        """Cost of the plan. [currency/year]"""
        return self.track.total

    @property
    def recipe(self) -> tuple[str, ...]:
        """The plan's reagents, the trim apart."""
        return recipe_of(self.evaluator.plant, self.track.point, 0)


def stand(evaluator: Evaluator, solver: SolverPort, track: Track) -> Standing:
    """Polish a plan once more, so that what is polished from it differs by the change alone."""
    for radius in STANDING_RADII:
        again = repolish(evaluator, track.place, solver, radius=radius, steps=NEAR_STEPS)
        if again.feasible and again.total <= track.total:
            track = again
    return Standing(evaluator=evaluator, solver=solver, track=track)


def changed(evaluator: Evaluator, site: Site) -> Evaluator:
    """Evaluator of a site that differs in limits, caps, set points, separator, disposal or offers.

    Feed, species and reagents stay, so that states of one may start those of the other.
    """
    plant = copy.copy(evaluator.plant)
    plant.site, plant.treatment = site, site.treatment
    result = copy.copy(evaluator)
    result.site, result.plant = site, plant
    result.judge = Judge(plant)
    result.pricing = Pricing(plant, result.judge.surcharges)
    return result


def repolish(
    evaluator: Evaluator, place: Place, solver: SolverPort, *, steps: int = STEPS,
    radius: float = RADIUS,
) -> Track:  # fmt: skip
    """Polish from an evaluated point."""
    point: Points = place.seen.points.take([place.point])
    return polish(
        evaluator, point, solver, bounds=set_point_bounds(evaluator), steps=steps, radius=radius,
        rival=np.inf, near=[place],
    )[0]  # fmt: skip


def worst_ratios(evaluator: Evaluator, place: Place) -> tuple[np.ndarray, np.ndarray]:
    """Largest ratio of every check and of every rule at a point."""
    seen, point = place.seen, place.point
    checks = np.full(len(evaluator.judge.checks), -np.inf)
    for part in seen.judged:
        mine = seen.rows.point[part.block.rows] == point
        if mine.any() and checks.size:
            checks = np.maximum(checks, part.ratio[mine].max(axis=0))
    rules = np.array([float(rule.ratio[point]) for rule in seen.rules])
    return checks, rules


def point_data(evaluator: Evaluator, place: Place) -> Data:
    """Recipe, set point, doses and cost of a point, as plain data."""
    seen, row, plant = place.seen, place.point, evaluator.plant
    controller = int(seen.points.controller[row])
    doses = {n: float(seen.priced.doses[row, i]) for i, n in enumerate(plant.names)}
    trims = {f"{n}@trim": float(seen.priced.trim_doses[row, i]) for i, n in enumerate(plant.names)}
    return {
        "reagents": list(recipe_of(plant, seen.points, row)),
        "controller": plant.names[controller] if controller >= 0 else None,
        "ph_set_point": float(seen.points.ph[row]) if controller >= 0 else None,
        "doses": {key: dose for key, dose in (doses | trims).items() if dose > 0.0},
        "total": float(seen.total[row]),
    }  # fmt: skip
