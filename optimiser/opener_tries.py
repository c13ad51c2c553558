"""What to try that a site does not allow, each with the points that it is tried at.

Owns the choice of points: coarse grids of small recipes, and the nearest recipes with one more
reagent; judging them is `optimiser.openers`.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from itertools import combinations, product

import numpy as np

from optimiser.evaluation import Evaluator
from optimiser.points import Points
from optimiser.polish import Track
from optimiser.recipes import (
    alkali_demand,
    grid,
    ladder,
    make_recipe,
    recipe_of,
    set_point_bounds,
    trim_for,
)
from optimiser.search import Findings
from optimiser.wider_site import moved, other_reagents, with_reagents, with_trim, with_window

REAGENT, LONGER, WINDOW = "reagent", "longer recipe", "set-point window"
TRIM, CEILING = "trim reagent", "dose ceiling"
LOWEST_SET_POINT, HIGHEST_SET_POINT = 2.0, 12.5  # common practice, no source
NEAREST_PARTS = 4
SET_POINT_SHIFTS = (0.0, -0.75, 0.75)
TRIMS = {"down": ("sulfuric_acid", "hydrochloric_acid"), "up": ("caustic_soda",)}


@dataclass(frozen=True, eq=False, kw_only=True)
class Try:
    """Something to allow, with points to try it at; ``reagent`` the one that is added, if any."""

    kind: str
    what: str
    evaluator: Evaluator
    points: Points
    reagent: str = ""


def all_tries(evaluator: Evaluator, findings: Findings) -> list[Try]:
    """Everything that is tried for a site."""
    return [
        *_reagents(evaluator, findings), *_longer(evaluator, findings), *_window(evaluator),
        *_trims(evaluator), *_ceilings(evaluator, findings),
    ]  # fmt: skip


def narrowed(one: Try, evaluator: Evaluator, starts: Points) -> Try:
    """The try at some of its points, in the site that allows its reagent and no other."""
    if one.kind != REAGENT:
        return replace(one, points=starts)
    alone = Evaluator(with_reagents(evaluator.site, [one.reagent]))
    return replace(one, evaluator=alone, points=moved(starts, one.evaluator, alone))


def _nearest(findings: Findings) -> list[Track]:
    return sorted(findings.nearest.values(), key=lambda track: track.violation)


def _reagents(evaluator: Evaluator, findings: Findings) -> list[Try]:
    """Every other reagent of the catalog: alone, beside each allowed one, in near recipes."""
    names = other_reagents(evaluator.site)
    wide = Evaluator(with_reagents(evaluator.site, names))
    demand = alkali_demand(wide)
    near = [
        (recipe_of(evaluator.plant, t.point, 0), moved(t.point, evaluator, wide))
        for t in _nearest(findings)[: 2 * NEAREST_PARTS]
    ]
    most = evaluator.plant.treatment.most_reagents
    tries = []
    for name in names:
        sets = _with_one(evaluator, name) if most > 1 else [(name,)]
        parts = [_grid(wide, members, demand) for members in sets]
        for recipe, point in near[:NEAREST_PARTS]:
            wider = _swapped(evaluator, recipe, name, most)
            parts += [_grown(wide, point, members, demand) for members in wider]
        points = [part for part in parts if part is not None]
        if points:
            what = name.replace("_", " ")
            tries.append(
                Try(
                    kind=REAGENT, what=what, evaluator=wide, points=Points.join(points),
                    reagent=name,
                )
            )  # fmt: skip
    return tries


def _with_one(evaluator: Evaluator, name: str) -> list[tuple[str, ...]]:
    """The reagent with what the site requires, alone and beside each allowed reagent."""
    treatment = evaluator.plant.treatment
    must = treatment.required
    others = [other for other in treatment.reagents if other not in must]
    sets = [(*must, name), *((*must, other, name) for other in others)]
    return [members for members in sets if len(members) <= treatment.most_reagents]


def _swapped(
    evaluator: Evaluator, recipe: Sequence[str], name: str, most: int
) -> list[tuple[str, ...]]:
    """A recipe of two or more with the reagent added, or in place of one where it is full."""
    if len(recipe) < 2:
        return []
    if len(recipe) < most:
        return [(*recipe, name)]
    must = set(evaluator.plant.treatment.required)
    kept = (set(part) for part in combinations(recipe, len(recipe) - 1))
    return [(*sorted(part), name) for part in kept if must <= part and len(part) >= 2]


def _grid(
    evaluator: Evaluator, members: Iterable[str], demand: dict[float, float]
) -> Points | None:
    recipe = make_recipe(evaluator.plant, [evaluator.plant.index[n] for n in members])
    return grid(evaluator, recipe, set_point_bounds(evaluator), demand, short=True)


def _grown(
    evaluator: Evaluator, point: Points, members: Sequence[str], demand: dict[float, float]
) -> Points | None:
    """A recipe at the doses of a point as far as they are known there, the rest on ladders."""
    plant, bounds = evaluator.plant, set_point_bounds(evaluator)
    recipe = make_recipe(plant, [plant.index[name] for name in members])
    base = np.zeros(len(plant.names))
    known = [i for i in recipe.paced if point.doses[0, i] > 0.0]
    base[known] = point.doses[0, known]
    unknown = [i for i in recipe.paced if i not in known]
    rows, levels = [], []
    for shift in SET_POINT_SHIFTS if recipe.controller is not None else (0.0,):
        ph = float(point.ph[0]) + shift
        if recipe.controller is not None:
            ph = float(np.clip(ph, bounds.ph_low(recipe.controller, base), bounds.ph_high(
                recipe.controller, base)))  # fmt: skip
        need = _demand_near(demand, ph)
        ladders = [ladder(evaluator, recipe, i, need, bounds, short=True) for i in unknown]
        for combination in product(*ladders):
            row = base.copy()
            row[unknown] = combination
            rows.append(row)
            levels.append(ph)
    if not rows:
        return None
    n = len(rows)
    controller = -1 if recipe.controller is None else recipe.controller
    return Points(
        np.array(rows), np.full(n, controller, dtype=np.int64), np.array(levels),
        np.array([trim_for(evaluator, p) for p in levels], dtype=np.int64),
    )  # fmt: skip


def _demand_near(demand: dict[float, float], ph: float) -> float:
    return demand[min(demand, key=lambda p: abs(p - ph))]


def _longer(evaluator: Evaluator, findings: Findings) -> list[Try]:
    """Recipes with one reagent more than the site's most."""
    treatment = evaluator.plant.treatment
    size = treatment.most_reagents + 1
    if size > len(treatment.reagents):
        return []
    demand = alkali_demand(evaluator)
    full = [
        (recipe_of(evaluator.plant, t.point, 0), t.point)
        for t in _nearest(findings)
        if len(recipe_of(evaluator.plant, t.point, 0)) == size - 1
    ]
    parts = [
        _grown(evaluator, point, (*recipe, name), demand)
        for recipe, point in full[:NEAREST_PARTS]
        for name in treatment.reagents
        if name not in recipe
    ]
    points = [part for part in parts if part is not None]
    if not points:
        return []
    what = f"recipes of {size} reagents"
    return [Try(kind=LONGER, what=what, evaluator=evaluator, points=Points.join(points))]


