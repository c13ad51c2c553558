"""The search for the cheapest verified plan: propose, verify, polish, settle.

Recipes of one and two reagents are proposed on coarse grids of the true equilibrium, larger ones
from the best of their parts; the most promising are polished, and the winner is settled by trying
every move of one or two doses by 1 %. What this proves is `searched`: no cheaper plan was found.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import FEASIBLE_RATIO, Evaluation, Evaluator, Place
from optimiser.points import Points
from optimiser.polish import Track, polish
from optimiser.polish_step import PENALTY, Bounds
from optimiser.recipes import (
    Recipe,
    alkali_demand,
    grid,
    ladder,
    make_recipe,
    recipe_of,
    recipes,
    set_point_bounds,
    starts_of,
    trim_choices,
)
from optimiser.solver import SolverPort

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_Kept = tuple[tuple[str, ...], Track]

POLISHED_AT_ONCE = 40
SETTLE_STEP = 0.01
SETTLED = 2
SETTLE_ROUNDS = 12
GRID_CHUNK = 600
FAR_RATIO, NEAR_RATIO, ENOUGH_NEAR = 1.5, 0.5, 4


@dataclass(slots=True)
class Findings:
    """What a search has seen: best track and nearest miss per recipe, counts, lowest values."""

    best: dict[tuple[str, ...], Track] = field(default_factory=dict)
    nearest: dict[tuple[str, ...], Track] = field(default_factory=dict)
    recipes_examined: set[tuple[str, ...]] = field(default_factory=set)
    cells_examined: int = 0
    lowest: FloatArray | None = None
    lowest_point: list[Points | None] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)
    stopped_early: bool = False
    separators: tuple[dict[str, Any], ...] = ()
    """What became of each separator that the site may choose; empty where there is one."""
    whole: Evaluator | None = None
    """The evaluator on every sample, where a feed is many; costs of tracks are those on few."""
    certified: dict[tuple[str, ...], Evaluation] = field(default_factory=dict)
    """Recipes with what they are on every sample."""

    def keep(self, recipe: tuple[str, ...], track: Track) -> None:
        """Remember a track if it is the recipe's best, or its nearest miss."""
        known = self.best.get(recipe)
        better = known is None or (not track.feasible, track.merit) < (
            not known.feasible, known.merit,
        )  # fmt: skip
        if better:
            self.best[recipe] = track
        near = self.nearest.get(recipe)
        if near is None or track.violation < near.violation:
            self.nearest[recipe] = track

    def note_values(self, seen: Evaluation) -> None:
        """Remember the lowest value of every check and where it was seen."""
        n = len(seen.points)
        worst = np.zeros((n, seen.judged[0].value.shape[1]))
        ok = np.ones(n, dtype=bool)
        for part in seen.judged:
            point = seen.rows.point[part.block.rows]
            np.maximum.at(worst, point, part.value)
            ok[point[~part.block.reached | part.block.trim_missing]] = False
        for rule in seen.rules:
            ok &= rule.ratio <= FEASIBLE_RATIO
        if not ok.any() or worst.shape[1] == 0:
            return
        worst[~ok] = np.inf
        if self.lowest is None:
            self.lowest = np.full(worst.shape[1], np.inf)
            self.lowest_point = [None] * worst.shape[1]
        for check in range(worst.shape[1]):
            row = int(np.argmin(worst[:, check]))
            if worst[row, check] < self.lowest[check]:
                self.lowest[check] = worst[row, check]
                self.lowest_point[check] = seen.points.take([row])

    def timed(self, name: str) -> _Clock:
        """Add the time spent inside a with block to a name."""
        return _Clock(self.seconds, name)

    @property
    def feasible(self) -> list[tuple[tuple[str, ...], Track]]:
        """Feasible recipes, cheapest first."""
        ranked = [(r, t) for r, t in self.best.items() if t.feasible]
        return sorted(ranked, key=lambda item: item[1].total)


