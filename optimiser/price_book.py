"""The cheapest purchase in closed form, for offers with one price and a least order.

Owns the proof that one offer per reagent is enough under these terms, and the slope of the least
cost. Terms beyond these need the mixed-integer block of `optimiser.purchasing`.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass
from typing import SupportsFloat

import numpy as np
from numpy.typing import NDArray

from optimiser.deal import FREIGHT, GOODS, KG_PER_T, Buy, Deal, buy_of, deal_of
from optimiser.errors import NoPurchase, bad_demand, no_offer
from optimiser.offer_checks import require_usable_offers
from optimiser.site import Offer

FloatArray = NDArray[np.float64]

LEAST_DEMAND_KG = 1e-3
"""A demand above 0 counts as a gram a year at least: below that, solvers see nothing."""

_TIE = 1e-12
"""Offers whose costs differ by less than this fraction are equally cheap."""


@dataclass(frozen=True, slots=True)
class MarginalCost:
    """Change of the least yearly cost per kg pure more, and per kg pure less, of a reagent.

    They differ where two offers cost the same and where a least order is just used up. Either is 0
    while the demand stays below the least order of the cheapest offer.
    """

    up_per_kg: float
    down_per_kg: float


@dataclass(frozen=True, slots=True)
class _Line:
    """An offer as the closed form sees it: unit cost and least order of pure compound."""

    offer: Offer
    per_kg: float
    least_kg: float

    def cost(self, demand_kg: float) -> float:
        return self.per_kg * max(demand_kg, self.least_kg)


class PriceBook:
    """Offers prepared for pricing many demands.

    Notes
    -----
    With unit cost ``c_i`` and least order ``m_i`` per offer, both per kg pure, the least cost of
    ``D`` kg of one reagent is ``min_i c_i max(D, m_i)``: splitting never helps. Take any purchase
    ``q_i`` that covers ``D`` and let ``k`` be the offer with the least ``c`` among those used. All
    of ``sum q`` bought from ``k`` costs ``c_k sum q <= sum c_i q_i``; it covers ``D``, and it
    respects the least order because ``sum q >= q_k >= m_k``. Hence buying ``max(D, m_k) <= sum q``
    from ``k`` alone costs no more. The argument needs prices of 0 or more and no ceiling on any
    offer; tiers, packs or caps break it. Reagents do not share offers, so each stands alone.
    """

    def __init__(self, offers: Iterable[Offer]) -> None:
        self._lines: dict[str, list[_Line]] = {}
        for offer in require_usable_offers(offers):
            pure_kg_per_t = KG_PER_T * offer.strength_fraction
            per_kg = (offer.price_per_t + offer.freight_per_t) / pure_kg_per_t
            line = _Line(offer, per_kg, offer.least_order_t * pure_kg_per_t)
            self._lines.setdefault(offer.reagent, []).append(line)

    @property
    def reagents(self) -> tuple[str, ...]:
        """Reagents that some offer sells, sorted."""
        return tuple(sorted(self._lines))

    def cost(self, reagent: str, demand_kg_per_year: float) -> float:
        """Least yearly cost of one reagent's demand, goods and freight.

        Raises
        ------
        NoPurchase
            No offer sells it, or the demand is no amount.
        """
        demand_kg = self._counted(reagent, demand_kg_per_year)
        if demand_kg == 0.0:
            return 0.0
        return min(line.cost(demand_kg) for line in self._sold(reagent))

    def costs(self, reagent: str, demand_kg: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Goods and freight of the cheapest purchase of many demands of one reagent.

        Parameters
        ----------
        reagent
            Id of the reagent; nobody selling it costs infinitely much.
        demand_kg : ndarray, shape (n,)
            Demands. [kg pure/year]

        Returns
        -------
        ndarray, ndarray, shape (n,)
            [currency/year]
        """
        demand = np.asarray(demand_kg, dtype=float)
        goods, freight = np.full(demand.shape, np.inf), np.zeros(demand.shape)
        best = np.full(demand.shape, np.inf)
        for line in self._lines.get(reagent, ()):
            cost = line.per_kg * np.maximum(demand, line.least_kg)
            better = cost < best
            share = line.offer.freight_per_t / max(
                line.offer.price_per_t + line.offer.freight_per_t, 1e-300
            )
            goods = np.where(better, (1.0 - share) * cost, goods)
            freight = np.where(better, share * cost, freight)
            best = np.where(better, cost, best)
        used = demand > 0.0
        return np.where(used, goods, 0.0), np.where(used, freight, 0.0)

    def offer_for(self, reagent: str, demand_kg_per_year: float) -> Offer:
        """The offer that a demand is bought on, as in `cheapest`.

        Raises
        ------
        NoPurchase
            No offer sells it, or the demand is no amount.
        """
        return self._best_line(reagent, self._counted(reagent, demand_kg_per_year)).offer

    def entry_cost(self, reagent: str) -> float:
        """Least yearly cost of buying any of a reagent at all: the jump at a demand of 0.

        Raises
        ------
        NoPurchase
            No offer sells it.
        """
        return min(line.per_kg * line.least_kg for line in self._sold(reagent))

    def marginal_cost(self, reagent: str, demand_kg_per_year: float) -> MarginalCost:
        """Slope of the least cost on both sides of a demand.

        At a demand of 0 the upward slope is the one beyond the jump (see `entry_cost`), and the
        downward slope is 0.

        Raises
        ------
        NoPurchase
            No offer sells it, or the demand is no amount.
        """
        demand_kg = self._counted(reagent, demand_kg_per_year)
        cheapest = self._cheapest_lines(reagent, demand_kg)
        up = min(line.per_kg if demand_kg >= line.least_kg else 0.0 for line in cheapest)
        down = max(line.per_kg if demand_kg > line.least_kg else 0.0 for line in cheapest)
        return MarginalCost(up, down)

    def cheapest(self, demand: Mapping[str, float]) -> Deal:
        """Cheapest purchase of a demand per reagent.

        Among offers equally cheap the one with the smaller surplus is taken, then the first.

        Parameters
        ----------
        demand
            Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]

        Raises
        ------
        NoPurchase
            With every reagent that cannot be bought.
        """
        needed = counted_demand(demand, self._lines.keys())
        buys = [self._buy(reagent, kg) for reagent, kg in needed.items() if kg > 0.0]
        return deal_of(buys, gap=0.0, solver="closed form")

    def _buy(self, reagent: str, demand_kg: float) -> Buy:
        line = self._best_line(reagent, demand_kg)
        offer = line.offer
        at_least = demand_kg <= line.least_kg
        tonnes = (
            offer.least_order_t if at_least else demand_kg / (KG_PER_T * offer.strength_fraction)
        )
        costs = {GOODS: tonnes * offer.price_per_t, FREIGHT: tonnes * offer.freight_per_t}
        return buy_of(offer, bought_t=tonnes, used_kg=demand_kg, costs=costs, at_least=at_least)

    def _counted(self, reagent: str, demand_kg: float) -> float:
        if not _is_amount(demand_kg):
            raise NoPurchase([bad_demand(reagent, demand_kg)])
        return _counted_kg(demand_kg)

    def _sold(self, reagent: str) -> list[_Line]:
        if reagent not in self._lines:
            raise NoPurchase([no_offer(reagent, self.reagents)])
        return self._lines[reagent]

    def _best_line(self, reagent: str, demand_kg: float) -> _Line:
        lines = self._cheapest_lines(reagent, demand_kg)
        return min(lines, key=lambda one: max(demand_kg, one.least_kg))

    def _cheapest_lines(self, reagent: str, demand_kg: float) -> list[_Line]:
        lines = self._sold(reagent)
        costs = [line.cost(demand_kg) for line in lines]
        least = min(costs)
        return [
            line for line, cost in zip(lines, costs, strict=True) if cost <= least * (1.0 + _TIE)
        ]


