"""The relaxation of a cell: what every compliant plan of it must satisfy, as one model.

Owns the step from a cell to a mixed-integer model whose least cost no plan of the cell undercuts.
The derivation stands in `optimiser.bound`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from chemistry.gas import H2S_SPECIES, ln_henry
from optimiser.bound_cells import (
    HELD,
    PH_SLACK,
    RESTS,
    SLACK,
    Cell,
    CellModel,
    Corner,
    Narrow,
    Waters,
)
from optimiser.bound_money import (
    HYDROGEN_MG_PER_MOL,
    HYDROXIDE_MG_PER_MOL,
    Money,
    burden_forms,
    largest_floc_mg_per_l,
)
from optimiser.bound_rows import LOOSENED, StateRows
from optimiser.costing import EQUIPMENT, SEPARATOR
from optimiser.evaluation import Evaluator
from optimiser.linear_model import Expression, Model, Sense
from optimiser.purchasing import add_purchasing
from optimiser.quality import LN10, Check
from optimiser.quality_slopes import RULE

FloatArray = NDArray[np.float64]


class Relaxation(Waters):
    """A site prepared for bounding."""

    def __init__(self, evaluator: Evaluator) -> None:
        super().__init__(evaluator)
        self.money = Money(evaluator)
        proton = self.plant.system.index["H+"]
        self.salts_rise = True
        weights = self.judge.burden_weights["TDS"]
        for name in self.treatment.trim_reagents:
            vector = self.plant.reacting[self.plant.index[name]]
            h = float(vector[proton])
            least = min(HYDROGEN_MG_PER_MOL * h, -HYDROXIDE_MG_PER_MOL * h)
            self.salts_rise &= float(weights @ vector) + least >= 0.0

    # -- model -------------------------------------------------------------------------------------

    def build(self, cell: Cell) -> CellModel | None:
        """The relaxation of a cell; None where the intervals alone show that it is empty."""
        found = {}
        for corner in cell.corners:
            narrow = self.narrow(cell, corner)
            if narrow is None:
                return None
            found[corner] = narrow
        model = Model("bound")
        for r in cell.recipe.reagents:
            low, high = float(cell.dose_low[r]), float(cell.dose_high[r])
            model.add_variable(self.dose_key(r), low=low / high * (1.0 - 1e-9), high=1.0 + 1e-9)
        made = CellModel(cell, model, {}, {}, {})
        for corner, narrow in found.items():
            self._add_state(made, corner, narrow)
        self._link_ph(made)
        self._add_costs(made)
        return made

    def dose_key(self, reagent: int) -> str:
        """Variable of a fed dose, in units of its largest value in the cell."""
        return f"dose {self.plant.names[reagent]}"

    def dose(self, cell: Cell, reagent: int) -> Expression:
        """Fed dose of a reagent, mg/L."""
        return Expression({self.dose_key(reagent): float(cell.dose_high[reagent])})

    def _control(self, made: CellModel, corner: Corner, control: tuple[float, float]) -> Expression:
        """The controller's dose in a state, mg/L."""
        own = made.cell.recipe.controller
        low, high = control
        if own is None or high == 0.0:
            return Expression({})
        key = f"control @{corner.tag}"
        size = max(high, 1e-6)
        made.model.add_variable(key, low=max(low, 0.0) / size * (1.0 - 1e-9), high=1.0 + 1e-9)
        dose = Expression({key: size})
        if corner.shift == 0 and not any(corner.signs) and not corner.held_back:
            row = dose.plus(self.dose(made.cell, own).times(-1.0)).times(1.0 / size)
            made.model.add_row("control is fed", row.terms, Sense.AT_MOST, LOOSENED)
        return dose

    def _add_state(self, made: CellModel, corner: Corner, narrow: Narrow) -> None:
        cell, plant, water, ranges = made.cell, self.plant, narrow.water, narrow.ranges
        factor = self._signs(cell, corner)
        doses = {r: self.dose(cell, r).times(float(factor[r])) for r in cell.recipe.paced}
        control = self._control(made, corner, narrow.control)
        if cell.recipe.controller is not None:
            doses[cell.recipe.controller] = control
        totals = {}
        for c in range(len(plant.system.components)):
            total = Expression({}, float(plant.totals[c]))
            for reagent, dose in doses.items():
                total = total.plus(dose.times(float(plant.reacting[reagent, c])))
            totals[c] = total
        if corner.vented:
            self._vent_totals(made, corner, totals)
        rows = StateRows(made.model, corner.tag, water, ranges, totals)
        made.rows[corner.tag], made.waters[corner.tag] = rows, water
        made.control[corner.tag] = narrow.control
        surplus = [(dose, plant.surplus[r]) for r, dose in doses.items()]
        self._add_limits(made, rows, surplus)
        self._add_gas(made, rows)

    def _vent_totals(self, made: CellModel, corner: Corner, totals: dict[int, Expression]) -> None:
        """Replace the totals of carbonate and protons by those of the vented water."""
        cell, plant, index = made.cell, self.plant, self.plant.system.index
        factor, carbonate, proton = self._signs(cell, corner), index["CO3-2"], index["H+"]
        found = self.vent(cell, factor)
        mixed = Expression({}, float(plant.totals[carbonate]))
        for r in cell.recipe.paced:
            moles = float(factor[r] * plant.reacting[r, carbonate])
            mixed = mixed.plus(self.dose(cell, r).times(moles))
        size = max(found.kept_high, 1e-9)
        low = found.kept_low / size * (1.0 - 1e-9)
        key = made.model.add_variable(f"kept @{corner.tag}", low=low, high=1.0 + 1e-9)
        kept = Expression({key: size})
        row = kept.plus(mixed.times(-1.0)).times(1.0 / size)
        rhs = LOOSENED - row.constant
        made.model.add_row(f"kept is dosed @{corner.tag}", row.terms, Sense.AT_MOST, rhs)
        totals[carbonate] = kept
        totals[proton] = totals[proton].plus(mixed.plus(kept.times(-1.0)).times(-2.0))

    def _add_limits(
        self, made: CellModel, rows: StateRows, surplus: list[tuple[Expression, FloatArray]]
    ) -> None:
        share = self.least_share(rows)
        for k, check in enumerate(self.judge.checks):
            for n, form in enumerate(self._check_forms(check, rows, surplus, share)):
                size = check.target
                row = form.times(1.0 / size)
                rhs = SLACK + LOOSENED - row.constant
                name = rows.key(f"limit {k} {n}", check.label)
                made.model.add_row(name, row.terms, Sense.AT_MOST, rhs)

    def least_share(self, rows: StateRows) -> float:
        """Least share of the metals' solids that is carried over anywhere in a cell."""
        separator = self.treatment.separator
        mass = largest_floc_mg_per_l(self.evaluator, rows.water, rows.ranges)
        by_tss = separator.tss_mg_per_l / max(mass, 1e-12)
        return float(min(by_tss, 1.0 - separator.capture_fraction))

    def _check_forms(
        self, check: Check, rows: StateRows, surplus: list[tuple[Expression, FloatArray]],
        share: float,
    ) -> list[Expression]:  # fmt: skip
        judge = self.judge
        if check.metals:
            chosen = list(check.metals)
            target = check.target * SLACK
            weights = judge.jar.least_weights(chosen, self.plant.totals, target)
            form = rows.dissolved(weights)
            form = form.plus(rows.solids(judge.solid_metal[:, chosen].sum(axis=1)).times(share))
            fixed = float(judge.dissolved_only[chosen].sum())
            fixed += share * float(judge.particles[chosen].sum())
            return [form.plus(Expression({}, fixed))]
        if not check.burden or (check.burden == "TDS" and not self.salts_rise):
            return []
        weights = judge.burden_weights[check.burden]
        forms = burden_forms(rows, weights, check.burden)
        for dose, vector in surplus:
            forms = [f.plus(dose.times(float(vector @ weights))) for f in forms]
        return forms

    def _add_gas(self, made: CellModel, rows: StateRows) -> None:
        system = rows.system
        if H2S_SPECIES not in system.species_names:
            return
        s = system.species_names.index(H2S_SPECIES)
        limits = [c.target for c in self.judge.checks if c.averaging == RULE]
        if not rows.ranges.species[s] or not limits:
            return
        row = system.formation[s]
        terms = {rows.l_key(int(c)): float(row[c]) for c in np.flatnonzero(row)}
        rhs = float(np.log(1e-6 * min(limits))) + ln_henry(H2S_SPECIES, system.temperature_degc)
        rhs += LOOSENED - float(system.ln_k[s])
        made.model.add_row(rows.key("gas", H2S_SPECIES), terms, Sense.AT_MOST, rhs)

    def _link_ph(self, made: CellModel) -> None:
        """Held states lie the same steps of pH apart for every set point of the cell."""
        cell = made.cell
        if cell.mode != HELD:
            return
        first = next(c for c in cell.corners if not c.rests)
        at = made.rows[first.tag]
        for corner in cell.corners:
            if corner is first or corner.rests:
                continue
            other = made.rows[corner.tag]
            apart = -LN10 * self.treatment.ph_tolerance * (corner.shift - first.shift)
            row = {other.l_key(other.proton): 1.0, at.l_key(at.proton): -1.0}
            for name, sense, rhs in (
                ("most", Sense.AT_MOST, apart + 2.0 * LN10 * PH_SLACK),
                ("least", Sense.AT_LEAST, apart - 2.0 * LN10 * PH_SLACK),
            ):
                made.model.add_row(f"steps {corner.tag} {name}", row, sense, rhs)

    def _add_costs(self, made: CellModel) -> None:
        cell, model, plant = made.cell, made.model, self.plant
        demands = {
            plant.names[r]: self.dose(cell, r).times(self.money.kg_per_mg_per_l)
            for r in cell.recipe.reagents
        }
        offers = [o for o in self.site.offers if o.reagent in plant.index]
        add_purchasing(model, offers, demands)
        separator = self.treatment.separator.cost_per_year
        model.add_cost(SEPARATOR, Expression({}, separator))
        fixed = self.fixed_cost(cell.recipe) - separator + self._trim_cost(cell)
        model.add_cost(EQUIPMENT, Expression({}, fixed))
        if cell.mode == RESTS:
            self._add_rest(made)
        nominal = made.rows[Corner(0, (0,) * len(cell.recipe.paced)).tag]
        unreacted = Expression({})
        for r in cell.recipe.reagents:
            unreacted = unreacted.plus(self.dose(cell, r).times(float(plant.unreacted[r])))
        only = not self.has_carbonate(cell.recipe)
        self.money.add_disposal(model, nominal, unreacted, only_end=only)
        surplus = [(self.dose(cell, r), plant.surplus[r]) for r in cell.recipe.paced]
        self.money.add_burden(model, nominal, surplus, dissolved_solids=self.salts_rise)

    def _add_rest(self, made: CellModel) -> None:
        """A controller that rests with gas kept and scale formed is fed at another end."""
        if self.has_carbonate(made.cell.recipe):
            return
        nominal = made.rows[Corner(0, (0,) * len(made.cell.recipe.paced)).tag]
        scale = np.flatnonzero(self.plant.scale_columns & nominal.ranges.solids)
        terms = {nominal.y_key(int(p)): 1.0 for p in scale}
        made.model.add_row("scale forms", terms, Sense.AT_LEAST, 1.0)

    def _trim_cost(self, cell: Cell) -> float:
        """What trimming costs at least where every plan of the cell has to trim."""
        window, tolerance = self.site.ph_window, self.treatment.ph_tolerance
        if cell.mode == RESTS:
            return 0.0
        if cell.ph_low > window.high - tolerance + 1e-8:
            way = "down"
        elif cell.ph_high < window.low + tolerance - 1e-8:
            way = "up"
        else:
            return 0.0
        costs = [np.inf]
        for name in self.treatment.trim_reagents:
            i = self.plant.index[name]
            if self.plant.reagents[i].ph_control != way:
                continue
            if i in cell.recipe.reagents:
                costs.append(0.0)
            else:
                costs.append(float(self.evaluator.pricing.equipment[i]))
        return min(costs)
