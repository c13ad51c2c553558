"""The cheapest purchase without a solver, from the least-cost curve of each reagent.

Owns the pricing of many demands at once and the slope of the least cost; the curves are built in
`optimiser.cost_curve`. Where terms tie offers together or come in whole packs the curve is a lower
value, and `optimiser.purchasing.best_deal` asks a solver.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from typing import SupportsFloat

import numpy as np
from numpy.typing import NDArray

from optimiser.cost_curve import CostCurve, curve_of, is_exact
from optimiser.deal import Buy, Deal, buys_of, deal_of
from optimiser.errors import NoPurchase, bad_demand, beyond_offers, no_offer
from optimiser.offer import Offer
from optimiser.offer_checks import require_usable_offers
from optimiser.shared_terms import is_shared

FloatArray = NDArray[np.float64]

LEAST_DEMAND_KG = 1e-3
"""A demand above 0 counts as a gram a year at least: below that, solvers see nothing."""


@dataclass(frozen=True, slots=True)
class MarginalCost:
    """Change of the least yearly cost per kg pure more, and per kg pure less, of a reagent.

    They differ where two ways of buying cost the same and where an amount is just used up. Either
    is 0 while what is bought anyway is not used up.
    """

    up_per_kg: float
    down_per_kg: float


class PriceBook:
    """Offers prepared for pricing many demands; reagents do not share offers here.

    Notes
    -----
    Exact for every term of one offer and for splits between offers of one reagent. `inexact` names
    the reagents with whole packs, bundles, frameworks, suppliers' shares or very many offers: their
    values are lower values.
    """

    def __init__(self, offers: Iterable[Offer]) -> None:
        self.offers = require_usable_offers(offers)
        by_reagent: dict[str, list[Offer]] = {}
        for offer in self.offers:
            by_reagent.setdefault(offer.reagent, []).append(offer)
        self._offers = {name: tuple(mine) for name, mine in by_reagent.items()}
        curves = {name: curve_of(mine) for name, mine in self._offers.items()}
        self._curves = {name: curve for name, curve in curves.items() if curve is not None}
        tied = {o.reagent for o in self.offers if _needs_a_solver(o)}
        many = {name for name, mine in self._offers.items() if not is_exact(mine)}
        self.inexact = frozenset(tied | many)

    @property
    def reagents(self) -> tuple[str, ...]:
        """Reagents that some offer sells, sorted."""
        return tuple(sorted(self._offers))

    def cost(self, reagent: str, demand_kg_per_year: float) -> float:
        """Least yearly cost of one reagent's demand, all causes.

        Raises
        ------
        NoPurchase
            No offer sells it, not that much, or the demand is no amount.
        """
        demand_kg = self._counted(reagent, demand_kg_per_year)
        if demand_kg == 0.0:
            return self.sunk(reagent)
        goods, freight = self._covering(reagent, demand_kg).costs(np.array([demand_kg]))
        return float(goods[0] + freight[0])

    def costs(self, reagent: str, demand_kg: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Goods (with every cause but freight) and freight of many demands of one reagent.

        Parameters
        ----------
        reagent
            Id of the reagent; what nobody sells, or not that much, costs infinitely much.
        demand_kg : ndarray, shape (n,)
            Demands. [kg pure/year]

        Returns
        -------
        ndarray, ndarray, shape (n,)
            [currency/year]
        """
        demand = np.asarray(demand_kg, dtype=float)
        used = demand > 0.0
        if reagent not in self._curves:
            return np.where(used, np.inf, 0.0), np.zeros(demand.shape)
        goods, freight = self._curves[reagent].costs(demand)
        return np.where(used, goods, self.sunk(reagent)), np.where(used, freight, 0.0)

    def sunk(self, reagent: str) -> float:
        """What contracts signed already cost a year when nothing of the reagent is needed."""
        curve = self._curves.get(reagent)
        return 0.0 if curve is None else curve.at_zero

    def curve(self, reagent: str) -> CostCurve:
        """The least-cost curve of a reagent.

        Raises
        ------
        NoPurchase
            No offer sells it.
        """
        if reagent not in self._curves:
            raise NoPurchase([no_offer(reagent, self.reagents)])
        return self._curves[reagent]

    def offer_for(self, reagent: str, demand_kg_per_year: float) -> Offer:
        """The offer that most of a demand is bought on, as in `cheapest`.

        Raises
        ------
        NoPurchase
            No offer sells it, not that much, or the demand is no amount.
        """
        bought = self._bought(reagent, self._counted(reagent, demand_kg_per_year))
        return max(bought, key=lambda pair: pair[1] * pair[0].strength_fraction)[0]

    def entry_cost(self, reagent: str) -> float:
        """Least yearly cost of buying any of a reagent at all: the jump at a demand of 0.

        Raises
        ------
        NoPurchase
            No offer sells it.
        """
        curve = self.curve(reagent)
        return float(curve.fixed[curve.first]) - curve.at_zero

    def marginal_cost(self, reagent: str, demand_kg_per_year: float) -> MarginalCost:
        """Slope of the least cost on both sides of a demand.

        At a demand of 0 the upward slope is the one beyond the jump (see `entry_cost`), and the
        downward slope is 0; the upward slope is infinite where no more can be bought or the cost
        jumps.

        Raises
        ------
        NoPurchase
            No offer sells it, not that much, or the demand is no amount.
        """
        demand_kg = self._counted(reagent, demand_kg_per_year)
        if demand_kg == 0.0:
            curve = self.curve(reagent)
            return MarginalCost(float(curve.slope[curve.first]), 0.0)
        curve = self._covering(reagent, demand_kg)
        here = int(curve.piece(np.array([demand_kg]))[0])
        near = demand_kg * (1.0 + 1e-12)
        above = int(curve.piece(np.array([near]))[0])
        if above == curve.high_kg.size:
            return MarginalCost(math.inf, float(curve.slope[here]))
        cost = curve.fixed[here] + curve.slope[here] * demand_kg
        jump = curve.fixed[above] + curve.slope[above] * demand_kg - cost
        up = math.inf if jump > 1e-9 * max(1.0, abs(cost)) else float(curve.slope[above])
        return MarginalCost(up, float(curve.slope[here]))

    def cheapest(self, demand: Mapping[str, float]) -> Deal:
        """Cheapest purchase of a demand per reagent, by the curves.

        Among purchases equally cheap the one with the smaller surplus is taken, then the first.

        Parameters
        ----------
        demand
            Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]

        Raises
        ------
        NoPurchase
            With every reagent that cannot be bought.
        """
        needed = counted_demand(demand, self._offers.keys())
        buys: list[Buy] = []
        reasons: list[str] = []
        for reagent in dict.fromkeys([*needed, *self.reagents]):
            try:
                buys += self._buys(reagent, needed.get(reagent, 0.0))
            except NoPurchase as none:
                reasons += none.reasons
        if reasons:
            raise NoPurchase(reasons)
        return deal_of(buys, gap=0.0, solver="closed form")

    def _buys(self, reagent: str, demand_kg: float) -> list[Buy]:
        if demand_kg == 0.0 and self.sunk(reagent) == 0.0:
            return []
        rows = buys_of(self._bought(reagent, demand_kg), demand_kg)
        return [row for row in rows if row.bought_t_per_year > 0.0 or row.cost_per_year > 0.0]

    def _bought(self, reagent: str, demand_kg: float) -> list[tuple[Offer, float]]:
        curve = self._covering(reagent, demand_kg)
        way = curve.ways[int(curve.piece(np.array([demand_kg]))[0])]
        mine = self._offers[reagent]
        return [(mine[k], kg / mine[k].kg_pure_per_t) for k, kg in way.at(demand_kg)]

    def _covering(self, reagent: str, demand_kg: float) -> CostCurve:
        if reagent not in self._offers:
            raise NoPurchase([no_offer(reagent, self.reagents)])
        curve = self._curves.get(reagent)
        most = 0.0 if curve is None else float(curve.high_kg[-1])
        if curve is None or demand_kg > most:
            raise NoPurchase([beyond_offers(reagent, demand_kg, most)])
        return curve

    def _counted(self, reagent: str, demand_kg: float) -> float:
        if not _is_amount(demand_kg):
            raise NoPurchase([bad_demand(reagent, demand_kg)])
        return _counted_kg(demand_kg)


