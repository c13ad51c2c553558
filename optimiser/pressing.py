"""Pressing some checks down as far as all others allow, by successive linearisation.

Owns the step model and the trust region of that minimisation; where it starts and what follows
from its end is for `optimiser.relaxations`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator, Place
from optimiser.linear_model import Expression, Model
from optimiser.points import Points
from optimiser.polish_step import BACK_OFF, Bounds, build_step
from optimiser.recipes import set_point_bounds
from optimiser.solver import SolverPort

FloatArray = NDArray[np.float64]

MOST_STEPS = 24
FIRST_RADIUS, LAST_RADIUS = 0.4, 1e-4
OTHERS_WEIGHT = 100.0  # of what other limits miss, against the ratio pressed down
MISSED_TO_BE_NEAR = 5e-3
NOT_REACHED = 5.0


@dataclass(slots=True, eq=False)
class Press:
    """One point on its way down: the ratio that is pressed, and what everything else misses."""

    place: Place
    worst: float
    others: float
    radius: float = FIRST_RADIUS
    stalls: int = 0
    alive: bool = True

    @property
    def merit(self) -> float:
        """The ratio pressed, with a penalty on what the others miss."""
        return max(0.0, self.worst) + OTHERS_WEIGHT * max(0.0, self.others + BACK_OFF)

    @property
    def opens(self) -> bool:
        """Whether loosening the pressed checks alone makes this point comply."""
        return self.others <= FEASIBLE_RATIO


def press_down(
    evaluator: Evaluator, starts: Sequence[Place], solver: SolverPort, checks: Sequence[int]
) -> list[Press]:
    """Bring the largest ratio of some checks down as far as everything else allows.

    Notes
    -----
    Minimise ``max over the checks of ln(value / target)`` subject to every other check and every
    rule, by successive linearisation with exact derivatives inside a trust region: the step model
    of `optimiser.polish_step`, whose rows of the pressed checks may miss by one common amount and
    all others only at `OTHERS_WEIGHT` times its price. The equilibrium at every corner and end
    accepts or refuses a move. ``exp`` of the end is the factor that these limits have to be
    loosened by. Local to the recipes it starts from, as every polish is.
    """
    bounds = set_point_bounds(evaluator)
    joined = Points.join([place.seen.points.take([place.point]) for place in starts])
    seen = evaluator.evaluate(joined, slopes=True, near=starts)
    tracks = _presses(seen, checks)
    for _ in range(MOST_STEPS):
        pairs = [(t, _step(evaluator, t, solver, bounds, checks)) for t in tracks if t.alive]
        for track, trial in pairs:
            track.alive = trial is not None
        moving = [(track, trial) for track, trial in pairs if trial is not None]
        if not moving:
            break
        tried = evaluator.evaluate(
            Points.join([trial for _, trial in moving]), slopes=True,
            near=[track.place for track, _ in moving],
        )  # fmt: skip
        for (track, _), fresh in zip(moving, _presses(tried, checks), strict=True):
            _accept(track, fresh)
    return tracks


def _presses(seen: Evaluation, checks: Sequence[int]) -> list[Press]:
    worst, others = split_ratios(seen, checks)
    return [
        Press(Place(seen, i), float(w), float(o))
        for i, (w, o) in enumerate(zip(worst, others, strict=True))
    ]


def split_ratios(seen: Evaluation, checks: Sequence[int]) -> tuple[FloatArray, FloatArray]:
    """Largest ratio of some checks, and of everything else, at every point, (points,) each."""
    n = len(seen.points)
    worst, others = np.full(n, -np.inf), np.full(n, -np.inf)
    for part in seen.judged:
        point = seen.rows.point[part.block.rows]
        chosen = np.zeros(part.ratio.shape[1], dtype=bool)
        chosen[list(checks)] = True
        np.maximum.at(worst, point, part.ratio[:, chosen].max(axis=1, initial=-np.inf))
        np.maximum.at(others, point, part.ratio[:, ~chosen].max(axis=1, initial=-np.inf))
        missing = part.block.trim_missing | ~part.block.reached
        np.maximum.at(others, point[missing], NOT_REACHED)
    for rule in seen.rules:
        others = np.maximum(others, rule.ratio)
    return worst, others


def _accept(track: Press, fresh: Press) -> None:
    gain = track.merit - fresh.merit
    if np.isfinite(fresh.merit) and gain > 0.0:
        track.place, track.worst, track.others = fresh.place, fresh.worst, fresh.others
        track.radius = min(1.0, track.radius * (1.6 if gain > 1e-3 else 1.0))
        track.stalls = track.stalls + 1 if gain < 1e-6 else 0
    else:
        track.radius *= 0.3
    near = FEASIBLE_RATIO < track.others < MISSED_TO_BE_NEAR
    track.alive = (track.radius > LAST_RADIUS and track.stalls < 2) or (
        near and track.radius > 1e-3 * LAST_RADIUS
    )


def _step(
    evaluator: Evaluator, track: Press, solver: SolverPort, bounds: Bounds, checks: Sequence[int]
) -> Points | None:
    """Solve one linearised step; None where the model has no solution."""
    seen, row = track.place.seen, track.place.point
    aim = 2.0 * track.others if 0.0 < track.others < MISSED_TO_BE_NEAR else 0.0
    whole = build_step(
        evaluator, _shifted(seen, checks, track.worst), row, track.radius, bounds, inward=aim,
        miss_only=True,
    )  # fmt: skip
    report = solver.solve(_pressing(whole, checks, track.worst))
    if not report.termination.has_solution:
        return None
    point = seen.points.take([row])
    doses, ph = point.doses.copy(), point.ph.copy()
    for j in np.flatnonzero(doses[0] > 0.0):
        doses[0, j] = report.values[f"dose {evaluator.plant.names[j]}"]
    if "set point" in report.values:
        ph[0] = report.values["set point"]
    return replace(point, doses=doses, ph=ph)


def _shifted(seen: Evaluation, checks: Sequence[int], worst: float) -> Evaluation:
    """The evaluation as if the pressed checks stood just at their limit."""
    parts = []
    for part in seen.judged:
        ratio = part.ratio.copy()
        ratio[:, list(checks)] -= worst
        parts.append(replace(part, ratio=ratio))
    return replace(seen, judged=parts)


def _pressing(whole: Model, checks: Sequence[int], worst: float) -> Model:
    """The step model in which the pressed checks share one miss and all others another.

    Nothing is gained by pressing below the limit.
    """
    pressed = {str(number) for number in checks}
    model = Model("press down")
    for key, variable in whole.variables.items():
        if key != "miss":
            model.add_variable(key, low=variable.low, high=variable.high)
    model.add_variable("pressed", low=-worst, high=60.0)
    model.add_variable("missed", high=60.0)
    for row in whole.rows.values():
        words = row.key.split()
        mine = words[0] == "check" and words[1] in pressed
        terms = {k: a for k, a in row.terms.items() if k != "miss"}
        terms["pressed" if mine else "missed"] = -1.0
        model.add_row(row.key, terms, row.sense, row.rhs)
    model.add_cost("miss", Expression({"pressed": 1.0, "missed": OTHERS_WEIGHT}))
    return model


def worst_of_checks(place: Place, checks: Sequence[int]) -> dict[int, float]:
    """Largest ratio of some checks at a point."""
    seen = place.seen
    found = dict.fromkeys(checks, -math.inf)
    for part in seen.judged:
        mine = seen.rows.point[part.block.rows] == place.point
        for number in checks:
            found[number] = max(found[number], float(part.ratio[mine, number].max(initial=-np.inf)))
    return found
