"""What a year's purchase on an offer means for its orders and its stock, week by week.

Owns the way from an offer's terms, a site's store and the use of the weeks to a `LotOffer`, and the
reasons why no orders can work; the model is `optimiser.lot_sizing`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from optimiser.lot_offer import LotOffer
from optimiser.offer import Offer, Tier
from optimiser.order_calendar import DAYS_PER_WEEK, WEEKS, OrderYear
from optimiser.order_size import OrderTerms, order_pieces, terms_of_offer
from optimiser.site import Dosing, StockKeeping

_PERCENT = 100.0
_NEAR = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Bought:
    """What a plan buys on an offer in a year; tonnes of product, money in the site's currency."""

    offer: Offer
    used_t: float
    bought_t: float
    goods: float
    freight: float

    @property
    def price_per_t(self) -> float:
        """Goods of a tonne, all tiers of the year counted."""
        return self.goods / self.bought_t


@dataclass(frozen=True, slots=True, kw_only=True)
class Store:
    """What a site has for one reagent: its size and in which unit; infinite where unknown."""

    size: float
    unit: str

    @classmethod
    def of(cls, installed: Dosing) -> Store:
        """The store of a reagent: a silo in tonnes, a tank in m3, or one of any size."""
        if installed.store_t is not None:
            return cls(size=installed.store_t, unit="t")
        if installed.store_m3 is not None:
            return cls(size=installed.store_m3, unit="m3")
        return cls(size=math.inf, unit="t")

    def volume_per_t(self, offer: Offer) -> float:
        """What a tonne of an offer takes up."""
        return 1.0 / offer.density_kg_per_l if self.unit == "m3" else 1.0


def order_terms(bought: Bought, stock: StockKeeping) -> OrderTerms:
    """The terms of one order; prices by the year's tonnes are what the plan pays on average."""
    offer = bought.offer
    terms = terms_of_offer(
        offer, order_fee=stock.order_fee,
        holding_fraction=stock.holding_percent_per_year / _PERCENT,
    )  # fmt: skip
    if offer.tier_per != "order":
        terms = replace(terms, tiers=(Tier(from_t=0.0, price=bought.price_per_t),))
    if offer.orders_per_year > 0.0:
        size = bought.bought_t / round(offer.orders_per_year)
        terms = replace(terms, least_t=size, most_t=size, pack_t=0.0, load_t=math.inf)
    return terms


def lot_of(bought: Bought, store: Store, stock: StockKeeping, year: OrderYear) -> LotOffer:
    """The orders of an offer as the model sees them.

    Notes
    -----
    The floor at the end of a week is the use of the days after it that a new order takes to come.
    The year opens at that floor, and its first delivery is on the first day if it is needed then.
    """
    offer = bought.offer
    terms = order_terms(bought, stock)
    use = tuple(bought.used_t * share for share in year.shares)
    cover_d = max(offer.lead_time_d, stock.least_stock_d)
    largest = min(terms.load_t, terms.most_t, store.size / store.volume_per_t(offer))
    orders = round(offer.orders_per_year) if offer.orders_per_year > 0.0 else None
    deliveries = math.ceil(max(max(use) / largest, (orders or 0) / WEEKS) - _NEAR)
    holding = terms.holding_fraction * bought.price_per_t / WEEKS
    return LotOffer(
        key=offer.offer, use_t=use,
        floor_t=tuple(bought.used_t * year.ahead(week, cover_d) for week in range(WEEKS)),
        opening_t=bought.used_t * year.ahead(-1, cover_d),
        fees=(stock.order_fee,) * WEEKS, pieces=order_pieces(terms),
        holding_per_t_and_week=holding, least_total_t=bought.bought_t, pack_t=terms.pack_t,
        orders=orders, deliveries_per_week=max(1, deliveries),
        shelf_weeks=int(offer.shelf_life_d // DAYS_PER_WEEK) if offer.shelf_life_d > 0.0 else None,
        volume_per_t=store.volume_per_t(offer), value_per_t=bought.price_per_t,
    )  # fmt: skip


def why_no_orders(
    reagent: str, store: Store, lots: Sequence[LotOffer], bought: Sequence[Bought]
) -> list[str]:
    """What stands against any orders of a reagent, one sentence each; empty where nothing does."""
    name = reagent.replace("_", " ")
    reasons: list[str] = []
    for lot, one in zip(lots, bought, strict=True):
        offer = one.offer
        others = math.fsum(
            other.volume_per_t * min((other.opening_t, *other.held_floor_t))
            for other in lots
            if other is not lot
        )
        room_t = (store.size - others) / lot.volume_per_t
        reasons += _too_small(name, offer, lot, room_t)
        reasons += _too_old(name, offer, lot)
    return reasons


def _too_small(name: str, offer: Offer, lot: LotOffer, room_t: float) -> list[str]:
    if not lot.pieces:
        return [f"{name}: no size of order is possible on {offer.offer}: see its packs and loads"]
    least_t = lot.pieces[0].low_t
    floors = (lot.opening_t, *lot.held_floor_t[:-1])
    safety_t = min(floors)
    there = f" while {safety_t:.3g} t must be in stock" if safety_t > 0.0 else ""
    if least_t + safety_t > room_t * (1.0 + _NEAR):
        return [
            f"{name}: the store takes {room_t:.3g} t of {offer.offer}, its least order of "
            f"{least_t:.3g} t does not fit{there}; a larger store, a smaller least order or "
            "another offer is needed"
        ]
    week_t = max(use + floor for use, floor in zip(lot.use_t, lot.held_floor_t, strict=True))
    if week_t > room_t * (1.0 + _NEAR):
        return [
            f"{name}: the store takes {room_t:.3g} t of {offer.offer}; the use of the heaviest "
            f"week and the stock that must be left after it are {week_t:.3g} t"
        ]
    return []


def _too_old(name: str, offer: Offer, lot: LotOffer) -> list[str]:
    if lot.shelf_weeks is None:
        return []
    if lot.shelf_weeks < 1:
        return [
            f"{name}: {offer.offer} keeps {offer.shelf_life_d:g} days; orders are planned by "
            "the week"
        ]
    for week, floor in enumerate(lot.floor_t):
        ahead = range(week + 1, week + lot.shelf_weeks)
        if floor > math.fsum(lot.use_t[k % WEEKS] for k in ahead) * (1.0 + _NEAR) + _NEAR:
            return [
                f"{name}: {offer.offer} keeps {offer.shelf_life_d:g} days, and the stock that must "
                f"always be there ({floor:.3g} t) would be older before it is used"
            ]
    return []
