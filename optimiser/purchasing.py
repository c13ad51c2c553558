"""Purchasing: one block for every model, and pure comparisons of contracts.

Owns how a demand is covered from offers: which offers, how much product, at what cost by cause.
The closed form for the present terms is `optimiser.price_book`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import TYPE_CHECKING, cast

from optimiser.deal import FREIGHT, GOODS, KG_PER_T, Buy, Deal, buy_of, deal_of
from optimiser.errors import (
    Interrupted,
    ModelError,
    NoPurchase,
    no_offer,
    unbounded_demand,
)
from optimiser.linear_model import FEASIBILITY_TOLERANCE, Expression, Model, Sense
from optimiser.price_book import PriceBook, cheapest_purchase, counted_demand
from optimiser.solver import SolverPort, Termination, open_solver

if TYPE_CHECKING:
    import pandas as pd

    from optimiser.site import Offer

__all__ = ["PriceBook", "PurchasingBlock", "add_purchasing", "cheapest_purchase", "purchase"]

_LEAST_BUY_T = 1e-7
"""Less than a tenth of a gram of product is a solver's rounding, not a purchase."""

_COMPARISON_GAP = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class OfferColumns:
    """The variables of one offer: tonnes of product bought in a year, and whether it is used."""

    bought: str
    used: str | None
    most_t: float


CostTerm = Callable[[Model, "Offer", OfferColumns], tuple[str, Expression]]
"""One price term of an offer: adds what variables and rows it needs, returns cause and cost."""


def goods(_model: Model, offer: Offer, columns: OfferColumns) -> tuple[str, Expression]:
    """Price of the product, per tonne bought."""
    return GOODS, Expression({columns.bought: offer.price_per_t})


def freight(_model: Model, offer: Offer, columns: OfferColumns) -> tuple[str, Expression]:
    """Carriage, per tonne bought."""
    return FREIGHT, Expression({columns.bought: offer.freight_per_t})


COST_TERMS: tuple[CostTerm, ...] = (goods, freight)
"""Every price term that offers have; a new kind of term is a new function in this table."""


@dataclass(frozen=True, eq=False)
class PurchasingBlock:
    """The purchasing part of a model, and the way from a solution to a deal."""

    offers: Mapping[str, Offer]
    columns: Mapping[str, OfferColumns]
    costs: Mapping[str, Mapping[str, Expression]]
    demands: Mapping[str, Expression]

    def deal(self, values: Mapping[str, float], *, gap: float | None, solver: str) -> Deal:
        """Read the deal out of a solution.

        Within a reagent, demand is drawn from the cheapest delivered compound first, so a surplus
        shows on the dearer offer. What a solver's tolerance left short is bought on top.
        """
        buys: list[Buy] = []
        for reagent, demand in self.demands.items():
            bought = self._bought(reagent, values)
            buys += self._buys(bought, self._covering(bought, demand.value(values)), values)
        return deal_of(buys, gap=gap, solver=solver)

    def _bought(self, reagent: str, values: Mapping[str, float]) -> dict[str, float]:
        """Tonnes by offer, cheapest delivered compound first, without a solver's rounding."""
        mine = [key for key, offer in self.offers.items() if offer.reagent == reagent]
        bought = {}
        for key in sorted(mine, key=lambda key: _delivered_per_kg(self.offers[key])):
            columns = self.columns[key]
            tonnes = values[columns.bought]
            is_used = tonnes > _LEAST_BUY_T if columns.used is None else values[columns.used] > 0.5
            if is_used:
                bought[key] = max(tonnes, self.offers[key].least_order_t)
        return bought

    def _covering(self, bought: dict[str, float], demand_kg: float) -> float:
        """Add to the cheapest offer what a solver's tolerance left short; return the demand."""
        pure = {key: KG_PER_T * self.offers[key].strength_fraction for key in bought}
        short = demand_kg - math.fsum(pure[key] * bought[key] for key in bought)
        if not bought:
            return 0.0
        if short > 0.0:
            first = next(iter(bought))
            bought[first] += short / pure[first]
        return max(demand_kg, 0.0)

    def _buys(
        self, bought: Mapping[str, float], demand_kg: float, values: Mapping[str, float]
    ) -> list[Buy]:
        left = demand_kg
        buys = []
        for key, tonnes in bought.items():
            offer = self.offers[key]
            at = {**values, self.columns[key].bought: tonnes}
            costs = {cause: amount.value(at) for cause, amount in self.costs[key].items()}
            least = offer.least_order_t
            buy = buy_of(
                offer,
                bought_t=tonnes,
                used_kg=left,
                costs=costs,
                at_least=0.0 < tonnes <= least * (1.0 + FEASIBILITY_TOLERANCE),
            )
            left -= buy.used_kg_pure_per_year
            buys.append(buy)
        return buys


