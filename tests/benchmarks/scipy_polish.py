"""Polish of the reference's best points by a general optimiser of scipy (COBYQA).

It sees the evaluator as a black box: yearly cost as the objective, the largest ratio of every
check and rule as constraints. Every point it looks at is kept, so feasible ones count like others.
Recipes that might be cheap but showed no feasible point, because theirs lie between the cells, are
first led to one: the least excess over every check is sought the same way.
"""

from __future__ import annotations

import time
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import Evaluation, Place
from tests.benchmarks.reference import NEARLY, RecipeRecord, Reference, excess_of

FloatArray = NDArray[np.float64]

STARTS = 5
WITHIN = 1.15  # of the cheapest recipe: dearer ones cannot become the cheapest
CLOSE = 1.02
IDLE, GAINED = 2, 2e-4  # starts in a row that gained less than this share
AGAIN, AGAIN_GAINED = 4, 1e-5  # more runs from the best point while each gains this share
TRIES = 70  # evaluations per start
FIRST_RADIUS, LAST_RADIUS = 0.1, 1e-4  # of a coarse cell
MARGIN = 2e-7  # asked of ratios, so that the end of a polish is feasible
MISSED = 5.0
LED_STARTS, LED_TRIES, LED_RADIUS = 2, 60, 0.5
UNKNOWN_EXCESS = 1.0
LED_SIZE = 0.3  # of a coarse cell: where refinement of a recipe that was led to a point begins
MOST_LED = 12  # recipes, the least excess first
INSIDE = -2e-3  # excess at which a feasible point is good enough to start from


def polish_reference(reference: Reference) -> None:
    """Polish the five best points, in cells of their own, of every recipe that may come first.

    Recipes more than `CLOSE` times dearer than the cheapest stop after `IDLE` idle starts.
    """
    begun = time.process_time()
    spent = reference.seconds
    _lead_all(reference)
    for record in reference.ranked:
        if record.best > WITHIN * reference.best:
            continue
        before = record.best
        idle = 0
        for row in record.apart(record.feasible, STARTS):
            known = record.best
            _Polish(reference, record).run(record.x[row].copy())
            idle = idle + 1 if record.best > (1.0 - GAINED) * known else 0
            if idle >= IDLE and record.best > CLOSE * reference.best:
                break
        for _ in range(AGAIN):
            known = record.best
            if known > CLOSE * reference.best:
                break
            _Polish(reference, record).run(record.x[record.feasible[0]].copy())
            if record.best > (1.0 - AGAIN_GAINED) * known:
                break
        reference.progress(
            f"polished {'+'.join(record.grid.names)}: {before:,.1f} to {record.best:,.1f}"
        )
    reference.seconds = spent + time.process_time() - begun


def _lead_all(reference: Reference) -> None:
    """Lead recipes that may be cheap, but have not shown it, to a point that does; refine them.

    They have a nominal point within reach of the cheapest recipe and no feasible one.
    """
    near = WITHIN * reference.best
    lost = [r for r in reference.records if r.promise <= near and r.best > near]
    lost.sort(key=lambda record: float(_excess(record).min()))
    for record in lost[:MOST_LED]:
        before = record.best
        for row in _starts(reference, record):
            known = float(np.nan_to_num(record.full[row, 0], nan=UNKNOWN_EXCESS))
            _Polish(reference, record).lead(record.x[row].copy(), min(known, MISSED), near)
            if record.best <= near:
                record.open, record.calm, record.size = True, 0, LED_SIZE
                break
        name = "+".join(record.grid.names)
        reference.progress(f"led {name}: {before:,.1f} to {record.best:,.1f}")
    reference.refine()


def _starts(reference: Reference, record: RecipeRecord) -> list[int]:
    """Rows to lead from: least nominal excess, any nearly feasible one, least excess of all.

    The excess with all corners may be flat where one check rules; the nominal one is not.
    """
    ranked = np.argsort(record.nominal[:, 0], kind="stable")[:200]
    nearly = np.flatnonzero(record.nominal[:, 0] <= NEARLY)
    chosen = record.apart(ranked, LED_STARTS)
    if nearly.size:
        chosen.append(int(reference.rng.choice(nearly)))
    return list(dict.fromkeys([*chosen, int(np.argmin(_excess(record)))]))


def _excess(record: RecipeRecord) -> FloatArray:
    """Excess of each point with all corners; of the nominal state where none is known."""
    full = record.full[:, 0]
    if np.isnan(full).all():
        return record.nominal[:, 0]
    return np.where(np.isnan(full), np.inf, full)


class _Inside(Exception):  # noqa: N818 - a stop, no error
    """A feasible point has been found."""


class _Polish:
    """One run from one point."""

    def __init__(self, reference: Reference, record: RecipeRecord) -> None:
        self.reference, self.record = reference, record
        self.steps = record.grid.steps
        known = record.best if np.isfinite(record.best) else float(np.median(record.nominal[:, 1]))
        self.scale = known if np.isfinite(known) else 1e6
        self.seen: dict[bytes, tuple[float, FloatArray]] = {}
        self.near: list[Place] | None = None

    def run(self, start: FloatArray) -> None:
        """Minimise the cost; all points looked at go into the record."""
        from scipy.optimize import Bounds, NonlinearConstraint, minimize

        grid = self.record.grid
        options: Any = {
            "maxfev": TRIES, "initial_tr_radius": FIRST_RADIUS, "final_tr_radius": LAST_RADIUS,
        }  # fmt: skip
        minimize(
            lambda u: self._look(u)[0],
            start / self.steps,
            method="COBYQA",
            bounds=Bounds(grid.low / self.steps, grid.high / self.steps),
            constraints=[NonlinearConstraint(lambda u: self._look(u)[1], -np.inf, -MARGIN)],
            options=options,
        )

    def lead(self, start: FloatArray, excess: float, dearest: float) -> None:
        """Minimise the excess, a variable of its own that no check may exceed.

        A cost above ``dearest`` is an excess like others.
        """
        from scipy.optimize import Bounds, NonlinearConstraint, minimize

        grid = self.record.grid
        options: Any = {
            "maxfev": LED_TRIES, "initial_tr_radius": LED_RADIUS, "final_tr_radius": LAST_RADIUS,
        }  # fmt: skip
        low, high = np.append(grid.low / self.steps, -1.0), np.append(grid.high / self.steps, 10.0)

        def over(v: FloatArray) -> FloatArray:
            cost, ratios = self._look(v[:-1])
            if np.isfinite(dearest):
                ratios = np.append(ratios, np.log(cost * self.scale / dearest))
            if ratios.max() <= INSIDE:
                raise _Inside
            return np.asarray(ratios - v[-1], dtype=float)

        try:
            minimize(
                lambda v: float(v[-1]),
                np.append(start / self.steps, max(excess, 0.0)),
                method="COBYQA",
                bounds=Bounds(low, high),
                constraints=[NonlinearConstraint(over, -np.inf, 0.0)],
                options=options,
            )
        except _Inside:
            return

    def _look(self, u: FloatArray) -> tuple[float, FloatArray]:
        key = np.asarray(u, dtype=float).tobytes()
        if key not in self.seen:
            grid = self.record.grid
            x = grid.clip(np.asarray(u, dtype=float) * grid.steps)[None]
            seen = self.reference.evaluator.evaluate(grid.points(x), near=self.near)
            self.near = [Place(seen, 0)]
            cost = float(seen.total[0]) if np.isfinite(seen.total[0]) else 10.0 * self.scale
            result = np.array([[float(excess_of(seen)[0]), cost]])
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
