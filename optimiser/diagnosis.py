"""Why there is no plan: which limits clash, how low each can go, and what stops it there."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.errors import NoPlan, SolverFault
from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator, Place
from optimiser.held_up import held_up_by
from optimiser.openers import openers
from optimiser.points import END_TEXT, Points
from optimiser.polish import polish
from optimiser.quality_slopes import RULE
from optimiser.recipes import recipe_of, set_point_bounds
from optimiser.relaxations import relaxations
from optimiser.search import Findings
from optimiser.solver import SolverPort

FloatArray = NDArray[np.float64]

LOG = logging.getLogger(__name__)

SMALL_MOVES = (0.05, 0.2)  # of a dose; twice that in pH
NEAREST = 4  # recipes that are polished to the nearest miss
AT_LIMIT = 0.02  # a check this close below 0 counts as being at its limit


def explain_no_plan(evaluator: Evaluator, findings: Findings, solver: SolverPort) -> NoPlan:
    """Build the error that says why no recipe complies.

    Each limit's lowest reachable value is the least seen over all points examined. The points with
    the least misses are polished to the nearest miss, where the largest miss is as small as can be:
    the checks that stand at it there are the ones that clash.
    """
    failed = evaluator.plant.states_failed
    solved = evaluator.plant.states_solved
    if not findings.best:
        return _nothing_to_try(evaluator, findings, solver)
    checks = evaluator.judge.checks
    seen, point = _nearest_miss(evaluator, findings, solver)
    missed = _missed(evaluator, seen, point)
    lowest = findings.lowest if findings.lowest is not None else np.full(len(checks), np.inf)
    clashes: list[dict[str, Any]] = []
    clashing: list[int] = []
    for number, check in enumerate(checks):
        alone = bool(lowest[number] > check.target * np.exp(FEASIBLE_RATIO))
        if not (alone and findings.lowest is not None) and number not in missed:
            continue
        scale = check.variability
        clashing.append(number)
        clashes.append(
            {
                "limit": f"{check.label}, {check.averaging}"
                + (f" ({check.limit:g} {check.unit})" if check.averaging != RULE else ""),
                "lowest_reachable": float(lowest[number]) * scale,
                "target": check.target * scale,
                "reachable_alone": not alone,
                "best_compromise": missed.get(number, check.target) * scale,
                "stopped_by": _stopper(evaluator, findings, number),
            }
        )
    message = (
        f"no plan: none of the {len(findings.recipes_examined)} recipes examined meets every limit"
    )
    reasons = []
    if failed:
        message = message.replace("no plan:", "no plan was found:")
        reasons.append(unsolved(failed, solved))
    reasons += _reasons(evaluator, clashes, seen, point)
    reasons += _broken_where_lowest(evaluator, findings, missed)
    return NoPlan(
        message, reasons=reasons, clashes=clashes,
        relaxations=lambda: _quietly(lambda: relaxations(evaluator, findings, solver, clashing)),
        openers=lambda: _quietly(lambda: openers(evaluator, findings, solver)),
    )  # fmt: skip


def unsolved(failed: int, solved: int) -> str:
    """Say that states could not be solved, so that a plan is not ruled out."""
    return (
        f"{failed:,} of {solved:,} equilibrium states could not be solved and counted as misses, "
        "so that a plan is not ruled out"
    )


def _quietly(look: Callable[[], list[dict[str, Any]]]) -> list[dict[str, Any]]:
    """Nothing where the solver fails: that there is no plan stands without it."""
    try:
        return look()
    except SolverFault as fault:
        LOG.warning("ways to open a plan were not looked for to the end: %s", fault)
        return []


def _nearest_miss(
    evaluator: Evaluator, findings: Findings, solver: SolverPort
) -> tuple[Evaluation, int]:
    """Polish the least misses seen to where the largest miss is least."""
    ranked = sorted(findings.nearest.values(), key=lambda track: track.violation)[:NEAREST]
    try:
        tracks = polish(
            evaluator, Points.join([track.point for track in ranked]), solver,
            bounds=set_point_bounds(evaluator), near=[track.place for track in ranked],
            rival=None,
        )  # fmt: skip
    except SolverFault as fault:
        # the answer is that there is no plan; without the polish its reasons are only less sharp
        LOG.warning("the nearest miss was not polished: %s", fault)
        tracks = ranked
    best = min(tracks, key=lambda track: track.violation)
    return best.place.seen, best.place.point


def _nothing_to_try(evaluator: Evaluator, findings: Findings, solver: SolverPort) -> NoPlan:
    """No point could be examined: say which windows and rules leave none."""
    treatment, window = evaluator.plant.treatment, evaluator.site.ph_window
    asked = treatment.ph_set_point
    reasons = [
        f"the set point may lie from pH {asked.low:g} to {asked.high:g}, the discharge from "
        f"{window.low:g} to {window.high:g}, with {treatment.ph_tolerance:g} kept to either side "
        f"where no trim reagent moves the pH"
    ]
    if not treatment.trim_reagents:
        reasons.append("no trim reagent is allowed")
    tried = len(findings.recipes_examined)
    if tried:
        reasons.append(f"none of the {tried} recipes reaches a set point in there")
    message = "no plan: no set point and doses are left inside the site's windows and rules"
    plant = evaluator.plant
    if plant.states_failed:
        message = message.replace("no plan:", "no plan was found:")
        reasons.insert(0, unsolved(plant.states_failed, plant.states_solved))
    return NoPlan(
        message, reasons=reasons,
        openers=lambda: _quietly(lambda: openers(evaluator, findings, solver)),
    )  # fmt: skip


def _missed(evaluator: Evaluator, seen: Evaluation, point: int) -> dict[int, float]:
    missed: dict[int, float] = {}
    for part in seen.judged:
        mine = (seen.rows.point[part.block.rows] == point) & part.block.reached
        for number in range(len(evaluator.judge.checks)):
            over = part.value[mine, number].max(initial=0.0)
            if part.ratio[mine, number].max(initial=-np.inf) > FEASIBLE_RATIO:
                missed[number] = max(missed.get(number, 0.0), float(over))
    return missed


def _reasons(
    evaluator: Evaluator, clashes: list[dict[str, Any]], seen: Evaluation, point: int
) -> list[str]:
    reasons = []
    together = [c["limit"] for c in clashes if c["reachable_alone"]]
    alone = [c["limit"] for c in clashes if not c["reachable_alone"]]
    if alone:
        reasons.append(f"out of reach whatever is dosed: {'; '.join(alone)}")
    if together:
        reasons.append(f"each within reach, but not together: {'; '.join(together)}")
    rules = [r.label for r in seen.rules if r.ratio[point] > FEASIBLE_RATIO]
    if rules:
        reasons.append(f"the best compromise also breaks: {'; '.join(rules)}")
    held = _at_their_limit(evaluator, seen, point)
    if held:
        reasons.append(f"at their limit there, and holding it back: {'; '.join(held)}")
    recipe = ", ".join(recipe_of(evaluator.plant, seen.points, point))
    reasons.append(f"nearest miss: {recipe} at pH {float(seen.points.ph[point]):.2f}")
    return reasons


def _broken_where_lowest(
    evaluator: Evaluator, findings: Findings, missed: dict[int, float]
) -> list[str]:
    """For each limit that is missed but within reach: what is broken where it is lowest."""
    checks = evaluator.judge.checks
    reasons = []
    for number in missed:
        point = findings.lowest_point[number] if findings.lowest_point else None
        if point is None or findings.lowest is None:
            continue
        if findings.lowest[number] > checks[number].target:
            continue
        ratios = _ratios(evaluator, evaluator.evaluate(point), 0)
        own = f"{checks[number].label}, {checks[number].averaging}"
        others = [n for n, r in ratios.items() if r > FEASIBLE_RATIO and n != own]
        if others:
            reasons.append(f"where {own} is lowest, broken are: {'; '.join(others)}")
    return reasons


def _at_their_limit(evaluator: Evaluator, seen: Evaluation, point: int) -> list[str]:
    """Checks and rules that stand in the way at the nearest miss.

    They either are at their limit, or a small move that lessens the worst miss breaks them.
    """
    here = _ratios(evaluator, seen, point)
    stand = [name for name, ratio in here.items() if -AT_LIMIT < ratio <= FEASIBLE_RATIO]
    worst = max(here, key=lambda name: here[name])
    for trial in _small_moves(evaluator, seen, point):
        there = _ratios(evaluator, trial, 0)
        if there[worst] < here[worst]:
            stand += [
                name
                for name, ratio in there.items()
                if ratio > FEASIBLE_RATIO and here.get(name, 0.0) <= FEASIBLE_RATIO
            ]
    return list(dict.fromkeys(stand))


def _ratios(evaluator: Evaluator, seen: Evaluation, point: int) -> dict[str, float]:
    """Worst ratio of every check and of every rule that applies, at one point."""
    checks = evaluator.judge.checks
    worst = np.full(len(checks), -np.inf)
    for part in seen.judged:
        mine = (seen.rows.point[part.block.rows] == point) & part.block.reached
        if mine.any():
            worst = np.maximum(worst, part.ratio[mine].max(axis=0))
    found = {f"{c.label}, {c.averaging}": float(r) for c, r in zip(checks, worst, strict=True)}
    return {**found, **{rule.label: float(rule.ratio[point]) for rule in seen.rules}}


def _small_moves(evaluator: Evaluator, seen: Evaluation, point: int) -> list[Evaluation]:
    """The point with one dose or the set point moved a little, each evaluated."""
    one = seen.points.take([point])
    moved = []
    for size in (sign * move for move in SMALL_MOVES for sign in (-1.0, 1.0)):
        for j in np.flatnonzero(one.doses[0] > 0.0):
            doses = one.doses.copy()
            doses[0, j] *= 1.0 + size
            moved.append(replace(one, doses=doses))
        if one.controller[0] >= 0:
            moved.append(replace(one, ph=one.ph + 2.0 * size))
    return [evaluator.evaluate(trial, near=[Place(seen, point)]) for trial in moved]


def _stopper(evaluator: Evaluator, findings: Findings, number: int) -> str:
    """What holds a limit's value up at the point where it is lowest."""
    check = evaluator.judge.checks[number]
    point = findings.lowest_point[number] if findings.lowest_point else None
    if point is None:
        return "no state examined reaches its set point"
    if check.burden:
        return _burden_stopper(evaluator, check.burden)
    if not check.metals:
        return check.source
    seen = evaluator.evaluate(point, full=False, all_ends=False)
    part = seen.judged[0]
    metal = max(check.metals, key=lambda m: part.residual[0, m] + part.carried[0, m])
    residual, carried = float(part.residual[0, metal]), float(part.carried[0, metal])
    floor = float(part.floor[0, metal])
    if floor > residual + carried:
        return "practical floor: no less is promised without a jar test"
    if carried > residual:
        return f"carry-over past the {evaluator.plant.treatment.separator.name}"
    return _leading_species(evaluator, seen, metal)


def _burden_stopper(evaluator: Evaluator, burden: str) -> str:
    feed = evaluator.plant.feed.burden_mg_per_l.get(burden, 0.0)
    return f"the feed brings {feed:.4g} mg/L and the doses add to it"


def _leading_species(evaluator: Evaluator, seen: Evaluation, metal: int) -> str:
    state = seen.blocks[0].state
    held = held_up_by(state, 0, evaluator.judge.weights[metal])
    what = f"dissolved as {held.text}," if held else "in a form that does not precipitate,"
    return f"{what} at pH {float(state.ph[0]):.1f}; {END_TEXT[seen.blocks[0].end]}"