def add_purchasing(
    model: Model,
    offers: Sequence[Offer],
    demands: Mapping[str, Expression | float],
    *,
    cost_terms: Sequence[CostTerm] = COST_TERMS,
) -> PurchasingBlock:
    """Add to a model that every demand is bought, at the least cost.

    Parameters
    ----------
    model
        Gets the variables ``bought <offer>`` and ``used <offer>``, the rows ``cover <reagent>``,
        ``most <offer>`` and ``least <offer>``, and the costs ``goods`` and ``freight``.
    offers
        Everything on offer; offers of reagents without demand are left out.
    demands
        Demand per reagent: a number, or an expression of variables that are in the model already.
        Ranges of those variables must bound it where an offer has a least order. [kg pure/year]
    cost_terms
        The price terms to charge.

    Returns
    -------
    PurchasingBlock
        Reads the deal out of a solution.

    Raises
    ------
    NoPurchase
        No offer sells a reagent that may be needed.
    ModelError
        A demand without upper end meets a least order.

    Notes
    -----
    For offers ``o`` of reagent ``r`` with strength ``s`` and least order ``l``::

        1000 sum(s_o bought_o) >= demand_r
        l_o used_o <= bought_o <= max(l_o, highest demand_r / (1000 s_o)) used_o,  used_o in {0, 1}

    The second line stands only for offers with a least order. Buying more than the larger of least
    order and need never pays, so the upper end cuts off nothing.
    """
    wanted = {name: _as_expression(demand) for name, demand in demands.items()}
    wanted = {name: demand for name, demand in wanted.items() if model.highest(demand) > 0.0}
    sold = {offer.reagent for offer in offers}
    missing = [no_offer(name, sorted(sold)) for name in wanted if name not in sold]
    if missing:
        raise NoPurchase(missing)
    chosen = {offer.offer: offer for offer in offers if offer.reagent in wanted}
    columns = {
        key: _add_columns(model, offer, wanted[offer.reagent]) for key, offer in chosen.items()
    }
    for name, demand in wanted.items():
        cover = {
            columns[key].bought: KG_PER_T * offer.strength_fraction
            for key, offer in chosen.items()
            if offer.reagent == name
        }
        terms = Expression(cover).plus(demand.times(-1.0)).terms
        model.add_row(f"cover {name}", terms, Sense.AT_LEAST, demand.constant)
    costs = {
        key: _add_costs(model, offer, columns[key], cost_terms) for key, offer in chosen.items()
    }
    return PurchasingBlock(chosen, columns, costs, wanted)


