"""Cost rows of the relaxation: purchases, disposal by class, polymer, equipment, charges.

Owns the linear lower bound of what `optimiser.costing` charges for any plan of a cell.

Notes
-----
`Pricing.price` takes the dearest end of the nominal states; any one end costs no more, so the state
with gas kept and scale formed is charged. Polymer goes with the dearest end and not with this one:
where another end may set it (carbonate in the recipe), the cake of class ``k`` that costs at least
as much as this one weighs at least ``(disposal - fee_k) / rate_k``, and the least over the classes
is charged. A rule holds only if no earlier rule does, which is linear in the solids; its own
condition is used where it names one metal. The trim dose is charged nothing, except that a trim
reagent is set up and bought where every plan of the cell has to trim. Surcharges per kilogram are
charged nothing: they are never negative, so the bound stays one.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from chemistry.burden import BURDENS
from chemistry.formula import molar_mass_g_per_mol
from chemistry.sludge import dry_masses_mg_per_l, metal_weights_mg_per_mol, metals_of
from optimiser.bound_intervals import Ranges, Water
from optimiser.bound_rows import LOOSENED, StateRows
from optimiser.evaluation import Evaluator
from optimiser.feeds import SUMMED_STATES
from optimiser.linear_model import Expression, Model, Sense
from optimiser.site import DisposalRule

FloatArray = NDArray[np.float64]

CAUSE_DISPOSAL, CAUSE_POLYMER, CAUSE_BURDEN = "disposal", "polymer", "burden charges"
HYDROGEN_MG_PER_MOL = 1000.0 * molar_mass_g_per_mol("H+")
HYDROXIDE_MG_PER_MOL = 1000.0 * molar_mass_g_per_mol("OH-")


def rate_of(rule: DisposalRule) -> float:
    """Tariff and pickups per wet tonne."""
    return rule.tariff_per_wet_t + rule.pickup_fee / rule.tonnes_per_pickup


def burden_forms(rows: StateRows, weights: FloatArray, name: str) -> list[Expression]:
    """Expressions whose largest is a lower bound of a burden of the separated water, mg/L.

    Notes
    -----
    The proton count ``h`` adds 1.008 h where positive and -17.007 h where negative to the dissolved
    solids; that is the larger of the two everywhere, so both are lower bounds.
    """
    base = rows.dissolved(weights)
    if name != "TDS":
        return [base]
    unit = np.zeros(weights.size)
    unit[rows.proton] = 1.0
    protons = rows.dissolved(unit)
    lost = float(rows.lost[rows.proton])
    return [
        base.plus(protons.times(factor)).plus(Expression({}, -abs(factor) * lost))
        for factor in (HYDROGEN_MG_PER_MOL, -HYDROXIDE_MG_PER_MOL)
    ]


class Money:
    """A site's prices as rows."""

    def __init__(self, evaluator: Evaluator) -> None:
        self.evaluator = evaluator
        plant, site = evaluator.plant, evaluator.site
        self.plant, self.site = plant, site
        self.kg_per_mg_per_l = evaluator.pricing.kg_per_mg_per_l
        self.tonnes = self.kg_per_mg_per_l / 1000.0
        solids = np.eye(len(plant.system.solids))
        self.dry = dry_masses_mg_per_l(
            solids, plant.system, bound_water_factor=site.disposal.bound_water_factor
        ).sum(axis=1)
        self.metal_names = metals_of(plant.system)
        self.metals = metal_weights_mg_per_mol(plant.system)
        carried = plant.feed.particulate_mg_per_l
        self.particles = np.array([carried.get(m, 0.0) for m in self.metal_names])
        self.feed_mass = max(site.analysis.tss_mg_per_l, sum(carried.values(), 0.0))
        self.polymer = plant.treatment.polymer_g_per_kg_solids / 1000.0

    def least(self, reagent: int, dose: float) -> float:
        """Goods and freight of a dose, mg/L fed."""
        goods, freight = self.evaluator.pricing.purchase(
            reagent, np.array([dose * self.kg_per_mg_per_l])
        )
        return float(goods[0] + freight[0])

    def sunk(self, reagent: int) -> float:
        """What signed contracts cost where nothing of a reagent is needed."""
        return self.evaluator.pricing.book.sunk(self.plant.names[reagent])

    def highest_dose(self, reagent: int, most: float, money: float) -> float:
        """Largest dose up to ``most`` whose purchase costs no more than ``money``.

        The least cost of covering a demand never falls as the demand rises, since the same
        purchase covers less, so bisection keeps it on the safe side.
        """
        if self.least(reagent, most) <= money:
            return most
        low, high = 0.0, most
        for _ in range(50):
            middle = 0.5 * (low + high)
            if self.least(reagent, middle) <= money:
                low = middle
            else:
                high = middle
        return high

    def add_disposal(
        self, model: Model, rows: StateRows, fed: Expression, *, only_end: bool
    ) -> None:
        """Add tariff, pickups, fees and polymer of the nominal state's cake.

        ``fed`` is the slurry left unreacted, mg/L; ``only_end`` says that no other end prices it.
        """
        bare = rows.solids(self.dry).plus(fed).plus(Expression({}, self.feed_mass))
        dry = bare.times(1.0 + self.polymer)
        wet = dry.times(self.tonnes / self.site.disposal.cake_solids_fraction)
        largest = max(model.highest(wet), 1e-6)
        rules = self.site.disposal.rules
        parts, classes, cost = Expression({}), Expression({}), Expression({})
        for k, rule in enumerate(rules):
            part = model.add_variable(f"wet {k}", high=1.0)
            chosen = model.add_variable(f"class {k}", high=1.0, integer=True)
            model.add_row(f"wet {k} if class", {part: 1.0, chosen: -1.0}, Sense.AT_MOST, 0.0)
            parts = parts.plus(Expression({part: largest}))
            classes = classes.plus(Expression({chosen: 1.0}))
            cost = cost.plus(Expression({part: rate_of(rule) * largest, chosen: rule.yearly_fee}))
            self._conditions(model, rows, dry, k)
        model.add_row("one class", classes.terms, Sense.EQUAL, 1.0)
        left = parts.plus(wet.times(-1.0)).times(1.0 / largest)
        model.add_row("cake", left.terms, Sense.AT_LEAST, -left.constant - LOOSENED)
        model.add_cost(CAUSE_DISPOSAL, cost)
        self._add_polymer(model, bare, cost, only_end=only_end)

    def _conditions(self, model: Model, rows: StateRows, dry: Expression, k: int) -> None:
        """A chosen class has every earlier rule false, and its own true where it is one metal's."""
        rules = self.site.disposal.rules
        for j, rule in enumerate(rules[:k]):
            for metal in rule.metals:
                left = self._excess(rows, metal, dry, rule.above_mg_per_kg_dry)
                self._if_class(model, k, f"not {j} {metal}", left)
        if len(rules[k].metals) == 1:
            left = self._excess(rows, rules[k].metals[0], dry, rules[k].above_mg_per_kg_dry)
            self._if_class(model, k, "true", left.times(-1.0))

    @staticmethod
    def _if_class(model: Model, k: int, name: str, left: Expression) -> None:
        """Add ``left <= 0`` where class ``k`` is chosen."""
        most = max(model.highest(left), 1e-9)
        row = left.times(1.0 / most).plus(Expression({f"class {k}": 1.0}))
        rhs = 1.0 + LOOSENED - row.constant
        model.add_row(f"class {k} {name}", row.terms, Sense.AT_MOST, rhs)

    def _excess(self, rows: StateRows, metal: str, dry: Expression, above: float) -> Expression:
        parts = SUMMED_STATES.get(metal, (metal,))
        some = [i for i, name in enumerate(self.metal_names) if name in parts]
        held = rows.solids(self.metals[:, some].sum(axis=1))
        held = held.plus(Expression({}, float(self.particles[some].sum())))
        return held.plus(dry.times(-above / 1e6))

    def _add_polymer(
        self, model: Model, bare: Expression, disposal: Expression, *, only_end: bool
    ) -> None:
        price = self.plant.treatment.polymer_price_per_kg
        if not self.polymer or not price:
            return
        per_dry = self.polymer * self.kg_per_mg_per_l * price
        if only_end:
            model.add_cost(CAUSE_POLYMER, bare.times(per_dry))
            return
        rules = self.site.disposal.rules
        rate, fee = max(rate_of(r) for r in rules), max(r.yearly_fee for r in rules)
        if rate <= 0.0:
            return
        # wet tonnes of the dearest end are at least (disposal - fee) / rate
        per_wet = self.site.disposal.cake_solids_fraction / (1.0 + self.polymer) / self.tonnes
        least = disposal.plus(Expression({}, -fee)).times(per_dry * per_wet / rate)
        spent = model.add_variable("polymer")
        row = Expression({spent: 1.0}).plus(least.times(-1.0))
        model.add_row("polymer least", row.terms, Sense.AT_LEAST, -row.constant)
        model.add_cost(CAUSE_POLYMER, Expression({spent: 1.0}))

    def add_burden(
        self, model: Model, rows: StateRows, surplus: list[tuple[Expression, FloatArray]],
        *, dissolved_solids: bool,
    ) -> None:  # fmt: skip
        """Add the charges on burdens of the nominal state.

        ``surplus`` lists doses (mg/L fed) with what they leave unreacted in the water, mol/mg;
        ``dissolved_solids`` says whether the trim can only raise them.
        """
        for name, rate in self.site.burden_charges_per_kg.items():
            if name not in BURDENS or not rate or (name == "TDS" and not dissolved_solids):
                continue
            weights = self.evaluator.judge.burden_weights[name]
            spent = model.add_variable(f"charge {name}")
            left = Expression({})
            for dose, vector in surplus:
                left = left.plus(dose.times(float(vector @ weights)))
            for k, water in enumerate(burden_forms(rows, weights, name)):
                form = water.plus(left).times(rate * self.kg_per_mg_per_l)
                size = max(1.0, abs(model.highest(form)))
                row = Expression({spent: 1.0}).plus(form.times(-1.0)).times(1.0 / size)
                model.add_row(f"charge {name} {k}", row.terms, Sense.AT_LEAST, -row.constant)
            model.add_cost(CAUSE_BURDEN, Expression({spent: 1.0}))


def largest_floc_mg_per_l(evaluator: Evaluator, water: Water, ranges: Ranges) -> float:
    """Upper end of the mass that dilutes the floc's metals: each cation in its heaviest solid."""
    judge = evaluator.judge
    g = water.system.solid_formation
    cation = water.system.component_charges > 0.0
    cation[water.system.index["H+"]] = False
    total = judge.feed_particle_mass
    for c in np.flatnonzero(cation & ranges.present):
        holds = (g[:, c] > 0.0) & ranges.solids
        if holds.any():
            total += float(water.high[c] * (judge.solid_mass[holds] / g[holds, c]).max())
    return float(total)
