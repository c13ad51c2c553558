"""Yearly cost of operating points by cause: goods, freight, disposal, equipment, charges.

Owns what a plan costs once doses, solids and effluent are known; offers themselves are bought in
`optimiser.purchasing`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.burden import BURDENS
from chemistry.sludge import Sludge, sludge
from optimiser.feeds import SUMMED_STATES
from optimiser.plant import Plant
from optimiser.points import CLOSED_FORMED, VENTED_FORMED, Block, NominalRows, Points, Rows
from optimiser.price_book import PriceBook
from optimiser.quality import Judged
from optimiser.site import DisposalRule
from optimiser.surcharges import Surcharge, surcharge_per_year

FloatArray = NDArray[np.float64]

TOTAL = "total"
FREIGHT, DISPOSAL, FEES = "freight", "disposal", "disposal fees"
EQUIPMENT, SEPARATOR, POLYMER, BURDEN = "equipment", "separator", "polymer", "burden charges"
SURCHARGES = "surcharges"


@dataclass(frozen=True, eq=False)
class Priced:
    """Costs of points: ``by_cause`` arrays (points,) per year, ``total`` their sum.

    ``doses`` and ``trim_doses`` (points, reagents) are fed, mg/L, the mean of the volume; ``fed``
    (points, samples, reagents) what each sample's tank gets; ``sludges`` the dearest end's sludge
    of each point with the rule that set its class.
    """

    by_cause: dict[str, FloatArray]
    total: FloatArray
    doses: FloatArray
    trim_doses: FloatArray
    fed: FloatArray
    sludges: list[tuple[Sludge, int, DisposalRule] | None]


class Pricing:
    """A site's prices as arrays."""

    def __init__(self, plant: Plant, surcharges: Sequence[Surcharge]) -> None:
        self.plant = plant
        self.surcharges = tuple(surcharges)
        site = plant.site
        self.book = PriceBook(site.offers)
        self.equipment = np.array(
            [site.treatment.equipment_cost_per_year.get(name, 0.0) for name in plant.names]
        )
        self.kg_per_mg_per_l = site.flow_m3_per_year / 1000.0

    def purchase(self, reagent: int, kg: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Goods and freight of the cheapest offer for demands in kg pure per year, (n,) each."""
        return self.book.costs(self.plant.names[reagent], kg)

    def price(
        self, points: Points, rows: Rows, blocks: Sequence[Block], judged: Sequence[Judged]
    ) -> Priced:
        """Cost of every point from its nominal states, the dearest end where ends differ."""
        plant = self.plant
        fed = plant.fed_doses(points, rows, blocks)
        doses = self.mean(fed)
        trim = self.mean(self._trim_doses(points, rows, blocks))
        by_cause: dict[str, FloatArray] = {}
        freight = np.zeros(len(points))
        for i, name in enumerate(plant.names):
            kg = (doses[:, i] + trim[:, i]) * self.kg_per_mg_per_l
            if not kg.any() and not self.book.sunk(name):
                continue
            goods, carriage = self.purchase(i, kg)
            by_cause[name] = goods
            freight += carriage
        by_cause[FREIGHT] = freight
        sludges, tariff, fees, polymer = self._sludge(points, rows, blocks, doses)
        by_cause[DISPOSAL], by_cause[FEES], by_cause[POLYMER] = tariff, fees, polymer
        in_use = (doses > 0.0) | (trim > 0.0)
        by_cause[EQUIPMENT] = in_use.astype(float) @ self.equipment
        by_cause[SEPARATOR] = np.full(
            len(points), plant.treatment.separator.cost_per_year, dtype=float
        )
        by_cause[BURDEN] = self._burden(points, rows, judged)
        by_cause[SURCHARGES] = self._surcharges(points, rows, judged)
        total = np.sum(list(by_cause.values()), axis=0)
        return Priced(by_cause, total, doses, trim, fed, sludges)

    def mean(self, values: FloatArray) -> FloatArray:
        """Mean of the volume of values (points, samples, ...), (points, ...)."""
        return np.asarray(np.tensordot(values, self.plant.feeds.weight, axes=(1, 0)), dtype=float)

    def _trim_doses(self, points: Points, rows: Rows, blocks: Sequence[Block]) -> FloatArray:
        trim = np.zeros((len(points), len(self.plant.feeds), len(self.plant.names)))
        for block in blocks:
            some = rows.nominal[block.rows] & block.trimmed
            point = rows.point[block.rows[some]]
            place = (point, rows.sample[block.rows[some]], points.trim[point])
            np.maximum.at(trim, place, block.trim_dose[some])
        return trim

    def unreacted_mg_per_l(self, doses: FloatArray) -> FloatArray:
        """Slurry fed that does not react and settles, (points,). [mg/L]"""
        return doses @ self.plant.unreacted

    def rule(self, made: Sludge, row: int) -> DisposalRule:
        """The first disposal rule whose condition the cake meets.

        A site's last rule has no condition, so one always holds.
        """
        content = dict(zip(made.metals, made.metal_mg_per_kg_dry[row], strict=True))
        for rule in self.plant.site.disposal.rules:
            if not rule.metals or any(
                _content(content, m) > rule.above_mg_per_kg_dry for m in rule.metals
            ):
                return rule
        return self.plant.site.disposal.rules[-1]

    def weigh(self, solids_mol_per_l: FloatArray, unreacted: FloatArray) -> Sludge:
        """Sludge of some waters' mean solids."""
        plant = self.plant
        disposal = plant.site.disposal
        return sludge(
            solids_mol_per_l, plant.system,
            cake_solids_fraction=disposal.cake_solids_fraction,
            bound_water_factor=disposal.bound_water_factor,
            unreacted_mg_per_l=unreacted,
            feed_tss_mg_per_l=plant.site.analysis.tss_mg_per_l,
            feed_particulate_mg_per_l=plant.feed.particulate_mg_per_l,
            polymer_g_per_kg=plant.treatment.polymer_g_per_kg_solids,
        )  # fmt: skip

    def _sludge(
        self, points: Points, rows: Rows, blocks: Sequence[Block], doses: FloatArray
    ) -> tuple[list[tuple[Sludge, int, DisposalRule] | None], FloatArray, FloatArray, FloatArray]:
        n, plant = len(points), self.plant
        found: list[tuple[Sludge, int, DisposalRule] | None] = [None] * n
        tariff, fees, polymer = np.zeros(n), np.zeros(n), np.zeros(n)
        unreacted = self.unreacted_mg_per_l(doses)
        for block in blocks:
            if block.end not in (CLOSED_FORMED, VENTED_FORMED):
                continue
            nominal = NominalRows.at(block.end, rows, blocks, n)
            point = np.flatnonzero(nominal.known)
            if not point.size:
                continue
            solids = nominal.mean([b.state.solids_mol_per_l for b in blocks], plant.feeds.weight)
            made = self.weigh(solids[point], unreacted[point])
            tonnes = made.wet_mg_per_l * self.kg_per_mg_per_l / 1000.0
            for row, i in enumerate(point):
                rule = self.rule(made, row)
                by_mass, fixed = disposal_cost(rule, float(tonnes[row]))
                if found[i] is None or by_mass + fixed > tariff[i] + fees[i]:
                    found[i] = (made, row, rule)
                    tariff[i], fees[i] = by_mass, fixed
                    polymer[i] = (
                        made.polymer_mg_per_l[row]
                        * self.kg_per_mg_per_l
                        * plant.treatment.polymer_price_per_kg
                    )
        return found, tariff, fees, polymer

    def _burden(self, points: Points, rows: Rows, judged: Sequence[Judged]) -> FloatArray:
        charges = self.plant.site.burden_charges_per_kg
        cost = np.zeros((len(points), len(self.plant.feeds)))
        if not charges:
            return cost[:, 0]
        for part in judged:
            nominal = rows.nominal[part.block.rows]
            here = np.zeros(nominal.size)
            for name, rate in charges.items():
                if name in BURDENS:
                    here += rate * self.kg_per_mg_per_l * np.maximum(part.burden[name], 0.0)
            some = part.block.rows[nominal]
            np.maximum.at(cost, (rows.point[some], rows.sample[some]), here[nominal])
        return self.mean(cost)

    def _surcharges(self, points: Points, rows: Rows, judged: Sequence[Judged]) -> FloatArray:
        cost = np.zeros((len(points), len(self.plant.feeds)))
        if not self.surcharges:
            return cost[:, 0]
        for part in judged:
            nominal = rows.nominal[part.block.rows]
            here = surcharge_per_year(self.surcharges, part, self.kg_per_mg_per_l)
            some = part.block.rows[nominal]
            np.maximum.at(cost, (rows.point[some], rows.sample[some]), here[nominal])
        return self.mean(cost)


def _content(content: dict[str, float], metal: str) -> float:
    return sum(content.get(part, 0.0) for part in SUMMED_STATES.get(metal, (metal,)))


def disposal_cost(rule: DisposalRule, wet_t_per_year: float) -> tuple[float, float]:
    """Tariff by mass, and pickups with the yearly fee. [currency per year]

    Pickups are counted as a yearly average, wet tonnes over the load of one, not rounded.
    """
    pickups = wet_t_per_year / rule.tonnes_per_pickup
    return rule.tariff_per_wet_t * wet_t_per_year, rule.pickup_fee * pickups + rule.yearly_fee