def cheapest_purchase(demand: Mapping[str, float], offers: Iterable[Offer]) -> Deal:
    """Cheapest purchase of a demand in closed form; see `PriceBook` for many of them.

    Parameters
    ----------
    demand
        Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]
    offers
        Offers with one price and a least order each.

    Raises
    ------
    NoPurchase
        With every reagent that cannot be bought.
    InputFileError
        With everything that is wrong with the offers.
    """
    return PriceBook(offers).cheapest(demand)


def counted_demand(demand: Mapping[str, float], sold: Collection[str]) -> dict[str, float]:
    """Demand per reagent over its stages; a trace counts as `LEAST_DEMAND_KG`.

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
    reasons += [
        no_offer(reagent, sorted(sold))
        for reagent, kg in summed.items()
        if kg > 0.0 and reagent not in sold
    ]
    if reasons:
        raise NoPurchase(reasons)
    return {reagent: _counted_kg(kg) for reagent, kg in summed.items()}


def _is_amount(kg: object) -> bool:
    if isinstance(kg, bool) or not isinstance(kg, (int, float, SupportsFloat)):
        return False
    return 0.0 <= float(kg) < math.inf


def _counted_kg(kg: float) -> float:
    return max(kg, LEAST_DEMAND_KG) if kg > 0.0 else 0.0
