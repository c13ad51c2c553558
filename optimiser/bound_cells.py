"""Cells of a bound: recipe, pH interval, dose box, the states looked at and where they lie.

Owns the types and the intervals of each state; the model is built in `optimiser.bound_model`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from optimiser.bound_intervals import Ranges, Water, propagate
from optimiser.bound_rows import StateRows
from optimiser.bound_vent import Vent, vent_range
from optimiser.evaluation import Evaluator
from optimiser.linear_model import Model
from optimiser.quality import LN10
from optimiser.recipes import Recipe

FloatArray = NDArray[np.float64]

HELD, RESTS, FREE = "held", "rests", "free"
LARGEST_CONTROL_MOL_PER_L = 2.0  # what titration looks for at most
LOWEST_PH, HIGHEST_PH = -2.0, 16.0
PH_SLACK = 1e-4  # a held state's pH may miss its set point by a titration's tolerance
DOSE_ROUNDS = 4
SLACK = 1.0 + 1e-8  # limits and dose rules are met within 1e-9


@dataclass(frozen=True, slots=True)
class Corner:
    """A state that a plan of the cell has: steps of set point and paced doses, and the end.

    ``shift`` is -1, 0 or 1 tolerances of the set point, ``signs`` the same for each paced reagent;
    ``held_back`` takes scale formers held back, ``vented`` carbon dioxide gone; ``rests`` says that
    the controller rests there.
    """

    shift: int = 0
    signs: tuple[int, ...] = ()
    held_back: bool = False
    rests: bool = False
    vented: bool = False

    @property
    def tag(self) -> str:
        """Short name, for variables."""
        marks = {-1: "-", 0: "0", 1: "+"}
        text = marks[self.shift] + "".join(marks[s] for s in self.signs)
        text += "v" if self.vented else ""
        return text + ("h" if self.held_back else "") + ("r" if self.rests else "")


@dataclass(frozen=True, slots=True, eq=False)
class Cell:
    """Recipe, pH interval and dose box, with the states that its bound looks at.

    ``mode``: the controller holds the nominal pH (``held``), rests (``rests``) or there is none
    (``free``); the interval is the set point's where held and the water's elsewhere. Doses are mg/L
    fed, (reagents,). ``ranges`` are those of the cell that this one is part of.
    """

    recipe: Recipe
    mode: str
    ph_low: float
    ph_high: float
    dose_low: FloatArray
    dose_high: FloatArray
    corners: tuple[Corner, ...]
    bound: float = -np.inf
    ranges: Mapping[str, Ranges] = field(default_factory=dict)
    control: Mapping[str, tuple[float, float]] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, eq=False)
class Narrow:
    """Intervals of one state, and of the controller's dose in it, mg/L."""

    water: Water
    ranges: Ranges
    control: tuple[float, float]


@dataclass(eq=False)
class CellModel:
    """A cell's relaxation with the handles to read and refine it."""

    cell: Cell
    model: Model
    rows: dict[str, StateRows]
    waters: dict[str, Water]
    control: dict[str, tuple[float, float]]

    @property
    def width(self) -> float:
        """Sum of the widths of the log activities, as a measure of size."""
        return float(
            sum(
                (r.ranges.l_high - r.ranges.l_low)[r.ranges.present].sum()
                for r in self.rows.values()
            )
        )

    @property
    def ranges(self) -> dict[str, Ranges]:
        """Intervals of every state."""
        return {tag: rows.ranges for tag, rows in self.rows.items()}


