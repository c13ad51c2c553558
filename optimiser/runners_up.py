"""Runners-up: the other recipes that comply, what each costs more than the plan, and why.

Owns when two recipes are distinct, and the difference by cause; the recipes come from the search
and are polished to the end here, because the search rests what falls behind.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.costing import (
    BURDEN,
    DISPOSAL,
    EQUIPMENT,
    FEES,
    FREIGHT,
    POLYMER,
    SEPARATOR,
    SURCHARGES,
)
from optimiser.evaluation import Evaluator, Place
from optimiser.marginal import BINDING_RATIO, binding_otherwise
from optimiser.nearby import Standing, point_data, worst_ratios
from optimiser.polish import Track, at_rest, polish_each
from optimiser.quality_slopes import RULE
from optimiser.recipes import set_point_bounds
from optimiser.search import Findings
from optimiser.sludge_figures import sludge_data
from optimiser.solver import SolverPort

Data = dict[str, Any]
FloatArray = NDArray[np.float64]
Recipe = tuple[str, ...]

SPARE = 2  # recipes finished beyond those shown: the order may change, and some may be tokens
NEAR_MISS = 0.05  # largest ratio of a recipe that a few more steps may bring to comply
FINISH_STEPS, FINISH_RADIUS = 8, 0.1
TOKEN = 1.02  # a dose up to this multiple of its least real dose is a token
SLUDGE, EQUIPMENT_GROUP = "sludge", "equipment"
GROUPS = {
    DISPOSAL: SLUDGE, FEES: SLUDGE, POLYMER: SLUDGE, EQUIPMENT: EQUIPMENT_GROUP,
    SEPARATOR: EQUIPMENT_GROUP, BURDEN: BURDEN, FREIGHT: FREIGHT,
    SURCHARGES: SURCHARGES,
}  # fmt: skip
LEAST_SHOWN, LEAST_SHARE = 0.5, 0.005  # currency a year; of the whole difference


def finish(evaluator: Evaluator, findings: Findings, solver: SolverPort, count: int) -> None:
    """Polish the nearest recipes to the end, so that what they cost more is theirs to the last.

    Recipes that the search left a little short of complying are finished too. One that ends
    cheaper than the plan takes its place in the findings. What was certified on many samples stays
    as it is.
    """
    if not count or not findings.feasible or findings.stopped_early or findings.whole is not None:
        return
    plan = findings.feasible[0][0]
    near = [
        (recipe, track)
        for recipe, track in findings.best.items()
        if recipe != plan
        and (track.feasible or track.violation < NEAR_MISS)
        and not (track.feasible and at_rest(track))
    ]
    near.sort(key=lambda item: item[1].merit)
    worth = sorted(t.merit for r, t in findings.best.items() if r != plan)[: count + SPARE]
    near = [(recipe, track) for recipe, track in near if track.merit <= worth[-1]]
    if not near:
        return
    again = polish_each(
        evaluator, [track.place for _, track in near], solver,
        bounds=set_point_bounds(evaluator), steps=FINISH_STEPS, radius=FINISH_RADIUS,
    )  # fmt: skip
    for (recipe, _), track in zip(near, again, strict=True):
        findings.keep(recipe, track)


def runners_up(
    evaluator: Evaluator, findings: Findings, solver: SolverPort, count: int
) -> tuple[list[Data], list[str]]:
    """The cheapest distinct recipes after the plan, and those left out as no recipes of their own.

    Notes
    -----
    A recipe is left out where a part of it complies for no more money and every reagent beyond
    that part stands at its least real dose, or gives no more than a controller needs to make up
    for paced doses that are off by their tolerance: it is that part with a token of something. A
    reagent at its least dose that makes the recipe cheaper, or without which it does not comply,
    counts.
    """
    (_, plan), *others = findings.feasible
    rows: list[Data] = []
    left: list[str] = []
    for recipe, track in others:
        if len(rows) == count:
            break
        token = token_of(evaluator, findings, recipe, track)
        if token is None:
            rows.append(_row(evaluator, solver, plan, track))
        else:
            extra = [name for name in recipe if name not in token]
            left.append(f"{_plain(token)} with a token of {_plain(extra)}")
    return rows, left if count else []


def token_of(
    evaluator: Evaluator, findings: Findings, recipe: Recipe, track: Track
) -> Recipe | None:
    """The cheaper recipe of which this one is a copy with token doses, if there is one."""
    priced = track.place.seen.priced.doses[track.place.point]
    index = evaluator.plant.index
    most = TOKEN * (evaluator.least + _swing(evaluator, track))
    tokens = {n for n in recipe if priced[index[n]] <= most[index[n]]}
    parts = [
        part
        for part, other in findings.feasible
        if set(part) < set(recipe) and set(recipe) - set(part) <= tokens
        and other.total <= track.total
    ]  # fmt: skip
    return parts[0] if parts else None


def _swing(evaluator: Evaluator, track: Track) -> FloatArray:
    """Dose that a controller needs to make up for paced doses that are off, (reagents,). [mg/L]"""
    plant, point = evaluator.plant, track.point
    swing = np.zeros(len(plant.names))
    controller = int(point.controller[0])
    strength = np.abs(plant.reacting[:, plant.system.index["H+"]])
    if controller >= 0 and strength[controller] > 0.0:
        off = plant.treatment.dose_tolerance_fraction * float(point.doses[0] @ strength)
        swing[controller] = off / strength[controller]
    return swing


def _row(evaluator: Evaluator, solver: SolverPort, plan: Track, track: Track) -> Data:
    by_cause = difference_by_cause(plan.place, track.place)
    difference = track.total - plan.total
    solids = _solids(evaluator, plan.place, track.place)
    return {
        **point_data(evaluator, track.place),
        "difference_per_year": difference,
        "difference_percent": 100.0 * (track.total / plan.total - 1.0),
        "difference_by_cause": by_cause,
        "solids_kg_per_d": solids,
        "why": _why(by_cause, solids, LEAST_SHARE * abs(difference)),
        "binding": binding(evaluator, solver, track),
    }


def difference_by_cause(plan: Place, other: Place) -> dict[str, float]:
    """What another point costs more than the plan by cause, the largest first. [currency/year]

    Goods stand under their reagent; tariff, fees and polymer of the sludge are one cause, and so
    are equipment and separator.
    """
    found: dict[str, float] = {}
    for sign, place in ((-1.0, plan), (1.0, other)):
        for cause, values in place.seen.priced.by_cause.items():
            group = GROUPS.get(cause, cause)
            found[group] = found.get(group, 0.0) + sign * float(values[place.point])
    kept = [(cause, value) for cause, value in found.items() if abs(value) > 1e-6]
    return dict(sorted(kept, key=lambda item: -abs(item[1])))


def _solids(evaluator: Evaluator, plan: Place, other: Place) -> dict[str, float]:
    """Dry solids that another point makes more than the plan, the largest first. [kg/d]"""
    found: dict[str, float] = {}
    for sign, place in ((-1.0, plan), (1.0, other)):
        made = sludge_data(evaluator, place.seen, place.point)
        for solid, mass in made["dry_kg_per_d_by_solid"].items():
            found[solid] = found.get(solid, 0.0) + sign * float(mass)
        key = "reagent left unreacted"
        found[key] = found.get(key, 0.0) + sign * float(made["unreacted_kg_per_d"])
    kept = [(solid, mass) for solid, mass in found.items() if abs(mass) > 1e-3]
    return dict(sorted(kept, key=lambda item: -abs(item[1])))


def _why(by_cause: dict[str, float], solids: dict[str, float], least: float) -> str:
    """The difference in words, without causes that are too small to matter."""
    parts = []
    for cause, value in by_cause.items():
        if abs(value) < max(least, LEAST_SHOWN):
            continue
        text = f"{cause.replace('_', ' ')} {value:+,.0f}"
        if cause == SLUDGE:
            leading = [solid for solid, mass in solids.items() if mass * value > 0.0]
            text += f" ({_mineral(leading[0])})" if leading else ""
        parts.append(text)
    return ", ".join(parts)


def _mineral(solid: str) -> str:
    """The name of a solid in words where it has one: ``CaSO4.2H2O(s) (gypsum)`` is gypsum."""
    _, bracket, words = solid.partition(" (")
    return words.removesuffix(")") if bracket else solid


def binding(evaluator: Evaluator, solver: SolverPort, track: Track) -> list[str]:
    """Limits, rules and ends of doses and set point that a point stands at."""
    checks, _ = worst_ratios(evaluator, track.place)
    limits = [
        f"{check.label} ({check.averaging})"
        for check, ratio in zip(evaluator.judge.checks, checks, strict=True)
        if check.averaging != RULE and ratio >= -BINDING_RATIO
    ]
    standing = Standing(evaluator=evaluator, solver=solver, track=track)
    return [*np.unique(limits).tolist(), *binding_otherwise(standing)]


def _plain(names: Recipe | list[str]) -> str:
    return " + ".join(name.replace("_", " ") for name in names)
