"""What plans buy, priced exactly where the search worked with lower values of purchases.

Owns the deal of a point and the last pricing of plans: whole packs, bundles, framework
agreements and suppliers' shares make the price book's curves lower values
(`optimiser.price_book`), and here a solver decides.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.costing import FREIGHT, Priced
from optimiser.deal import GOODS, Deal
from optimiser.errors import NoPurchase
from optimiser.evaluation import Evaluator, Place
from optimiser.purchasing import best_deal
from optimiser.search import Findings

Data = dict[str, Any]
FloatArray = NDArray[np.float64]

AGREEMENTS = "framework agreements"
"""Cause of what belongs to no reagent of the site: fees and rebates of frameworks, and what a
bundle's other members cost."""

_ROUNDING = 1e-12


def deal_of_point(evaluator: Evaluator, priced: Priced, point: int) -> Deal:
    """The cheapest purchase of a point's doses, exact."""
    pricing = evaluator.pricing
    fed = (priced.doses[point] + priced.trim_doses[point]) * pricing.kg_per_mg_per_l
    demand = {evaluator.plant.names[i]: float(fed[i]) for i in np.flatnonzero(fed > 0.0)}
    return best_deal(demand, pricing.book)


def exact_costs(evaluator: Evaluator, priced: Priced, point: int, deal: Deal) -> dict[str, float]:
    """Cost of a point by cause, the purchases as the deal has them, with the total last."""
    found = {cause: float(values[point]) for cause, values in priced.by_cause.items()}
    if evaluator.pricing.book.inexact:
        for name in evaluator.plant.names:
            mine = [buy for buy in deal.buys if buy.reagent == name]
            found[name] = math.fsum(buy.cost_per_year - buy.freight_per_year for buy in mine)
        found[FREIGHT] = deal.cost[FREIGHT]
        shown = math.fsum(found[name] for name in (*evaluator.plant.names, FREIGHT))
        rest = deal.cost["total"] - shown
        found[AGREEMENTS] = rest if abs(rest) > _ROUNDING * abs(shown) else 0.0
        found["total"] = math.fsum(found.values())
    else:
        found["total"] = float(priced.total[point])
    return {cause: value for cause, value in found.items() if value != 0.0 or cause == "total"}


def purchase_rows(evaluator: Evaluator, deal: Deal) -> list[Data]:
    """What is bought on each offer, in tonnes of product."""
    strengths = {o.offer: o.strength_fraction for o in evaluator.site.offers}
    rows = []
    for buy in deal.buys:
        per_t = 1000.0 * strengths[buy.offer]
        other = [v for cause, v in buy.by_cause.items() if cause not in {GOODS, FREIGHT}]
        rows.append(
            {
                "offer": buy.offer, "supplier": buy.supplier, "reagent": buy.reagent,
                "product": buy.product, "used_t_per_year": buy.used_kg_pure_per_year / per_t,
                "bought_t_per_year": buy.bought_t_per_year,
                "surplus_t_per_year": buy.surplus_kg_pure_per_year / per_t,
                "tier": buy.tier, "orders_per_year": buy.orders_per_year,
                "goods_per_year": buy.goods_per_year,
                "freight_per_year": buy.freight_per_year, "other_per_year": math.fsum(other),
            }
        )  # fmt: skip
    return rows


def price_exactly(evaluator: Evaluator, findings: Findings) -> None:
    """Give every plan that was found its exact cost, in place.

    Where the price book's curves are exact nothing is done. A plan that cannot be bought under the
    terms that tie offers together is dropped.

    Raises
    ------
    NoPurchase
        No plan can be bought.
    """
    if not evaluator.pricing.book.inexact:
        return
    reasons: dict[str, None] = {}
    for recipe, track in findings.feasible:
        try:
            findings.best[recipe] = replace(track, place=exact_place(evaluator, track.place))
        except NoPurchase as none:
            reasons |= dict.fromkeys(none.reasons)
            del findings.best[recipe]
    if not findings.feasible:
        raise NoPurchase(reasons)


def exact_place(evaluator: Evaluator, place: Place) -> Place:
    """The place with its exact cost.

    Raises
    ------
    NoPurchase
        Its doses cannot be bought under the terms that tie offers together.
    """
    if not evaluator.pricing.book.inexact:
        return place
    deal = deal_of_point(evaluator, place.seen.priced, place.point)
    costs = exact_costs(evaluator, place.seen.priced, place.point, deal)
    seen = replace(place.seen, priced=_with_costs(place.seen.priced, place.point, costs))
    return replace(place, seen=seen)


def _with_costs(priced: Priced, point: int, costs: Mapping[str, float]) -> Priced:
    """The same prices with other costs at one point."""
    total = priced.total.copy()
    total[point] = costs["total"]
    by_cause: dict[str, FloatArray] = {}
    for cause in [*priced.by_cause, *(c for c in costs if c not in priced.by_cause)]:
        if cause != "total":
            values = priced.by_cause.get(cause, np.zeros(total.size)).copy()
            values[point] = costs.get(cause, 0.0)
            by_cause[cause] = values
    return replace(priced, by_cause=by_cause, total=total)
