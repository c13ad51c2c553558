"""Grids of recipes in chunks, and their points in order of promise.

Owns no judgement of its own; what points cost and miss comes with their evaluation.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from optimiser.evaluation import FEASIBLE_RATIO, Place
from optimiser.points import Points
from optimiser.polish_step import PENALTY
from optimiser.recipes import Recipe


@dataclass(frozen=True, slots=True)
class Grid:
    """Points at which a recipe is tried, and evaluated neighbours of each or none."""

    recipe: Recipe
    points: Points
    near: Sequence[Place] = ()


def ranked(places: Sequence[Place]) -> list[Place]:
    """Places in order of promise: by cost with a penalty on the largest miss.

    A miss weighs at least as much as the cheapest that complies, or the middle of all, costs: what
    does next to nothing is cheap and must not come first.
    """
    cost = np.array([place.seen.total[place.point] for place in places])
    miss = np.clip([place.seen.violation[place.point] for place in places], 0.0, 60.0)
    cost = np.where(np.isfinite(cost), cost, 1e300)
    works = cost[miss <= FEASIBLE_RATIO]
    usual = works.min() if works.size else np.median(cost) if cost.size else 0.0
    order = np.argsort(cost + np.maximum(cost, usual) * PENALTY * miss, kind="stable")
    return [places[k] for k in order]


def chunks(grids: Sequence[Grid], size: int) -> list[list[Grid]]:
    """Grids in chunks of about so many points, each grid in one piece."""
    made: list[list[Grid]] = []
    count = 0
    for item in grids:
        if not made or count + len(item.points) > size:
            made.append([])
            count = 0
        made[-1].append(item)
        count += len(item.points)
    return made
