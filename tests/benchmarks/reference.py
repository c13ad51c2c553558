"""The exhaustive reference: every recipe's cells examined and refined.

Owns which cells are looked at; `optimiser.evaluation` alone says whether a point is feasible and
what it costs. Nothing of the product's own search or polish is used here.

Cheap steps come before dear ones. Recipes of one and two reagents are laid on dense grids of
nominal states, those of three on sparse ones that are refined twice around their most promising
cells. A nominal point costs no more than the same point with all corners, so a recipe whose
cheapest nearly feasible nominal point is `DEAR` times dearer than the cheapest feasible point
known is left; all others are judged with all corners and ends and refined until settled.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import product

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator
from optimiser.points import Points
from tests.benchmarks.recipe_grid import RecipeGrid, all_grids

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LEAST_FEASIBLE = 20  # feasible points that a feasible recipe must show before it is left
SETTLED = 0.002  # change of the best cost below which a recipe is settled
SETTLED_ROUNDS = 2  # in a row
FINEST, FINEST_AFAR = 1.0 / 12.0, 0.3  # of a coarse cell: a recipe is not settled before
AFAR = 1.06  # of the cheapest: dearer recipes settle at `FINEST_AFAR`
DEAR = 1.15  # recipes that much above the cheapest are not refined
COARSELY_DEAR = 1.5  # the same before a recipe's cells have been refined
NEARLY = 0.1  # nominal violation of a point whose cost still tells what a recipe may cost
FULL_BELOW = 1.5  # full corners only below this multiple of the recipe's best cost
MOST_ROUNDS = 20
HOPELESS_ROUNDS = 6  # without a feasible point
HOPELESS_VIOLATION = 1.0
CENTRES, FIRST_CENTRES = 2, 4
SCATTERED = 12
FULL_AT_ONCE = 8
CHUNK = 1600
SPARSE_FROM = 3  # reagents from which the first grid is sparse
NOMINAL_ROUNDS = 2  # refinements of sparse grids on nominal states alone
LOST = 50.0  # excess of a point that could not be solved
SEED = 20


@dataclass(eq=False)
class RecipeRecord:
    """All points of a recipe: nominal and full violation and cost (nan: not examined in full)."""

    grid: RecipeGrid
    x: FloatArray
    nominal: FloatArray  # (points, 2): violation, cost
    full: FloatArray  # (points, 2)
    size: float = 1.0  # of refined cells, in coarse ones
    rounds: int = 0
    calm: int = 0  # rounds in a row that changed the best cost by less than SETTLED
    history: list[float] = field(default_factory=list)
    open: bool = True

    @classmethod
    def of(cls, grid: RecipeGrid) -> RecipeRecord:
        """A record without points."""
        return cls(grid, np.zeros((0, len(grid.axes))), np.zeros((0, 2)), np.zeros((0, 2)))

    def add(self, x: FloatArray, nominal: FloatArray) -> None:
        """Put nominal results of new points."""
        self.x = np.concatenate([self.x, x])
        self.nominal = np.concatenate([self.nominal, nominal])
        self.full = np.concatenate([self.full, np.full((x.shape[0], 2), np.nan)])

    @property
    def feasible(self) -> IntArray:
        """Rows that are feasible with all corners and ends, cheapest first."""
        rows = np.flatnonzero((self.full[:, 0] <= FEASIBLE_RATIO) & np.isfinite(self.full[:, 1]))
        return rows[np.argsort(self.full[rows, 1], kind="stable")]

    @property
    def best(self) -> float:
        """Least cost of a feasible point, inf where none is known."""
        rows = self.feasible
        return float(self.full[rows[0], 1]) if rows.size else np.inf

    @property
    def promise(self) -> float:
        """Cost of the cheapest nearly feasible nominal point; minus infinity where there is none.

        A recipe without one is not judged by its cost.
        """
        near = self.nominal[:, 0] <= NEARLY
        return float(self.nominal[near, 1].min()) if near.any() else -np.inf

    @property
    def at_once(self) -> int:
        """Points to examine in full at once: more while none is known to be feasible."""
        return FULL_AT_ONCE if self.feasible.size else 2 * FULL_AT_ONCE

    @property
    def examined(self) -> int:
        """Points examined in full."""
        return int((~np.isnan(self.full[:, 0])).sum())

    def fresh(self, x: FloatArray) -> FloatArray:
        """Coordinates not seen before, clipped to the grid."""
        x = self.grid.clip(x)
        keys = np.round(x / self.grid.steps, 6)
        known = {tuple(row) for row in np.round(self.x / self.grid.steps, 6)}
        kept = []
        for row, key in enumerate(map(tuple, keys)):
            if key not in known:
                known.add(key)
                kept.append(row)
        return x[kept]

    # -- what to examine in full -------------------------------------------------------------------

    def candidates(self, most: int) -> IntArray:
        """Nominally feasible rows worth all corners, the most promising first.

        The nominal cost and violation bound the full ones from below; what corners add is guessed
        from the nearest point that has been examined.
        """
        ceiling = self.best if self.feasible.size >= LEAST_FEASIBLE else FULL_BELOW * self.best
        open_rows = (
            np.isnan(self.full[:, 0])
            & (self.nominal[:, 0] <= FEASIBLE_RATIO)
            & (self.nominal[:, 1] < ceiling)
        )
        rows = np.flatnonzero(open_rows)
        if not rows.size:
            return rows
        violation, cost = self._guess(rows)
        order = np.lexsort((cost, np.maximum(violation, 0.02)))
        half = most // 2 + 1
        cheap = rows[np.lexsort((cost, violation > 0.1))][:half]
        if not self.feasible.size:
            # where one check is out of reach all over, neither cost nor excess leads the way
            anywhere = np.random.default_rng(SEED + self.examined).permutation(rows)[:half]
            cheap = np.concatenate([cheap[: half // 2], anywhere])
        return np.array(list(dict.fromkeys([*cheap, *rows[order]]))[:most], dtype=np.int64)

    def _guess(self, rows: IntArray) -> tuple[FloatArray, FloatArray]:
        """Excess and cost with all corners, as the nearest examined point suggests."""
        known = np.flatnonzero(np.isfinite(self.full).all(axis=1))
        here = self.nominal[rows]
        if not known.size:
            return here[:, 0], here[:, 1]
        scaled = self.x / self.grid.steps
        apart = np.abs(scaled[rows][:, None] - scaled[known][None]).sum(axis=2)
        near = known[np.argmin(apart, axis=1)]
        more = self.full[near] - self.nominal[near]
        return here[:, 0] + more[:, 0], here[:, 1] + more[:, 1]

    # -- refinement --------------------------------------------------------------------------------

    def cells(self, rng: np.random.Generator) -> FloatArray:
        """New points around the centres: a lattice and some scattered inside it."""
        width = self.size * self.grid.steps
        count = width.size
        lattice = np.array(list(product((-1.0, 0.0, 1.0), repeat=count)))
        made = []
        for row in self._centres():
            inside = rng.uniform(-1.0, 1.0, (SCATTERED if count > 1 else 2, count))
            made.append(self.x[row] + np.concatenate([lattice, inside]) * width)
        return self.fresh(np.concatenate(made)) if made else np.zeros((0, count))

    def _centres(self) -> list[int]:
        most = FIRST_CENTRES if self.rounds < 2 else CENTRES
        chosen = self.apart(self.feasible, most)
        miss, total = self.full[:, 0].copy(), self.full[:, 1].copy()
        unknown = np.flatnonzero(np.isnan(miss))
        if unknown.size:
            miss[unknown], total[unknown] = self._guess(unknown)
        # the point that would be best if a little violation could be repaired
        merit = np.where(np.isfinite(total), total, np.inf) * (1.0 + np.maximum(miss, 0.0))
        if chosen:
            return list(dict.fromkeys([*chosen, int(np.argmin(merit))]))
        order = np.argsort(merit if not self.examined else miss, kind="stable")
        return self.apart(order[:200], most)

    def apart(self, ranked: IntArray, most: int) -> list[int]:
        """The first of ranked rows and the next ones that are not in its cell."""
        chosen: list[int] = []
        scaled = self.x / (self.grid.steps * self.size)
        for row in ranked:
            gaps = [np.abs(scaled[row] - scaled[c]).max() for c in chosen]
            if all(gap > 1.5 for gap in gaps):
                chosen.append(int(row))
            if len(chosen) == most:
                break
        return chosen

    def close_round(self, cheapest: float) -> None:
        """Shrink the cells and tell whether the recipe needs more."""
        self.rounds += 1
        known = self.history[-1] if self.history else np.inf
        self.history.append(self.best)
        change = 1.0 - self.best / known if np.isfinite(known) else np.inf
        self.calm = self.calm + 1 if change < SETTLED else 0
        if min(self.best, self.promise) > DEAR * cheapest:
            self.open = False
            return
        if not self.feasible.size:
            self.size *= 0.6
            miss = self.nominal[:, 0].copy()
            examined = ~np.isnan(self.full[:, 0])
            miss[examined] = self.full[examined, 0]
            worst = self.rounds >= 3 and np.nanmin(miss) > HOPELESS_VIOLATION
            self.open = not worst and self.rounds < HOPELESS_ROUNDS
            return
        if change < SETTLED:
            self.size *= 0.6
        enough = self.feasible.size >= LEAST_FEASIBLE
        finest = FINEST if self.best <= AFAR * cheapest else FINEST_AFAR
        settled = self.calm >= SETTLED_ROUNDS and self.size < finest
        self.open = not (enough and settled) and self.rounds < MOST_ROUNDS


class Reference:
    """The exhaustive reference of one site; ``density`` 2 halves the cells of every first grid."""

    def __init__(
        self, evaluator: Evaluator, *, largest: int = 3, density: float = 1.0,
        progress: Callable[[str], None] | None = None,
    ) -> None:  # fmt: skip
        self.evaluator = evaluator
        self.density = density
        self.records = [RecipeRecord.of(grid) for grid in all_grids(evaluator, largest)]
        self.rng = np.random.default_rng(SEED)
        self.progress = progress or (lambda _text: None)
        self.seconds = 0.0  # of processor time

    def run(self) -> None:
        """Examine the first grids, then refine recipe by recipe until each is settled."""
        begun = time.process_time()
        sparse = [r for r in self.records if len(r.grid.axes) >= SPARSE_FROM]
        dense = [r for r in self.records if len(r.grid.axes) < SPARSE_FROM]
        self._nominal([(r, r.fresh(r.grid.coarse(self.density))) for r in dense])
        self._full(dense, passes=1)
        self._full(self._within(COARSELY_DEAR, dense), passes=2)
        self._nominal([(r, r.fresh(r.grid.coarse(0.5 * self.density))) for r in sparse])
        for _ in range(NOMINAL_ROUNDS):
            going = self._within(COARSELY_DEAR, sparse)
            self._nominal([(r, r.cells(self.rng)) for r in going])
        self._full(self._within(DEAR, sparse), passes=2)
        left = {id(r) for r in (*self._within(COARSELY_DEAR, dense), *self._within(DEAR, sparse))}
        for record in self.records:
            record.open = id(record) in left
        self.seconds += time.process_time() - begun
        self.refine()

    def refine(self) -> None:
        """Refine open recipes round by round until each is settled or left."""
        begun = time.process_time()
        for turn in range(MOST_ROUNDS):
            self._report(f"round {turn}", begun)
            going = [r for r in self.records if r.open]
            if not going:
                break
            self._nominal([(r, r.cells(self.rng)) for r in going])
            self._full(going, passes=2)
            for record in going:
                record.close_round(self.best)
        self.seconds += time.process_time() - begun

    def _within(self, factor: float, records: Sequence[RecipeRecord]) -> list[RecipeRecord]:
        return [r for r in records if r.promise <= factor * self.best]

    @property
    def best(self) -> float:
        """Least cost of any feasible point."""
        return min((r.best for r in self.records), default=np.inf)

    @property
    def ranked(self) -> list[RecipeRecord]:
        """Feasible recipes, cheapest first."""
        return sorted((r for r in self.records if np.isfinite(r.best)), key=lambda r: r.best)

    def _report(self, what: str, begun: float) -> None:
        points = sum(r.x.shape[0] for r in self.records)
        full = sum(r.examined for r in self.records)
        going = sum(r.open for r in self.records)
        self.progress(
            f"{what}: {len(self.ranked)} feasible of {len(self.records)} recipes, {going} open, "
            f"{points} points, {full} in full, best {self.best:,.0f}, "
            f"{time.process_time() - begun:.0f} s"
        )

    def _nominal(self, wanted: Sequence[tuple[RecipeRecord, FloatArray]]) -> None:
        parts = [(r, x) for r, x in wanted if x.shape[0]]
        if not parts:
            return
        points = Points.join([r.grid.points(x) for r, x in parts])
        values = self.judge(points, full=False)
        begin = 0
        for record, x in parts:
            end = begin + x.shape[0]
            record.add(x, values[begin:end])
            begin = end

    def _full(self, records: Sequence[RecipeRecord], *, passes: int) -> None:
        for _ in range(passes):
            picked = [(r, rows) for r in records if (rows := r.candidates(r.at_once)).size]
            if not picked:
                return
            points = Points.join([r.grid.points(r.x[rows]) for r, rows in picked])
            values = self.judge(points, full=True)
            begin = 0
            for record, rows in picked:
                record.full[rows] = values[begin : begin + rows.size]
                begin += rows.size

    def judge(self, points: Points, *, full: bool) -> FloatArray:
        """Violation and cost of points, (points, 2), in batches."""
        size = CHUNK if not full else CHUNK // 16
        made = []
        for begin in range(0, len(points), size):
            some = points.take(np.arange(begin, min(begin + size, len(points))))
            seen = self.evaluator.evaluate(some, full=full, all_ends=full)
            cost = np.where(np.isfinite(seen.total), seen.total, np.inf)
            made.append(np.column_stack([excess_of(seen), cost]))
        return np.concatenate(made)


def excess_of(seen: Evaluation) -> FloatArray:
    """What points miss, (points,): the largest ratio where they are feasible, else a sum.

    The sum is of the positive ratios of all checks and rules at their worst corner, so that it
    falls when any of them does; it is no less than the largest.
    """
    worst = np.full((len(seen.points), seen.judged[0].ratio.shape[1]), -np.inf)
    for part in seen.judged:
        np.maximum.at(worst, seen.rows.point[part.block.rows], part.ratio)
    total = np.maximum(np.nan_to_num(worst, nan=LOST, neginf=0.0), 0.0).sum(axis=1)
    for rule in seen.rules:
        total += np.maximum(np.nan_to_num(rule.ratio, nan=LOST), 0.0)
    largest = np.nan_to_num(seen.violation, nan=LOST)
    return np.asarray(
        np.where(largest <= FEASIBLE_RATIO, largest, np.maximum(largest, total)), dtype=float
    )