class Search:
    """One run over a site."""

    def __init__(
        self, evaluator: Evaluator, solver: SolverPort, *, time_limit_s: float = np.inf,
        progress: Callable[[str], None] | None = None,
    ) -> None:  # fmt: skip
        self.evaluator = evaluator
        self.solver = solver
        deadline = time.perf_counter() + time_limit_s
        self.bounds: Bounds = replace(set_point_bounds(evaluator), deadline=deadline)
        self.findings = Findings()
        self.progress = progress or (lambda _text: None)

    def run(self) -> Findings:
        """Propose, polish and settle; see the module."""
        most = min(
            self.evaluator.plant.treatment.most_reagents,
            len(self.evaluator.plant.treatment.reagents),
        )
        least = max(1, len(self.evaluator.plant.treatment.required))
        with self.findings.timed("propose"):
            starts = self._propose([s for s in (1, 2) if least <= s <= most])
        with self.findings.timed("polish"):
            self._polish(starts)
        for size in range(max(3, least), most + 1):
            if self._late():
                break
            with self.findings.timed("propose"):
                starts = self._extend(size)
            with self.findings.timed("polish"):
                self._polish(starts)
        with self.findings.timed("settle"):
            self._settle()
        return self.findings

    def _late(self) -> bool:
        late = self.bounds.late
        self.findings.stopped_early |= late
        return late

    # -- propose -----------------------------------------------------------------------------------

    def _propose(self, sizes: Sequence[int]) -> list[Place]:
        plant = self.evaluator.plant
        demand = alkali_demand(self.evaluator)
        wanted = [r for size in sizes for r in recipes(plant, size)]
        grids = [(r, grid(self.evaluator, r, self.bounds, demand)) for r in wanted]
        self.progress(f"trying {len(grids)} recipes")
        return self._best_of([(r, g) for r, g in grids if g is not None])

    def _best_of(self, grids: Sequence[tuple[Recipe, Points]]) -> list[Place]:
        """Evaluate grids at the nominal state and return each recipe's best starts."""
        starts: list[Place] = []
        for chunk in _chunks(grids, GRID_CHUNK):
            if self._late():
                break
            joined = Points.join([g for _, g in chunk])
            seen = self.evaluator.evaluate(joined, full=False)
            self.findings.cells_examined += len(joined)
            self.findings.note_values(seen)
            begin = 0
            for recipe, points in chunk:
                rows = slice(begin, begin + len(points))
                begin += len(points)
                self.findings.recipes_examined.add(self._names(recipe))
                found = starts_of(points.ph, seen.total[rows], seen.violation[rows])
                starts += [Place(seen, rows.start + k) for k in found]
        return starts

    def _merit(self, seen: Evaluation) -> FloatArray:
        total = np.where(np.isfinite(seen.total), seen.total, np.inf)
        miss = np.clip(seen.violation, 0.0, 60.0)
        return np.asarray(total * (1.0 + PENALTY * miss), dtype=float)

    def _names(self, recipe: Recipe) -> tuple[str, ...]:
        return tuple(self.evaluator.plant.names[i] for i in recipe.reagents)

    # -- polish ------------------------------------------------------------------------------------

    def _polish(self, starts: list[Place]) -> None:
        if not starts:
            return
        joined = Points.join([place.seen.points.take([place.point]) for place in starts])
        seen = self.evaluator.evaluate(joined, near=starts, slopes=True)
        self.findings.cells_examined += len(joined)
        self.findings.note_values(seen)
        for row in range(len(joined)):
            self._keep(Track(Place(seen, row)))
        order = self._worth_polishing(seen, np.argsort(self._merit(seen), kind="stable"))
        for begin in range(0, order.size, POLISHED_AT_ONCE):
            if self._late():
                return
            batch = order[begin : begin + POLISHED_AT_ONCE]
            if begin and self._hopeless(float(self._merit(seen)[batch[0]])):
                return
            self.progress(f"polishing {batch.size} starts")
            tracks = polish(
                self.evaluator, [Place(seen, int(i)) for i in batch], self.solver,
                bounds=self.bounds, rival=self._best_total(),
            )  # fmt: skip
            for track in tracks:
                self.findings.cells_examined += track.steps
                self._keep(track)
            if self._late():
                return

    def _keep(self, track: Track) -> None:
        self.findings.keep(recipe_of(self.evaluator.plant, track.point, 0), track)

    def _worth_polishing(self, seen: Evaluation, order: IntArray) -> IntArray:
        """Leave starts that miss by far where enough others are near."""
        far = seen.violation[order] > FAR_RATIO
        if np.count_nonzero(seen.violation < NEAR_RATIO) < ENOUGH_NEAR or not far.any():
            return order
        return order[~far]

    def _best_total(self) -> float:
        found = self.findings.feasible
        return found[0][1].total if found else np.inf

    def _hopeless(self, merit: float) -> bool:
        """Whether starts of this merit may be left: a plan is known and they are far dearer."""
        found = self.findings.feasible
        return bool(found) and merit > 4.0 * found[0][1].total

    # -- larger recipes ----------------------------------------------------------------------------

    def _extend(self, size: int) -> list[Place]:
        """Starts of larger recipes: the best smaller points with one more reagent."""
        plant = self.evaluator.plant
        parts = self._parts(size - 1)
        demand = alkali_demand(self.evaluator)
        grids: list[tuple[Recipe, Points]] = []
        for recipe in recipes(plant, size):
            names = set(self._names(recipe))
            mine = [t for part, t in parts[0] if set(part) < names][:2]
            mine += [t for part, t in parts[1] if set(part) < names and t not in mine][:1]
            made = [p for t in mine if (p := self._with_one_more(recipe, t, demand)) is not None]
            if made:
                grids.append((recipe, Points.join(made)))
        self.progress(f"trying {len(grids)} recipes of {size}")
        return self._best_of(grids)

    def _parts(self, size: int) -> tuple[list[_Kept], list[_Kept]]:
        """Recipes of one size, the best first, and those that miss with the nearest miss first."""
        known = self.findings
        best = [item for item in known.best.items() if len(item[0]) == size]
        missing = [(recipe, known.nearest[recipe]) for recipe, track in best if not track.feasible]
        best.sort(key=lambda item: item[1].merit)
        missing.sort(key=lambda item: item[1].violation)
        return best, missing

    def _with_one_more(
        self, recipe: Recipe, track: Track, demand: dict[float, float]
    ) -> Points | None:
        plant = self.evaluator.plant
        old = track.point
        known = {plant.index[n] for n in recipe_of(plant, old, 0)}
        added = next(i for i in recipe.reagents if i not in known)
        full = make_recipe(plant, recipe.reagents)
        controller = -1 if full.controller is None else full.controller
        ph = float(old.ph[0])
        need = demand[min(demand, key=lambda p: abs(p - ph))]
        base = old.doses[0].copy()
        rows = []
        if controller == added:
            # the old controller becomes a paced bulk reagent at shares of its own dose
            previous = int(old.controller[0])
            if previous < 0:
                rows.append(base)
            else:
                fed = float(track.place.seen.priced.doses[track.place.point, previous])
                for share in (0.5, 0.85, 0.97):
                    row = base.copy()
                    row[previous] = max(share * fed, float(self.bounds.dose_low[previous]))
                    rows.append(row)
        else:
            for dose in ladder(self.evaluator, full, added, need, self.bounds, short=True):
                row = base.copy()
                row[added] = dose
                rows.append(row)
        if not rows:
            return None
        n = len(rows)
        return Points(
            np.array(rows), np.full(n, controller, dtype=np.int64), np.full(n, ph),
            np.full(n, old.trim[0], dtype=np.int64),
        )  # fmt: skip

    # -- settle ------------------------------------------------------------------------------------

    def _settle(self) -> None:
        """Try other trim reagents and moves of one or two doses by 1 % on the best recipes."""
        for recipe, track in self.findings.feasible[:SETTLED]:
            best = self._other_trims(track)
            best = self._settle_one(best)
            self.findings.keep(recipe, best)

    def _other_trims(self, track: Track) -> Track:
        point = track.point
        if point.trim[0] < 0:
            return track
        way = self.evaluator.plant.reagents[point.trim[0]].ph_control
        others = [i for i in trim_choices(self.evaluator, way) if i != point.trim[0]]
        best = track
        if others:
            starts = Points.join(
                [Points(point.doses, point.controller, point.ph, np.array([i])) for i in others]
            )
            tried = polish(
                self.evaluator, starts, self.solver, bounds=self.bounds, steps=6,
                near=[track.place] * len(others),
            )  # fmt: skip
            for other in tried:
                if other.feasible and other.total < best.total:
                    best = other
        return best

    def _settle_one(self, track: Track) -> Track:
        for _ in range(SETTLE_ROUNDS):
            moves = _moves(track.point, self.bounds)
            if moves is None or self._late():
                return track
            seen = self.evaluator.evaluate(moves, near=[track.place] * len(moves))
            self.findings.cells_examined += len(moves)
            total = np.where(seen.feasible, seen.total, np.inf)
            row = int(np.argmin(total))
            if not total[row] < track.total * (1.0 - 1e-7):
                return track
            start = Track(Place(seen, row))
            polished = polish(
                self.evaluator, start.point, self.solver, bounds=self.bounds, steps=6,
                radius=0.05, near=[start.place],
            )[0]  # fmt: skip
            track = polished if polished.feasible and polished.total < start.total else start
        return track