def _needs_a_solver(offer: Offer) -> bool:
    return offer.pack_t > 0.0 or is_shared(offer)


def cheapest_purchase(demand: Mapping[str, float], offers: Iterable[Offer]) -> Deal:
    """Cheapest purchase of a demand in closed form; see `PriceBook` for many of them.

    Parameters
    ----------
    demand
        Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]
    offers
        Offers; where whole packs, bundles or suppliers' shares are among their terms the cost is a
        lower value, see `PriceBook`.

    Raises
    ------
    NoPurchase
        With every reagent that cannot be bought.
    InputFileError
        With everything that is wrong with the offers.
    """
    return PriceBook(offers).cheapest(demand)


def counted_demand(
    demand: Mapping[str, float], sold: Collection[str], notes: Iterable[str] = ()
) -> dict[str, float]:
    """Demand per reagent over its stages; a trace counts as `LEAST_DEMAND_KG`.

    ``notes`` are said where somebody is missing: which offers were left out, and why.

    Raises
    ------
    NoPurchase
        With every amount that is none and every reagent needed that nobody sells.
    """
    reasons = [bad_demand(key, kg) for key, kg in demand.items() if not _is_amount(kg)]
    summed: dict[str, float] = {}
    for key, kg in demand.items():
        if _is_amount(kg):
            reagent = key.partition("@")[0]
            summed[reagent] = summed.get(reagent, 0.0) + float(kg)
    missing = [
        no_offer(reagent, sorted(sold))
        for reagent, kg in summed.items()
        if kg > 0.0 and reagent not in sold
    ]
    reasons += [*missing, *(notes if missing else ())]
    if reasons:
        raise NoPurchase(reasons)
    return {reagent: _counted_kg(kg) for reagent, kg in summed.items()}


def _is_amount(kg: object) -> bool:
    if isinstance(kg, bool) or not isinstance(kg, (int, float, SupportsFloat)):
        return False
    return 0.0 <= float(kg) < math.inf


def _counted_kg(kg: float) -> float:
    return max(kg, LEAST_DEMAND_KG) if kg > 0.0 else 0.0
