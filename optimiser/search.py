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
from optimiser.grids import Grid, chunks, ranked
from optimiser.next_points import moves, with_one_more
from optimiser.points import Points
from optimiser.polish import Track, polish
from optimiser.polish_step import Bounds
from optimiser.recipes import (
    Recipe,
    alkali_demand,
    grid,
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
SETTLED = 2
SETTLE_ROUNDS = 12
GRID_CHUNK = 600
MOST_CELLS = 2500  # of the first grids; a site with more of them is large
POLISHED_AT_ONCE_LARGE, GRID_CHUNK_LARGE = 12, 150
FAR_RATIO, NEAR_RATIO, ENOUGH_NEAR = 1.5, 0.5, 4
DEARER_LARGER = 1.15  # cost of a larger recipe's start over the plan so far, at most
OUT_OF_REACH = 3.0  # ratio that the grid's gaps cannot explain


@dataclass(slots=True)
class Findings:
    """What a search has seen: best track and nearest miss per recipe, counts, lowest values."""

    best: dict[tuple[str, ...], Track] = field(default_factory=dict)
    nearest: dict[tuple[str, ...], Track] = field(default_factory=dict)
    recipes_examined: set[tuple[str, ...]] = field(default_factory=set)
    recipes_ruled_out: set[tuple[str, ...]] = field(default_factory=set)
    recipes_allowed: int = 0
    most_reagents: int = 0
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
        self.seeds: dict[tuple[str, ...], Track] = {}
        self.thorough = True  # else a large site: coarser grids at one end, smaller batches
        self.progress = progress or (lambda _text: None)

    def run(self) -> Findings:
        """Propose, polish and settle; see the module."""
        most = min(
            self.evaluator.plant.treatment.most_reagents,
            len(self.evaluator.plant.treatment.reagents),
        )
        least = max(1, len(self.evaluator.plant.treatment.required))
        sizes = range(least, most + 1)
        self.findings.most_reagents = most
        self.findings.recipes_allowed = sum(len(recipes(self.evaluator.plant, s)) for s in sizes)
        first = [s for s in (1, 2) if least <= s <= most] or [least]
        with self.findings.timed("propose"):
            starts = self._propose(first)
        self._polish(starts)
        for size in range(first[-1] + 1, most + 1):
            self._extend(size)
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
        if sum(len(g) for _, g in grids if g is not None) > MOST_CELLS:
            self.thorough = False
            grids = [(r, grid(self.evaluator, r, self.bounds, demand, short=True)) for r in wanted]
        self.findings.recipes_ruled_out |= {self._names(r) for r, g in grids if g is None}
        self.progress(f"trying {len(grids)} recipes")
        return self._best_of([Grid(r, g) for r, g in grids if g is not None])

    def _best_of(self, grids: Sequence[Grid]) -> list[Place]:
        """Evaluate grids at the nominal state and return each recipe's best starts."""
        starts: list[Place] = []
        for chunk in chunks(grids, GRID_CHUNK if self.thorough else GRID_CHUNK_LARGE):
            if self._late():
                break
            joined = Points.join([g.points for g in chunk])
            near = [place for g in chunk for place in g.near]
            seen = self.evaluator.evaluate(joined, full=False, all_ends=False, near=near or None)
            self.findings.cells_examined += len(joined)
            self.findings.note_values(seen)
            begin = 0
            for one in chunk:
                rows = slice(begin, begin + len(one.points))
                begin += len(one.points)
                self.findings.recipes_examined.add(self._names(one.recipe))
                found = starts_of(one.points.ph, seen.total[rows], seen.violation[rows])
                if found:
                    self.seeds[self._names(one.recipe)] = Track(Place(seen, rows.start + found[0]))
                starts += [Place(seen, rows.start + k) for k in found]
        return starts

    def _names(self, recipe: Recipe) -> tuple[str, ...]:
        return tuple(self.evaluator.plant.names[i] for i in recipe.reagents)

    # -- polish ------------------------------------------------------------------------------------

    def _polish(self, starts: list[Place]) -> None:
        """Polish starts, the best at nominal states first; leave those that are hopeless."""
        order = ranked(starts)
        at_once = POLISHED_AT_ONCE if self.thorough else POLISHED_AT_ONCE_LARGE
        with self.findings.timed("polish"):
            for begin in range(0, len(order), at_once):
                if self._late() or (begin and self._hopeless(Track(order[begin]).merit)):
                    return
                self._polish_batch(order[begin : begin + at_once])

    def _polish_batch(self, starts: list[Place]) -> None:
        joined = Points.join([place.seen.points.take([place.point]) for place in starts])
        seen = self.evaluator.evaluate(joined, near=starts, slopes=True)
        self.findings.cells_examined += len(joined)
        self.findings.note_values(seen)
        places = [Place(seen, row) for row in range(len(joined))]
        for place in places:
            self._keep(Track(place))
        places = self._worth_polishing(seen, ranked(places))
        if self._late() or not places:
            return
        self.progress(f"polishing {len(places)} starts")
        tracks = polish(
            self.evaluator, places, self.solver, bounds=self.bounds, rival=self._best_total()
        )
        for track in tracks:
            self.findings.cells_examined += track.steps
            self._keep(track)
        self._late()

    def _keep(self, track: Track) -> None:
        self.findings.keep(recipe_of(self.evaluator.plant, track.point, 0), track)

    def _worth_polishing(self, seen: Evaluation, places: list[Place]) -> list[Place]:
        """Leave starts that miss by far where enough others are near, or a plan is known."""
        most = np.inf
        if np.count_nonzero(seen.violation < NEAR_RATIO) >= ENOUGH_NEAR:
            most = FAR_RATIO
        elif self.findings.feasible:
            most = OUT_OF_REACH
        return [place for place in places if seen.violation[place.point] <= most]

    def _best_total(self) -> float:
        found = self.findings.feasible
        return found[0][1].total if found else np.inf

    def _hopeless(self, merit: float) -> bool:
        """Whether starts of this merit may be left: a plan is known and they are far dearer."""
        found = self.findings.feasible
        return bool(found) and merit > 4.0 * found[0][1].total

    # -- larger recipes ----------------------------------------------------------------------------

    def _extend(self, size: int) -> None:
        """Try all recipes of a size from the best smaller points with one reagent more."""
        with self.findings.timed("propose"):
            grids = self._grown(size)
        self.progress(f"trying {len(grids)} recipes of {size}")
        for chunk in chunks(grids, GRID_CHUNK if self.thorough else GRID_CHUNK_LARGE):
            if self._late():
                return
            with self.findings.timed("propose"):
                starts = self._best_of(chunk)
            most = DEARER_LARGER * self._best_total()
            self._polish([place for place in starts if place.seen.total[place.point] <= most])

    def _grown(self, size: int) -> list[Grid]:
        """Points of every recipe of a size, the recipe with the most promising part first."""
        plant = self.evaluator.plant
        parts = self._parts(size - 1)
        demand = alkali_demand(self.evaluator)
        grids: list[tuple[float, Grid]] = []
        for recipe in recipes(plant, size):
            names = set(self._names(recipe))
            mine = [t for part, t in parts[0] if set(part) < names][:2]
            mine += [t for part, t in parts[1] if set(part) < names and t not in mine][:1]
            grown = [with_one_more(self.evaluator, self.bounds, recipe, t, demand) for t in mine]
            made = [(g, t) for g, t in zip(grown, mine, strict=True) if g is not None]
            if made:
                near = [track.place for points, track in made for _ in range(len(points))]
                joined = Points.join([points for points, _ in made])
                grids.append((mine[0].merit, Grid(recipe, joined, near)))
            elif mine:
                self.findings.recipes_ruled_out.add(self._names(recipe))
        return [one for _, one in sorted(grids, key=lambda item: item[0])]

    def _parts(self, size: int) -> tuple[list[_Kept], list[_Kept]]:
        """Recipes of one size, the best first, and those that miss with the nearest miss first."""
        known = self.findings
        tracks = self.seeds | known.best
        best = [item for item in tracks.items() if len(item[0]) == size]
        missing = [
            (recipe, track) for recipe, track in known.nearest.items() if len(recipe) == size
        ]
        missing = [item for item in missing if not known.best[item[0]].feasible]
        best.sort(key=lambda item: item[1].merit)
        missing.sort(key=lambda item: item[1].violation)
        return best, missing

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
            around = moves(track.point, self.bounds)
            if around is None or self._late():
                return track
            seen = self.evaluator.evaluate(around, near=[track.place] * len(around))
            self.findings.cells_examined += len(around)
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