@dataclass(slots=True)
class _Clock:
    """Adds the time spent inside a with block to a name."""

    seconds: dict[str, float]
    name: str
    begun: float = 0.0

    def __enter__(self) -> None:
        self.begun = time.perf_counter()

    def __exit__(self, *_: object) -> None:
        spent = time.perf_counter() - self.begun
        self.seconds[self.name] = self.seconds.get(self.name, 0.0) + spent


def _moves(point: Points, bounds: Bounds) -> Points | None:
    """Every move of one or two of set point and paced doses by 1 % (set point: 0.02)."""
    columns = [int(j) for j in np.flatnonzero(point.doses[0] > 0.0)]
    axes = ([-1] if point.controller[0] >= 0 else []) + columns
    steps = [(a, s) for a in axes for s in (-1.0, 1.0)]
    combos = [(s,) for s in steps] + [
        (s, t) for i, s in enumerate(steps) for t in steps[i + 1 :] if s[0] != t[0]
    ]
    doses, ph = [], []
    for combo in combos:
        row, here = point.doses[0].copy(), float(point.ph[0])
        for axis, sign in combo:
            if axis < 0:
                here += 2.0 * SETTLE_STEP * sign
            else:
                row[axis] *= 1.0 + SETTLE_STEP * sign
        controller = int(point.controller[0])
        low, high = bounds.ph_low(controller, row), bounds.ph_high(controller, row)
        inside = controller < 0 or low <= here <= high
        kept = row[columns]
        ok = (kept >= bounds.dose_low[columns]).all() and (kept <= bounds.dose_high[columns]).all()
        if inside and ok:
            doses.append(row)
            ph.append(here)
    if not ph:
        return None
    n = len(ph)
    return Points(
        np.array(doses), np.repeat(point.controller, n), np.array(ph), np.repeat(point.trim, n)
    )


def _chunks(grids: Sequence[tuple[Recipe, Points]], size: int) -> list[list[tuple[Recipe, Points]]]:
    chunks: list[list[tuple[Recipe, Points]]] = []
    count = 0
    for item in grids:
        if not chunks or count + len(item[1]) > size:
            chunks.append([])
            count = 0
        chunks[-1].append(item)
        count += len(item[1])
    return chunks