def purchase(
    demand: Mapping[str, float],
    offers: str | PathLike[str] | pd.DataFrame | Sequence[Offer],
    *,
    solver: SolverPort | str = "highs",
) -> Deal:
    """Cover a demand from offers at the least cost.

    Parameters
    ----------
    demand
        Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]
    offers
        A price book file, a frame with its columns, or offers.
    solver
        ``highs``, ``cbc``, or a solver of your own.

    Returns
    -------
    Deal
        Cost by cause and what is bought on each offer.

    Raises
    ------
    NoPurchase
        The offers cannot cover the demand; every reason is named.
    InputFileError
        The offers cannot be used as they stand.
    Interrupted
        The solver's time limit came before any solution.

    Examples
    --------
    >>> from optimiser.site import Offer
    >>> soda = Offer(offer="S1", supplier="Alder Chemicals", reagent="soda_ash", product="dense",
    ...              form="powder", strength_fraction=0.99, density_kg_per_l=1.0, price=310.0,
    ...              price_per="t", freight_per_t=20.0, least_order_t=5.0)
    >>> deal = purchase({"soda_ash": 2970.0}, [soda])
    >>> deal.cost
    {'goods': 1550.0, 'freight': 100.0, 'total': 1650.0}
    >>> round(deal.buys[0].surplus_kg_pure_per_year, 6)
    1980.0
    """
    given = read_offers(offers)
    needed = counted_demand(demand, {offer.reagent for offer in given})
    port = open_solver(solver, relative_gap=_COMPARISON_GAP) if isinstance(solver, str) else solver
    model = Model("purchase")
    block = add_purchasing(model, given, needed)
    report = port.solve(model)
    if report.termination is Termination.TIME_LIMIT_WITHOUT_SOLUTION:
        raise Interrupted(f"{report.solver} found no purchase within its time limit")
    if not report.termination.has_solution:
        raise ModelError(f"{report.solver} ended a purchase with: {report.termination.value}")
    return block.deal(report.values, gap=report.gap, solver=report.version)


def _as_expression(demand: Expression | float) -> Expression:
    return demand if isinstance(demand, Expression) else Expression({}, float(demand))


def _add_columns(model: Model, offer: Offer, demand: Expression) -> OfferColumns:
    bought = f"bought {offer.offer}"
    if offer.least_order_t <= 0.0:
        model.add_variable(bought)
        return OfferColumns(bought=bought, used=None, most_t=math.inf)
    most_needed_t = model.highest(demand) / (KG_PER_T * offer.strength_fraction)
    if not math.isfinite(most_needed_t):
        raise ModelError(unbounded_demand(offer.reagent, offer.offer))
    most_t = max(offer.least_order_t, most_needed_t)
    model.add_variable(bought, high=most_t)
    used = model.add_variable(f"used {offer.offer}", high=1.0, integer=True)
    model.add_row(f"most {offer.offer}", {bought: 1.0, used: -most_t}, Sense.AT_MOST, 0.0)
    least = {bought: 1.0, used: -offer.least_order_t}
    model.add_row(f"least {offer.offer}", least, Sense.AT_LEAST, 0.0)
    return OfferColumns(bought=bought, used=used, most_t=most_t)


def _add_costs(
    model: Model, offer: Offer, columns: OfferColumns, cost_terms: Sequence[CostTerm]
) -> dict[str, Expression]:
    costs: dict[str, Expression] = {}
    for term in cost_terms:
        cause, amount = term(model, offer, columns)
        model.add_cost(cause, amount)
        costs[cause] = costs.get(cause, Expression()).plus(amount)
    return costs


def _delivered_per_kg(offer: Offer) -> float:
    return (offer.price_per_t + offer.freight_per_t) / (KG_PER_T * offer.strength_fraction)


def read_offers(given: str | PathLike[str] | pd.DataFrame | Sequence[Offer]) -> tuple[Offer, ...]:
    """Offers from a price book file, a frame with its columns, or offers."""
    if isinstance(given, (str, PathLike)):
        from optimiser.offers_reader import load_offers

        return load_offers(Path(given))
    from optimiser.offer_checks import offers_from_frame, require_usable_offers

    if hasattr(given, "to_dict"):
        return offers_from_frame(cast("pd.DataFrame", given))
    return require_usable_offers(given)
