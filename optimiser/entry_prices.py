"""Entry prices: what a losing offer would have to cost to be bought in the cheapest plan.

Owns the price at which a plan that buys the offer costs what the plan costs, with a bracket that
is verified on both sides; recipes come from the search and are polished at every price tried.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from optimiser.errors import NoPurchase
from optimiser.evaluation import Evaluator, Place
from optimiser.nearby import Standing, changed, repolish
from optimiser.offer import Offer
from optimiser.polish import Track
from optimiser.price_book import cheapest_purchase

Data = dict[str, Any]

BELOW, ABOVE = 1e-4, 8e-4  # bracket around an entry price, as shares of it
MOST_PRICES = 8
RECIPES_TRIED = 2
LEAST_PRICE_PER_T = 1e-6
SAME_COST = 1e-9


@dataclass(frozen=True, slots=True, eq=False)
class _Bid:
    """A verified point that would buy the offer: where it breaks even, and how much it buys."""

    price_per_t: float
    tonnes: float
    place: Place


def entry_prices(plan: Standing, known: Sequence[Track], bought: Sequence[str]) -> list[Data]:
    """Entry price of every offer that the plan does not buy.

    Parameters
    ----------
    plan
        The plan.
    known
        Feasible tracks of the search, of any recipe.
    bought
        Ids of the offers that the plan buys.

    Returns
    -------
    list of dict
        ``entry_price_per_t`` without freight, with ``bracket_low`` and ``bracket_high``: at the low
        price a verified plan that buys the offer is cheaper than the plan, at the high price none
        that was polished is; ``verified`` whether both were shown. None where even a price of 0
        leaves it dearer, or where no recipe with its reagent is known.

    Notes
    -----
    Let ``V(p)`` be the least cost of a recipe that has to buy the offer at price ``p``. It is a
    minimum of functions that are linear in ``p`` (cost without the offer, plus tonnes bought times
    price and freight), hence concave, and Newton's steps from below rise to the price where ``V``
    meets the cost ``F`` of the plan: ``p + (F - V(p)) / tonnes(p)``. The step stops where a polish
    at a price 0.08 % higher finds nothing below ``F``. For a second offer of a reagent in the plan
    the first step is the closed form: what the demand costs now, per tonne of the offer, less its
    freight.
    """
    losing = [o for o in plan.evaluator.site.offers if o.offer not in set(bought)]
    return [entry_price(plan, offer, known) for offer in losing]


def entry_price(plan: Standing, offer: Offer, known: Sequence[Track]) -> Data:
    """Entry price of one offer against a plan; see `entry_prices`."""
    evaluator = plan.evaluator
    row: Data = {
        "offer": offer.offer, "supplier": offer.supplier, "reagent": offer.reagent,
        "price_per_t": offer.price_per_t, "freight_per_t": offer.freight_per_t,
        "entry_price_per_t": None, "bracket_low": None, "bracket_high": None, "verified": False,
        "recipe": None, "at_price_0_dearer_by": None, "in_plan": False,
        "allowed": offer.reagent in evaluator.plant.index,
    }  # fmt: skip
    if not row["allowed"]:
        return {**row, "why": "its reagent is not allowed at this site"}
    in_plan = _bid(evaluator, offer, plan.place, plan.total) is not None
    row["in_plan"] = in_plan
    row["why"] = _why(plan, offer) if in_plan else "its reagent is not in the plan"
    places = [plan.place, *[track.place for track in known]]
    bids = [b for p in places if (b := _bid(evaluator, offer, p, plan.total)) is not None]
    if not bids:
        return {**row, "why": f"{row['why']}, and no recipe that uses it is known to comply"}
    bids.sort(key=lambda bid: -bid.price_per_t)
    # where no price pays as the points stand, the cheapest at a price of 0 may still move there
    free = min(bids, key=lambda bid: -bid.price_per_t * bid.tonnes)
    tried = dict.fromkeys([*bids[:RECIPES_TRIED], *([free] if bids[0].price_per_t <= 0.0 else [])])
    return {**row, **_rise(plan, offer, list(tried))}


def _bid(evaluator: Evaluator, offer: Offer, place: Place, plan_total: float) -> _Bid | None:
    """Break-even price of an offer at a point as it stands; None where its reagent is not used."""
    reagent = evaluator.plant.index[offer.reagent]
    priced, row = place.seen.priced, place.point
    dose = priced.doses[row, reagent] + priced.trim_doses[row, reagent]
    if dose <= 0.0:
        return None
    kg = dose * evaluator.pricing.kg_per_mg_per_l
    mine = evaluator.pricing.purchase(reagent, kg[None])
    now = float(mine[0][0] + mine[1][0])
    tonnes, other = _alone(offer, float(kg))
    if not tonnes:
        return None
    rest = float(priced.total[row]) - now
    return _Bid((plan_total - rest - other) / tonnes, tonnes, place)


def _alone(offer: Offer, kg: float) -> tuple[float, float]:
    """What a demand takes on an offer alone: goods over its price, and every other cost.

    Where the price has tiers, goods over the first tier's price are the tonnes that would cost as
    much at that price: all tiers move with it.
    """
    priced = offer if offer.price_per_t > 0.0 else offer.priced_at(LEAST_PRICE_PER_T)
    try:
        (buy, *_) = cheapest_purchase({offer.reagent: kg}, [priced]).buys
    except NoPurchase:
        return 0.0, 0.0
    scaling = buy.goods_per_year + buy.not_taken_per_year + buy.rebate_per_year
    return scaling / priced.price_per_t, buy.cost_per_year - scaling


def _why(plan: Standing, offer: Offer) -> str:
    """What the offer costs more than the one bought, at the plan's demand."""
    bid = _bid(plan.evaluator, offer, plan.place, plan.total)
    assert bid is not None, "the plan uses the reagent"
    more = bid.tonnes * (offer.price_per_t - bid.price_per_t)
    least = " (its least order exceeds the demand)" if bid.tonnes <= offer.least_order_t else ""
    return f"{plan.evaluator.site.currency} {more:,.0f} a year dearer at this demand{least}"


