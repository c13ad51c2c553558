"""Where to start pressing limits down: near recipes, over every set point that is allowed.

Owns a sweep of nominal states that looks over edges which no linearised step crosses.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import Evaluation, Evaluator, Place
from optimiser.points import Points
from optimiser.polish import Track
from optimiser.polish_step import Bounds
from optimiser.pressing import split_ratios
from optimiser.recipes import recipe_of, set_point_bounds
from optimiser.search import Findings

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

POOL = 6  # starts of each kind from which limits are pressed down
RECIPES_SWEPT = 8
LEAST_SWEEP_STEP, SWEEP_FACTORS = 0.2, (0.4, 2.5)  # in pH; of each paced dose
NEAR_WEIGHT = 3.0  # of what others miss, where points to start from are ranked


@dataclass(frozen=True, slots=True, eq=False)
class Sweep:
    """Nominal states over set points a tolerance apart; neighbours of one ``run`` follow on."""

    seen: Evaluation
    inside: NDArray[np.bool_]
    run: NDArray[np.int64]


def pool(
    evaluator: Evaluator, findings: Findings, swept: Sweep | None, checks: Sequence[int]
) -> list[Place]:
    """Where to start: points that miss least beside the checks, and where these are lowest.

    From the sweep every recipe gives the point where the checks are lowest while nothing else is
    missed, and the one with the least sum of both.
    """
    places = [track.place for track in _nearest(findings, checks)[:POOL]]
    if swept is not None:
        places += [Place(swept.seen, row) for row in _picked(evaluator, swept, checks)]
    lowest = [findings.lowest_point[n] for n in checks if n < len(findings.lowest_point)]
    points = [point for point in lowest if point is not None]
    if points:
        seen = evaluator.evaluate(Points.join(points))
        places += [Place(seen, i) for i in range(len(points))]
    return places


def _nearest(findings: Findings, checks: Sequence[int]) -> list[Track]:
    ranked = []
    for track in findings.best.values():
        worst, others = split_ratios(track.place.seen, checks)
        i = track.place.point
        ranked.append((float(worst[i] + NEAR_WEIGHT * max(0.0, others[i])), track))
    return [track for _, track in sorted(ranked, key=lambda item: item[0])]


def _picked(evaluator: Evaluator, swept: Sweep, checks: Sequence[int]) -> list[int]:
    worst, others = (_over_tolerance(r, swept) for r in split_ratios(swept.seen, checks))
    merit = np.where(swept.inside, worst + NEAR_WEIGHT * np.clip(others, 0.0, None), np.inf)
    free = np.where(swept.inside & (others <= 0.0), worst, np.inf)
    by_recipe: dict[tuple[str, ...], list[int]] = {}
    for row in range(len(swept.seen.points)):
        by_recipe.setdefault(recipe_of(evaluator.plant, swept.seen.points, row), []).append(row)
    found = []
    for rows in by_recipe.values():
        found += [(float(v[rows].min()), rows[int(np.argmin(v[rows]))]) for v in (free, merit)]
    found = sorted(item for item in found if np.isfinite(item[0]))
    return list(dict.fromkeys(row for _, row in found))[:POOL]


def _over_tolerance(values: FloatArray, swept: Sweep) -> FloatArray:
    """The worst of each point and its neighbours a tolerance below and above, (points,)."""
    index = np.arange(values.size)
    sides = []
    for step in (-1, 1):
        other = np.clip(index + step, 0, values.size - 1)
        sides.append(np.where(swept.run[other] == swept.run, values[other], values))
    return np.maximum(values, np.maximum(*sides))


def sweep(evaluator: Evaluator, findings: Findings) -> Sweep | None:
    """Nominal states of the nearest recipes over all set points, each dose less and more.

    A solid that comes or goes makes limits jump, and no step looks over such an edge.
    """
    bounds = set_point_bounds(evaluator)
    tracks = sorted(findings.nearest.values(), key=lambda track: track.violation)[:RECIPES_SWEPT]
    if not tracks:
        return None
    gap = max(evaluator.plant.treatment.ph_tolerance, LEAST_SWEEP_STEP)
    points: list[Points] = []
    inside: list[NDArray[np.bool_]] = []
    run: list[IntArray] = []
    for track in tracks:
        for row in _dose_rows(track.point, bounds):
            levels, mine = _levels(track.point, bounds, gap)
            n = levels.size
            points.append(
                Points(
                    np.tile(row, (n, 1)), np.repeat(track.point.controller, n), levels,
                    np.repeat(track.point.trim, n),
                )
            )  # fmt: skip
            inside.append(mine)
            run.append(np.full(n, len(run)))
    seen = evaluator.evaluate(Points.join(points), full=False)
    return Sweep(seen, np.concatenate(inside), np.concatenate(run))


def _levels(
    point: Points, bounds: Bounds, gap: float
) -> tuple[FloatArray, NDArray[np.bool_]]:  # fmt: skip
    """Set points a tolerance apart, one beyond either end, and which of them are allowed."""
    controller, doses = int(point.controller[0]), point.doses[0]
    if controller < 0:
        return point.ph.copy(), np.ones(1, dtype=bool)
    low, high = bounds.ph_low(controller, doses), bounds.ph_high(controller, doses)
    if low > high:
        return point.ph.copy(), np.ones(1, dtype=bool)
    levels = np.asarray(
        low + gap * np.arange(-1, math.floor((high - low) / gap + 1e-9) + 2), dtype=float
    )
    return levels, (levels >= low - 1e-9) & (levels <= high + 1e-9)


def _dose_rows(point: Points, bounds: Bounds) -> list[FloatArray]:
    rows = [point.doses[0]]
    for j in np.flatnonzero(point.doses[0] > 0.0):
        for factor in SWEEP_FACTORS:
            row = point.doses[0].copy()
            row[j] = np.clip(factor * row[j], bounds.dose_low[j], bounds.dose_high[j])
            rows.append(row)
    return rows
