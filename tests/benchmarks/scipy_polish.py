"""Polish of the reference's best points by a general optimiser of scipy (COBYQA).

It sees the evaluator as a black box: yearly cost as the objective, the largest ratio of every
check and rule as constraints. Every point it looks at is kept, so feasible ones count like others.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import Evaluation, Place
from tests.benchmarks.reference import RecipeRecord, Reference

FloatArray = NDArray[np.float64]

STARTS = 5
WITHIN = 1.15  # of the cheapest recipe: dearer ones cannot become the cheapest
TRIES = 70  # evaluations per start
FIRST_RADIUS, LAST_RADIUS = 0.1, 1e-4  # of a coarse cell
MARGIN = 2e-7  # asked of ratios, so that the end of a polish is feasible
MISSED = 5.0


def polish_reference(reference: Reference) -> None:
    """Polish the five best points of every recipe that could become the cheapest."""
    begun = time.perf_counter()
    for record in reference.ranked:
        if record.best > WITHIN * reference.best:
            continue
        before = record.best
        for row in record.feasible[:STARTS]:
            _Polish(reference, record).run(record.x[row].copy())
        reference.progress(
            f"polished {'+'.join(record.grid.names)}: {before:,.1f} to {record.best:,.1f}"
        )
    reference.seconds += time.perf_counter() - begun


class _Polish:
    """One run from one point."""

    def __init__(self, reference: Reference, record: RecipeRecord) -> None:
        self.reference, self.record = reference, record
        self.scale = record.best
        self.seen: dict[bytes, tuple[float, FloatArray]] = {}
        self.near: list[Place] | None = None

    def run(self, start: FloatArray) -> None:
        """Minimise the cost; all points looked at go into the record."""
        from scipy.optimize import Bounds, NonlinearConstraint, minimize

        grid = self.record.grid
        steps = grid.steps
        options: Any = {
            "maxfev": TRIES, "initial_tr_radius": FIRST_RADIUS, "final_tr_radius": LAST_RADIUS,
        }  # fmt: skip

        def cost(u: FloatArray) -> float:
            return self._look(u)[0]

        minimize(
            cost,
            start / steps,
            method="COBYQA",
            bounds=Bounds(grid.low / steps, grid.high / steps),
            constraints=[NonlinearConstraint(lambda u: self._look(u)[1], -np.inf, -MARGIN)],
            options=options,
        )

    def _look(self, u: FloatArray) -> tuple[float, FloatArray]:
        key = np.asarray(u, dtype=float).tobytes()
        if key not in self.seen:
            grid = self.record.grid
            x = grid.clip(np.asarray(u, dtype=float) * grid.steps)[None]
            seen = self.reference.evaluator.evaluate(grid.points(x), near=self.near)
            self.near = [Place(seen, 0)]
            cost = float(seen.total[0]) if np.isfinite(seen.total[0]) else 10.0 * self.scale
            result = np.array([[float(np.nan_to_num(seen.violation[0], nan=50.0)), cost]])
            self.record.add(x, result)
            self.record.full[-1] = result[0]
            self.seen[key] = (cost / self.scale, _ratios(seen))
        return self.seen[key]


def _ratios(seen: Evaluation) -> FloatArray:
    """Largest ratio of every check, of reaching the pH and of the rules."""
    checks = np.max([part.ratio.max(axis=0) for part in seen.judged], axis=0)
    lost = any(bool((part.block.trim_missing | ~part.block.reached).any()) for part in seen.judged)
    rules = max((float(rule.ratio[0]) for rule in seen.rules), default=-1.0)
    ratios = np.concatenate([checks, [MISSED if lost else -1.0, rules]])
    return np.asarray(np.clip(np.nan_to_num(ratios, nan=MISSED), -2.0, MISSED), dtype=float)
