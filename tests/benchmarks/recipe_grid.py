"""Coordinates and grids of one recipe, for the exhaustive reference.

Owns the step from grid coordinates to operating points; which cells to look at and what they mean
is `tests.benchmarks.reference`. A recipe has one coordinate per reagent: the controller's is the
pH set point (its dose follows from the pH), a ligand's the log10 of its dose in mg/L, and a bulk
alkali's or acid's its share of the proton demand that is left at the set point.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations, product

import numpy as np
from numpy.typing import NDArray

from chemistry.state import equilibrate
from optimiser.evaluation import Evaluator
from optimiser.points import Points
from optimiser.recipes import make_recipe, set_point_bounds, trim_choices

FloatArray = NDArray[np.float64]

PH_STEP = 0.35
LOG_STEP = 0.25
SHARE_STEP = 0.12
SHARES = (0.05, 0.2, 0.4, 0.6, 0.75, 0.86, 0.93, 0.97, 0.99, 1.02)
# Shares of a bulk reagent that the controller must push back from.
OPPOSED_SHARES = (0.1, 0.5, 0.9, 1.0, 1.05, 1.15, 1.4, 2.0, 3.0)
LARGEST_LIGAND_MOL_PER_L = 0.03
PH, LOG, SHARE = "ph", "log", "share"


@dataclass(frozen=True, slots=True)
class Axis:
    """One coordinate: ``reagent`` is its reagent, ``step`` the size of a coarse cell."""

    kind: str
    reagent: int
    nodes: tuple[float, ...]
    step: float

    @property
    def low(self) -> float:
        return self.nodes[0]

    @property
    def high(self) -> float:
        return self.nodes[-1]

    def thinned(self, density: float) -> tuple[float, ...]:
        """Nodes at another density, both ends among them; nodes keep their uneven spacing."""
        if density == 1.0:
            return self.nodes
        count = max(2, round(density * (len(self.nodes) - 1)) + 1)
        places = np.linspace(0.0, len(self.nodes) - 1.0, count)
        known = np.arange(len(self.nodes))
        return tuple(float(v) for v in np.interp(places, known, self.nodes))


class RecipeGrid:
    """A recipe's coordinates; ``trim`` is the reagent that may trim its discharge."""

    def __init__(self, evaluator: Evaluator, reagents: Sequence[int]) -> None:
        self.evaluator = evaluator
        plant = evaluator.plant
        recipe = make_recipe(plant, reagents)
        self.controller = -1 if recipe.controller is None else recipe.controller
        self.names = tuple(plant.names[i] for i in recipe.reagents)
        self.bounds = set_point_bounds(evaluator)
        self.proton = plant.system.index["H+"]
        paced = sorted(recipe.paced, key=lambda i: self._kind(i) == SHARE)
        held = [] if self.controller < 0 else [self._set_point_axis(paced)]
        self.axes: tuple[Axis, ...] = (*held, *(self._dose_axis(i) for i in paced))
        self.steps = np.array([a.step for a in self.axes])
        self.low = np.array([a.low for a in self.axes])
        self.high = np.array([a.high for a in self.axes])

    @property
    def empty(self) -> bool:
        """Whether the site's rules leave no set point."""
        return bool((self.low > self.high).any())

    def coarse(self, density: float = 1.0) -> FloatArray:
        """All nodes of a first grid, (cells, axes); ``density`` scales the nodes of every axis."""
        return np.array(list(product(*(a.thinned(density) for a in self.axes))))

    def clip(self, x: FloatArray) -> FloatArray:
        """Coordinates moved into the grid's ranges."""
        return np.clip(x, self.low, self.high)

    # -- axes --------------------------------------------------------------------------------------

    def _kind(self, reagent: int) -> str:
        known = self.evaluator.plant.reagents[reagent]
        bulk = self.controller >= 0 and known.ph_control and "CO3-2" not in known.components
        return SHARE if bulk else LOG

    def _set_point_axis(self, paced: Sequence[int]) -> Axis:
        dosed = np.zeros(len(self.evaluator.plant.names))
        dosed[list(paced)] = 1.0
        low = self.bounds.ph_low(self.controller, dosed)
        high = self.bounds.ph_high(self.controller, dosed)
        if low > high:
            return Axis(PH, self.controller, (low, high), PH_STEP)
        count = max(1, int(np.ceil((high - low) / PH_STEP)))
        nodes = tuple(float(v) for v in np.linspace(low, high, count + 1))
        return Axis(PH, self.controller, nodes, PH_STEP)

    def _dose_axis(self, reagent: int) -> Axis:
        plant = self.evaluator.plant
        known = plant.reagents[reagent]
        if self._kind(reagent) == SHARE:
            same = known.ph_control == plant.reagents[self.controller].ph_control
            return Axis(SHARE, reagent, SHARES if same else OPPOSED_SHARES, SHARE_STEP)
        largest = LARGEST_LIGAND_MOL_PER_L
        if known.ph_control:
            largest = max(largest, 1.3 * self._most_demand())
        per_mole = 1000.0 * known.molar_mass_g_per_mol * float(plant.factors[reagent])
        low = max(float(self.bounds.dose_low[reagent]), 1e-3)
        high = max(low, min(float(self.bounds.dose_high[reagent]), largest * per_mole))
        span = float(np.log10(high / low))
        count = max(1, int(np.ceil(span / LOG_STEP)))
        nodes = np.log10(low) + np.linspace(0.0, span, count + 1)
        return Axis(LOG, reagent, tuple(float(v) for v in nodes), LOG_STEP)

    def _most_demand(self) -> float:
        """Largest proton demand over the set points, mol/L."""
        window = self.evaluator.site.treatment.ph_set_point
        ends = np.array([window.low, window.high])
        need = self._demand(np.zeros((2, len(self.evaluator.plant.names))), ends)
        return float(np.abs(need).max())

    # -- points ------------------------------------------------------------------------------------

    def points(self, x: FloatArray) -> Points:
        """Operating points of coordinates (n, axes)."""
        plant = self.evaluator.plant
        n = x.shape[0]
        doses = np.zeros((n, len(plant.names)))
        ph = np.full(n, float(plant.feed.ph))
        for k, axis in enumerate(self.axes):
            if axis.kind == PH:
                ph = x[:, k].copy()
            elif axis.kind == LOG:
                doses[:, axis.reagent] = self._inside(axis.reagent, 10.0 ** x[:, k])
        for k, axis in enumerate(self.axes):
            if axis.kind == SHARE:
                per_mg = float(plant.reacting[axis.reagent, self.proton])
                left = np.maximum(self._demand(doses, ph) / per_mg, 0.0)
                doses[:, axis.reagent] = self._inside(axis.reagent, x[:, k] * left)
        controller = np.full(n, self.controller, dtype=np.int64)
        return Points(doses, controller, ph, self._trims(ph))

    def _inside(self, reagent: int, dose: FloatArray) -> FloatArray:
        return np.clip(dose, self.bounds.dose_low[reagent], self.bounds.dose_high[reagent])

    def _demand(self, doses: FloatArray, ph: FloatArray) -> FloatArray:
        """Protons that the pH needs beside these doses, (n,). [mol/L]"""
        plant = self.evaluator.plant
        rows, back = np.unique(np.column_stack([ph, doses]), axis=0, return_inverse=True)
        totals = plant.totals + rows[:, 1:] @ plant.reacting
        state = equilibrate(plant.system, totals, ph=rows[:, 0], on_failure="flag")
        need = state.totals[:, self.proton] - totals[:, self.proton]
        return np.asarray(np.where(state.converged, need, 0.0)[back.ravel()], dtype=float)

    def _trims(self, ph: FloatArray) -> NDArray[np.int64]:
        window = self.evaluator.site.ph_window
        ways = np.where(ph > 0.5 * (window.low + window.high), "down", "up")
        first = {
            way: next(iter(trim_choices(self.evaluator, way)), -1) for way in ("down", "up")
        }  # fmt: skip
        return np.array([first[str(way)] for way in ways], dtype=np.int64)


def all_grids(evaluator: Evaluator, largest: int) -> list[RecipeGrid]:
    """Grids of all recipes of up to ``largest`` reagents that the site allows."""
    plant = evaluator.plant
    treatment = plant.treatment
    allowed = [plant.index[name] for name in treatment.reagents]
    required = {plant.index[name] for name in treatment.required}
    most = min(largest, treatment.most_reagents, len(allowed))
    grids = [
        RecipeGrid(evaluator, chosen)
        for size in range(1, most + 1)
        for chosen in combinations(allowed, size)
        if required <= set(chosen)
    ]
    return [grid for grid in grids if not grid.empty]