class Waters:
    """Where the waters of a site's cells lie."""

    def __init__(self, evaluator: Evaluator) -> None:
        self.evaluator = evaluator
        self.plant, self.judge = evaluator.plant, evaluator.judge
        self.site, self.treatment = evaluator.site, evaluator.plant.treatment
        self._vents: dict[tuple[bytes, bytes], Vent] = {}
        reacting = self.plant.reacting
        self.most_control = LARGEST_CONTROL_MOL_PER_L / np.abs(reacting).max(axis=1)

    # -- ranges ------------------------------------------------------------------------------------

    def fixed_cost(self, recipe: Recipe) -> float:
        """Separator and equipment of a recipe."""
        used = list(recipe.reagents)
        return float(
            self.treatment.separator.cost_per_year + self.evaluator.pricing.equipment[used].sum()
        )

    def has_carbonate(self, recipe: Recipe) -> bool:
        """Whether other ends than gas kept may set the price."""
        return bool(self.plant.is_carbonate[list(recipe.reagents)].any())

    def _signs(self, cell: Cell, corner: Corner) -> FloatArray:
        """Factor on each paced dose."""
        factor = np.ones(len(self.plant.names))
        for reagent, sign in zip(cell.recipe.paced, corner.signs, strict=False):
            factor[reagent] += sign * self.treatment.dose_tolerance_fraction
        return factor

    def _control_range(self, cell: Cell, corner: Corner) -> tuple[float, float]:
        own = cell.recipe.controller
        if own is None or corner.rests or (cell.mode == RESTS and corner.shift == 0):
            return 0.0, 0.0
        nominal = corner.shift == 0 and not any(corner.signs) and not corner.held_back
        low, high = cell.control.get(corner.tag, (0.0, float(self.most_control[own])))
        return low, float(min(high, cell.dose_high[own]) if nominal else high)

    def _proton(self, cell: Cell, corner: Corner) -> tuple[float, float]:
        """Interval of ln activity of H+ in a state."""
        shift = corner.shift * self.treatment.ph_tolerance
        low, high = cell.ph_low + shift, cell.ph_high + shift
        own = cell.recipe.controller
        if corner.rests and own is not None:
            if self.plant.reagents[own].ph_control == "down":
                low = LOWEST_PH
            else:
                high = HIGHEST_PH
        if self.plant.is_sulfide[list(cell.recipe.reagents)].any():
            low = max(low, self.treatment.sulfide_least_ph - 1e-8)
        return -LN10 * (high + PH_SLACK), -LN10 * (low - PH_SLACK)

    def water(self, cell: Cell, corner: Corner, control: tuple[float, float]) -> Water:
        """Ranges of totals of a state."""
        plant = self.plant
        low, high = plant.totals.copy(), plant.totals.copy()
        factor = self._signs(cell, corner)
        spans = [
            (r, factor[r] * cell.dose_low[r], factor[r] * cell.dose_high[r])
            for r in cell.recipe.paced
        ]
        if cell.recipe.controller is not None:
            spans.append((cell.recipe.controller, *control))
        for reagent, least, most in spans:
            vector = plant.reacting[reagent]
            ends = np.stack([least * vector, most * vector])
            low, high = low + ends.min(axis=0), high + ends.max(axis=0)
        if corner.vented:
            self._vent(cell, factor, low, high)
        system = plant.system
        if corner.held_back and plant.held_system is not None:
            system = plant.held_system
        proton = self._proton(cell, corner)
        return Water(system, low, high, *proton, self.ceilings())

    def vent(self, cell: Cell, factor: FloatArray) -> Vent:
        """What a vented state keeps of its carbonate."""
        paced = np.zeros(len(self.plant.names))
        paced[list(cell.recipe.paced)] = 1.0
        low, high = factor * cell.dose_low * paced, factor * cell.dose_high * paced
        key = (low.tobytes(), high.tobytes())
        if key not in self._vents:
            self._vents[key] = vent_range(self.plant, low, high)
        return self._vents[key]

    def _vent(self, cell: Cell, factor: FloatArray, low: FloatArray, high: FloatArray) -> None:
        """Take what leaves out of the ranges of totals."""
        found = self.vent(cell, factor)
        index = self.plant.system.index
        low[index["CO3-2"]], high[index["CO3-2"]] = found.kept_low, found.kept_high
        low[index["H+"]] -= 2.0 * (found.mixed_high - found.kept_low)
        high[index["H+"]] -= 2.0 * max(found.mixed_low - found.kept_high, 0.0)

    def ceilings(self) -> FloatArray:
        """Ceilings of dissolved totals from every limit, mol/L."""
        found = np.full(len(self.plant.system.components), np.inf)
        for check in self.judge.checks:
            if check.metals:
                chosen = list(check.metals)
                room = check.target * SLACK
                weights = self.judge.jar.least_weights(chosen, self.plant.totals, room)
                room -= float(self.judge.dissolved_only[chosen].sum())
            elif check.burden and check.burden != "TDS":
                weights, room = self.judge.burden_weights[check.burden], check.target * SLACK
            else:
                continue
            some = weights > 0.0
            found[some] = np.minimum(found[some], max(room, 0.0) / weights[some])
        return found

    def narrow(self, cell: Cell, corner: Corner) -> Narrow | None:
        """Intervals of a state and of the controller's dose; None where no water fits."""
        control = self._control_range(cell, corner)
        own = cell.recipe.controller
        known = cell.ranges.get(corner.tag)
        proton = self.plant.system.index["H+"]
        ranges = propagate(self.water(cell, corner, control), known)
        for turn in range(DOSE_ROUNDS):
            if turn:
                ranges = propagate(self.water(cell, corner, control), ranges)
            if ranges.empty:
                return None
            fixed = self.water(cell, corner, (0.0, 0.0))
            per = float(self.plant.reacting[own, proton]) if own is not None else 0.0
            low = ranges.protons_low - fixed.high[proton] - 1e-9
            high = ranges.protons_high - fixed.low[proton] + 1e-9
            if per == 0.0 or control[1] == 0.0:
                if (own is None or control[1] == 0.0) and (low > 0.0 or high < 0.0):
                    return None
                break
            ends = sorted((low / per, high / per))
            new = max(control[0], ends[0]), min(control[1], ends[1])
            if new[0] > new[1] * (1.0 + 1e-9) + 1e-12:
                return None
            done = (control[1] - control[0]) - (new[1] - new[0]) < 0.02 * (control[1] - control[0])
            control = new[0], max(new)
            if done:
                break
        return Narrow(self.water(cell, corner, control), ranges, control)