def _small_grids(evaluator: Evaluator) -> Points | None:
    """Coarse grids of every recipe of one or two reagents."""
    treatment, demand = evaluator.plant.treatment, alkali_demand(evaluator)
    must = set(treatment.required)
    sizes = [size for size in (1, 2) if size <= treatment.most_reagents]
    parts = [
        _grid(evaluator, members, demand)
        for size in sizes
        for members in combinations(treatment.reagents, size)
        if must <= set(members)
    ]
    points = [part for part in parts if part is not None]
    return Points.join(points) if points else None


def _window(evaluator: Evaluator) -> list[Try]:
    """Set points outside the site's window, to either side."""
    window = evaluator.plant.treatment.ph_set_point
    tries = []
    for low, high in (
        (LOWEST_SET_POINT, window.low), (window.high, HIGHEST_SET_POINT),
    ):  # fmt: skip
        if high - low < evaluator.plant.treatment.ph_tolerance:
            continue
        wide = Evaluator(with_window(evaluator.site, min(low, window.low), max(high, window.high)))
        points = _small_grids(wide)
        if points is None:
            continue
        outside = (points.ph < window.low) | (points.ph > window.high)
        if outside.any():
            what = f"set points {'below' if high == window.low else 'above'} pH "
            what += f"{window.low if high == window.low else window.high:g}"
            tries.append(Try(kind=WINDOW, what=what, evaluator=wide, points=points.take(outside)))
    return tries


def _trims(evaluator: Evaluator) -> list[Try]:
    """A trim reagent for each direction that the site cannot trim in."""
    plant = evaluator.plant
    has = {plant.reagents[plant.index[n]].ph_control for n in plant.treatment.trim_reagents}
    tries = []
    for way, names in TRIMS.items():
        if way in has:
            continue
        for name in names:
            wide = Evaluator(with_trim(evaluator.site, name))
            points = _small_grids(wide)
            if points is not None:
                what = f"{name.replace('_', ' ')} to trim the discharge"
                tries.append(Try(kind=TRIM, what=what, evaluator=wide, points=points, reagent=name))
    return tries


def _ceilings(evaluator: Evaluator, findings: Findings) -> list[Try]:
    """Doses above the site's ceilings."""
    ceilings = evaluator.plant.treatment.dose_ceilings_mg_per_l
    if not ceilings:
        return []
    treatment = replace(evaluator.plant.treatment, dose_ceilings_mg_per_l={})
    wide = Evaluator(replace(evaluator.site, treatment=treatment))
    points = _small_grids(wide)
    parts = [track.point for track in _nearest(findings)[:NEAREST_PARTS]]
    joined = Points.join([*([points] if points is not None else []), *parts])
    what = f"doses above the ceiling of {', '.join(n.replace('_', ' ') for n in ceilings)}"
    return [Try(kind=CEILING, what=what, evaluator=wide, points=joined)]
