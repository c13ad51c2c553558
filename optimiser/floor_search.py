"""Where a metal's residual is lowest: a grid over set point and dose, then ever smaller steps.

Owns which reagents stand for a ligand family, the grid and its refinement; what the lowest states
mean is `optimiser.floors`.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from chemistry.titration import StartValues
from optimiser.evaluation import Evaluator
from optimiser.points import Block, Points
from optimiser.quality import Judged
from optimiser.recipes import set_point_bounds

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

FAMILY_LIGANDS = {
    "hydroxide": "", "carbonate": "CO3-2", "sulfide": "HS-", "chloride": "Cl-", "sulfate": "SO4-2",
}  # fmt: skip
"""Ligand families that floors are told for, with the component that a reagent must bring."""

LARGEST_DOSE_MG_PER_L = 5000.0
LEAST_DOSE_MG_PER_L = 1.0
SET_POINT_STEP = 0.5
COARSE_SET_POINT_STEP = 1.0  # where a dose is searched too
DOSES_ON_GRID = 7
REFINING_ROUNDS = 12
LEAST_SET_POINT_STEP = 0.02
NEGLIGIBLE_MG_PER_L = 1e-6  # residuals below this are not refined
STARTS = 2  # ways of dosing whose lowest grid point is refined
# What a lower residual is worth: one more e-fold of dose must take the residual down by 0.3 %.
DOSE_WEIGHT = 0.003
SMALLEST_MG_PER_L = 1e-15
ALKALINE_FEED_PH = 8.5
UNREACHED = 1e6
# Counter-ions that leave a metal alone: reagents that differ in them alone stand for one another.
SPECTATORS = ("H+", "Na+", "K+")


@dataclass(frozen=True, slots=True)
class Way:
    """How a family is dosed: who holds the pH (-1 nobody) and what is paced (-1 nothing)."""

    controller: int
    paced: int


@dataclass(frozen=True, eq=False)
class Lowest:
    """The lowest state found for a metal with a family: its point and what was seen there.

    ``edges`` tells which edges of what is allowed the point lies on: ``low``, ``high``, ``dose``.
    """

    metal: int
    family: str
    point: Points
    block: Block
    judged: Judged
    edges: tuple[str, ...]


class FloorSearch:
    """Searches a site for its lowest residuals."""

    def __init__(self, evaluator: Evaluator) -> None:
        self.evaluator = evaluator
        self.plant = evaluator.plant
        self.judge = evaluator.judge
        self.bounds = set_point_bounds(evaluator)
        self.allowed = [self.plant.index[name] for name in self.plant.treatment.reagents]

    # -- which reagents --------------------------------------------------------------------------

    def families(self) -> tuple[str, ...]:
        """Families that the allowed reagents bring."""
        return tuple(family for family in FAMILY_LIGANDS if self.ways(family))

    def ways(self, family: str) -> list[Way]:
        """Ways of dosing a family, one for each kind of counter-ion."""
        ligand = FAMILY_LIGANDS[family]
        movers = self._controllers()
        if not ligand:
            return [Way(c, -1) for c in movers]
        brings = self._one_of_a_kind(
            i
            for i in self.allowed
            if ligand in self.plant.reagents[i].components
            and self.plant.reagents[i].family in (family, "acid")
        )
        if not brings:
            return []
        alone = [Way(i, -1) for i in brings if self.plant.reagents[i].ph_control]
        beside = [Way(c, p) for c, p in product(movers, brings) if c != p]
        uncontrolled = [Way(-1, p) for p in brings if not self._any_mover()]
        return [*beside, *alone, *uncontrolled]

    def _controllers(self) -> list[int]:
        """Hydroxides of each kind, and acids where the feed is alkaline."""
        chosen = [i for i in self.allowed if self.plant.reagents[i].family == "hydroxide"]
        if self.plant.feed.ph > ALKALINE_FEED_PH:
            acids = [i for i in self.allowed if self.plant.reagents[i].ph_control == "down"]
            chosen = [*(self._plain(acids) or acids), *chosen]
        chosen.sort(key=lambda i: self.plant.reagents[i].control_rank)
        return self._one_of_a_kind(chosen)

    def _plain(self, acids: Sequence[int]) -> list[int]:
        """Acids whose anion is the ligand of no metal that chloride does not bind as well."""
        binding = {"CO3-2", "SO4-2", "HS-"}
        return [i for i in acids if not binding & set(self.plant.reagents[i].components)]

    def _any_mover(self) -> bool:
        return any(self.plant.reagents[i].ph_control for i in self.allowed)

    def _one_of_a_kind(self, chosen: Iterable[int]) -> list[int]:
        kept: dict[frozenset[str], int] = {}
        for i in chosen:
            kind = frozenset(self.plant.reagents[i].components) - frozenset(SPECTATORS)
            kept.setdefault(kind, i)
        return list(kept.values())

    # -- states ----------------------------------------------------------------------------------

    def look(self, points: Points, near: StartValues | None = None) -> tuple[Block, Judged]:
        """States of points, gas kept and scale formed, and what leaves the plant there."""
        rows = self.plant.corners(points, full=False)
        warm = _Near(near) if near is not None else None
        block = self.plant.blocks(points, rows, all_ends=False, warm=warm)[0]
        return block, self.judge.judge(points, rows, block)

    def allowed_states(self, points: Points, block: Block) -> BoolArray:
        """Which states are reached inside the set-point window and below the dose ceilings."""
        low, high = self.window(points)
        ph = block.state.ph
        free = points.controller < 0
        inside = free | ((ph >= low - 1e-6) & (ph <= high + 1e-6))
        ceiling = self.evaluator.ceiling[np.maximum(points.controller, 0)]
        return np.asarray(block.reached & inside & (free | (block.dose <= ceiling)), dtype=bool)

    def window(self, points: Points) -> tuple[FloatArray, FloatArray]:
        """Lowest and highest set point that points may have, each (points,)."""
        pairs = list(zip(points.controller, points.doses, strict=True))
        low = np.array([self.bounds.ph_low(int(c), d) for c, d in pairs])
        high = np.array([self.bounds.ph_high(int(c), d) for c, d in pairs])
        return low, np.maximum(high, low)

    def top_dose(self, paced: int) -> float:
        """Largest dose tried of a paced reagent. [mg/L]"""
        return float(min(self.evaluator.ceiling[paced], LARGEST_DOSE_MG_PER_L))

    def points_of(self, way: Way, ph: FloatArray, dose: FloatArray) -> Points:
        """Points of one way: set points and paced doses, each (n,)."""
        doses = np.zeros((ph.size, len(self.plant.names)))
        if way.paced >= 0:
            doses[:, way.paced] = dose
        controller = np.full(ph.size, way.controller)
        return Points(doses, controller, ph.copy(), np.full(ph.size, -1))

    # -- search ----------------------------------------------------------------------------------

    def lowest(self, family: str, metals: Sequence[int]) -> list[Lowest]:
        """The lowest states of some metals with a family; metals that no state shows are left out.

        A grid finds the valleys, then every metal's best points walk to the lowest neighbour with
        steps that halve where none is lower, all metals in one batch.
        """
        grid = Points.join([self._grid(way) for way in self.ways(family)])
        block, judged = self.look(grid)
        good = self.allowed_states(grid, block)
        if not good.any():
            return []
        value = self.value(grid, block, judged, good)
        starts = [(m, k) for m in metals for k in self._starts(grid, value[:, m]) if good[k]]
        walk = _Walk(self, grid.take([k for _, k in starts]), [m for m, _ in starts])
        walk.settle(StartValues.of(block.state).rows(np.array([k for _, k in starts])))
        return [self._best(family, metal, walk) for metal in dict.fromkeys(m for m, _ in starts)]

    def _starts(self, grid: Points, value: FloatArray) -> list[int]:
        """Lowest points of the grid, each of another way."""
        chosen: dict[tuple[int, ...], int] = {}
        for k in np.argsort(value, kind="stable"):
            way = (int(grid.controller[k]), *np.flatnonzero(grid.doses[k] > 0.0).tolist())
            chosen.setdefault(way, int(k))
            if len(chosen) == STARTS:
                break
        return list(chosen.values())

    def _grid(self, way: Way) -> Points:
        """A coarse grid of one way."""
        top = self.top_dose(way.paced) if way.paced >= 0 else 0.0
        doses = np.geomspace(LEAST_DOSE_MG_PER_L, top, DOSES_ON_GRID) if top else np.zeros(1)
        probe = self.points_of(way, np.zeros(1), doses[:1])
        low, high = (float(end[0]) for end in self.window(probe))
        if way.controller < 0:
            return self.points_of(way, np.full(doses.size, low), doses)
        step = COARSE_SET_POINT_STEP if way.paced >= 0 else SET_POINT_STEP
        ph = np.linspace(low, high, int(np.ceil((high - low) / step)) + 1)
        pairs = np.array(list(product(ph, doses)))
        return self.points_of(way, pairs[:, 0], pairs[:, 1])

    def value(self, points: Points, block: Block, judged: Judged, good: BoolArray) -> FloatArray:
        """What is searched for the least of, (points, metals): ln residual and a little of dose."""
        residual = np.log(np.maximum(judged.residual, SMALLEST_MG_PER_L))
        fed = points.doses.sum(axis=1) + block.dose
        value = residual + DOSE_WEIGHT * np.log1p(fed)[:, None]
        return np.asarray(np.where(good[:, None], value, UNREACHED), dtype=float)

    def _best(self, family: str, metal: int, walk: _Walk) -> Lowest:
        mine = np.flatnonzero(np.array(walk.metals) == metal)
        k = mine[[int(np.argmin(walk.value[mine]))]]
        point = walk.points.take(k)
        block, judged = self.look(point, walk.near.rows(k))
        return Lowest(metal, family, point, block, judged, self._edges(point, block))

    def _edges(self, point: Points, block: Block) -> tuple[str, ...]:
        low, high = (float(end[0]) for end in self.window(point))
        found = []
        if point.controller[0] >= 0:
            ph = float(block.state.ph[0])
            found += ["high"] if ph > high - 0.02 else []
            found += ["low"] if ph < low + 0.02 else []
        paced = np.flatnonzero(point.doses[0] > 0.0)
        if any(point.doses[0, i] > 0.97 * self.top_dose(int(i)) for i in paced):
            found.append("dose")
        return tuple(found)


class _Walk:
    """Best points of several metals on their way to the lowest state nearby."""

    def __init__(self, search: FloorSearch, points: Points, metals: list[int]) -> None:
        self.search, self.points, self.metals = search, points, metals
        self.value = np.full(len(points), np.inf)
        self.near: StartValues

    def settle(self, near: StartValues) -> None:
        """Walk, halving the steps where no neighbour is lower."""
        self.near = near
        n = len(self.points)
        block, judged = self.search.look(self.points, near)
        self._take(np.arange(n), self.points, block, judged)
        step_ph = np.full(n, 0.5 * COARSE_SET_POINT_STEP)
        step_dose = np.full(n, 0.5)
        for _ in range(REFINING_ROUNDS):
            moved = self._round(step_ph, step_dose)
            step_ph = np.where(moved, step_ph, 0.5 * step_ph)
            step_dose = np.where(moved, step_dose, 0.5 * step_dose)

    def _round(self, step_ph: FloatArray, step_dose: FloatArray) -> BoolArray:
        owner, tried = self._neighbours(step_ph, step_dose)
        before = self.value.copy()
        if owner.size:
            block, judged = self.search.look(tried, self.near.rows(owner))
            self._take(owner, tried, block, judged)
        return np.asarray(self.value < before, dtype=bool)

    def _neighbours(self, step_ph: FloatArray, step_dose: FloatArray) -> tuple[IntArray, Points]:
        """Points one step away in set point or dose, inside the window."""
        parts, owners = [], []
        low, high = self.search.window(self.points)
        for i in np.flatnonzero(self._open(step_ph)):
            paced = np.flatnonzero(self.points.doses[i] > 0.0)
            free = self.points.controller[i] < 0
            ways_ph = (0.0,) if free else (-1.0, 0.0, 1.0)
            ways_dose = (-1.0, 0.0, 1.0) if paced.size else (0.0,)
            moves = [m for m in product(ways_ph, ways_dose) if (m[0] == 0.0) != (m[1] == 0.0)]
            ph = np.clip(
                self.points.ph[i] + step_ph[i] * np.array([m[0] for m in moves]), low[i], high[i]
            )
            factor = np.exp(step_dose[i] * np.array([m[1] for m in moves]))
            doses = self.points.doses[i] * factor[:, None]
            top = np.array([self.search.top_dose(j) for j in range(doses.shape[1])])
            least = np.where(doses > 0.0, LEAST_DOSE_MG_PER_L, 0.0)
            doses = np.minimum(np.maximum(doses, least), top)
            parts.append(
                Points(doses, np.full(ph.size, self.points.controller[i]), ph,
                       np.full(ph.size, -1))
            )  # fmt: skip
            owners.append(np.full(ph.size, i))
        if not parts:
            nothing = np.zeros(0, dtype=np.int64)
            return nothing, self.points.take(nothing)
        return np.concatenate(owners), Points.join(parts)

    def _open(self, step_ph: FloatArray) -> BoolArray:
        """Which points are worth further steps."""
        return np.asarray(
            (step_ph > LEAST_SET_POINT_STEP) & (self.value > np.log(NEGLIGIBLE_MG_PER_L)),
            dtype=bool,
        )

    def _take(self, owner: IntArray, tried: Points, block: Block, judged: Judged) -> None:
        """Keep for each metal the lowest of what was tried."""
        search = self.search
        value = search.value(tried, block, judged, search.allowed_states(tried, block))
        mine = value[np.arange(owner.size), np.array(self.metals)[owner]]
        values = StartValues.of(block.state)
        for i in np.unique(owner):
            places = np.flatnonzero(owner == i)
            k = places[int(np.argmin(mine[places]))]
            if mine[k] < self.value[i] - 1e-9:
                self.value[i] = mine[k]
                self.points.doses[i] = tried.doses[k]
                self.points.ph[i] = tried.ph[k]
                self.near.put(np.array([i]), values.rows(np.array([k])))


@dataclass(frozen=True, eq=False)
class _Near:
    """Warm starts at the states that points were stepped from."""

    values: StartValues

    def start(self, end: int, rows: IntArray) -> StartValues | None:
        """Iterates for these rows."""
        return self.values.rows(rows)