def _rise(plan: Standing, offer: Offer, bids: Sequence[_Bid]) -> Data:
    """Raise the price from the best bid until no polished plan that buys the offer pays."""
    best, high = bids[0], bids[0].price_per_t
    if best.price_per_t <= 0.0:
        started = [_polished(plan, offer, 0.0, bid.place) for bid in bids]
        tracks = [track for track in started if track.feasible]
        least = min((track.total for track in tracks), default=None)
        if least is None or least >= plan.total:
            dearer = None if least is None else least - plan.total
            return {"at_price_0_dearer_by": dearer, "verified": least is not None}
        bids = [_at(plan, offer, track) for track in tracks]
        best = max(bids, key=lambda bid: bid.price_per_t)
    for _ in range(MOST_PRICES):
        high = max(best.price_per_t * (1.0 + ABOVE), best.price_per_t + LEAST_PRICE_PER_T)
        tracks = [_polished(plan, offer, high, bid.place) for bid in bids]
        bids = [
            _at(plan, offer, track) if track.feasible else bid
            for track, bid in zip(tracks, bids, strict=True)
        ]
        cheaper = [t for t in tracks if t.feasible and t.total < plan.total * (1.0 - SAME_COST)]
        if not cheaper:
            return _bracket(plan, offer, best, high)
        best = max(bids, key=lambda bid: bid.price_per_t)
    return {**_bracket(plan, offer, best, high), "verified": False}


def _at(plan: Standing, offer: Offer, track: Track) -> _Bid:
    """Break-even price at a polished point; the evaluation there is priced at another price."""
    seen = plan.evaluator.evaluate(track.point, near=[track.place])
    bid = _bid(plan.evaluator, offer, Place(seen, 0), plan.total)
    assert bid is not None, "polishing keeps every reagent of a recipe"
    return _Bid(bid.price_per_t, bid.tonnes, track.place)


def _bracket(plan: Standing, offer: Offer, best: _Bid, high: float) -> Data:
    """Check the low side at the point found, and write down both."""
    low = max(0.0, best.price_per_t * (1.0 - BELOW))
    point = best.place.seen.points.take([best.place.point])
    seen = _forced(plan, offer, low).evaluate(point, near=[best.place])
    pays = bool(seen.feasible[0]) and float(seen.total[0]) < plan.total
    return {
        "entry_price_per_t": best.price_per_t, "bracket_low": low, "bracket_high": high,
        "verified": pays, "recipe": _recipe(plan, point.doses[0], int(point.controller[0])),
    }  # fmt: skip


def _polished(plan: Standing, offer: Offer, price_per_t: float, place: Place) -> Track:
    """Polish a recipe that has to buy the offer at a price."""
    return repolish(_forced(plan, offer, price_per_t), place, plan.solver)


def _forced(plan: Standing, offer: Offer, price_per_t: float) -> Evaluator:
    """The site where the offer, at a price, is the only one of its reagent."""
    site = plan.evaluator.site
    priced = offer.priced_at(price_per_t)
    offers = (*(o for o in site.offers if o.reagent != offer.reagent), priced)
    return changed(plan.evaluator, replace(site, offers=offers))


def _recipe(plan: Standing, doses: Any, controller: int) -> list[str]:
    names = plan.evaluator.plant.names
    return [n for i, n in enumerate(names) if doses[i] > 0.0 or i == controller]


def recipe_at(plan: Standing, place: Place) -> list[str]:
    """Reagents of a point, its controller among them."""
    point = place.seen.points.take([place.point])
    return _recipe(plan, point.doses[0], int(point.controller[0]))
