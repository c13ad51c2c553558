"""The orders of a year: what to order, how much and when, for the offers that a plan buys on.

Owns the way from a site to its order plan, and the data that text, table and chart show. Stock of a
reagent's offers shares the store that the site names for it under `dosing`.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import groupby
from typing import TYPE_CHECKING, Any

from optimiser.errors import NoOrderPlan
from optimiser.lot_offer import Delivery, LotOffer, LotPlan
from optimiser.lot_sizing import plan_lots
from optimiser.order_calendar import WEEKS, OrderYear, order_year
from optimiser.order_lots import Bought, Store, lot_of, order_terms, why_no_orders
from optimiser.order_size import steady_order
from optimiser.price_book import PriceBook
from optimiser.purchasing import best_deal
from optimiser.site import Dosing, Site
from optimiser.site_comparison import GIVEN, PLAN
from optimiser.solver import open_solver

if TYPE_CHECKING:
    import pandas as pd

Data = dict[str, Any]

GOODS, FREIGHT, FEES, HOLDING, WRITTEN_OFF = (
    "goods", "freight", "order fees", "holding", "written off",
)  # fmt: skip
GAP = 2e-3
MOST_SECONDS = 30.0
_SHOWN_T = 1e-4


@dataclass(frozen=True, eq=False, kw_only=True)
class StoreOrders:
    """The orders of one reagent: its store, and what each offer brings into it."""

    reagent: str
    store: Store
    bought: tuple[Bought, ...]
    lots: tuple[LotOffer, ...]
    plans: Mapping[str, LotPlan]
    gap: float | None


@dataclass(frozen=True, eq=False, kw_only=True)
class OrderPlan:
    """Orders of a year, by store."""

    site: Site
    year: OrderYear
    demand_from: str
    stores: tuple[StoreOrders, ...]

    def to_dict(self) -> Data:
        """Everything as plain data, as ``--json`` prints it."""
        stock = self.site.stock
        totals = [_total(self, held, k) for held in self.stores for k in range(len(held.lots))]
        orders = [row for held in self.stores for row in _orders(self, held)]
        causes = (GOODS, FREIGHT, FEES, HOLDING, WRITTEN_OFF)
        cost = {cause: math.fsum(row[_KEYS[cause]] for row in totals) for cause in causes}
        return {
            "site": {"name": self.site.name, "currency": self.site.currency},
            "demand_from": self.demand_from, "use_from": self.year.basis,
            "first_day": self.year.starts[0].isoformat(), "year_ends": self.year.end.isoformat(),
            "order_fee": stock.order_fee, "least_stock_d": stock.least_stock_d,
            "holding_percent_per_year": stock.holding_percent_per_year,
            "orders": sorted(orders, key=lambda row: (row["delivered"], row["offer"])),
            "offers": totals,
            "stores": [_stock(self.year, held) for held in self.stores],
            "cost": {**cost, "total": math.fsum(cost.values())},
            "notes": _notes(self, totals),
        }  # fmt: skip

    def to_frame(self) -> pd.DataFrame:
        """Return the orders, one row per day and offer."""
        import pandas as pd

        return pd.DataFrame(self.to_dict()["orders"])


def plan_orders(
    site: Site,
    demand: Mapping[str, float] | None = None,
    *,
    first_day: datetime.date | None = None,
    progress: Callable[[str], None] | None = None,
) -> OrderPlan:
    """Plan the orders of a year.

    Parameters
    ----------
    site
        The site, with its offers, stores (`dosing`) and what orders and stock cost (`stock`).
    demand
        Demand per reagent; left out: that of the site's plan. [kg pure/year]
    first_day
        First day of the year; the first of next month when left out.
    progress
        Called with a sentence now and then.

    Returns
    -------
    OrderPlan
        Orders that keep every week's stock within store, floor and shelf life at the least cost.

    Raises
    ------
    NoOrderPlan
        No orders can; the reasons are named.
    NoPurchase
        The offers cannot cover the demand.
    NoPlan
        The plan's demand is wanted and there is no plan.
    """
    bought = _given(site, demand) if demand else _of_plan(site, progress)
    year = order_year(site, first_day or _next_month(datetime.date.today()))
    ready, reasons = [], []
    for reagent, group in groupby(bought, key=lambda one: one.offer.reagent):
        mine = tuple(group)
        store = Store.of(site.dosing.get(reagent, Dosing()))
        lots = tuple(lot_of(one, store, site.stock, year) for one in mine)
        reasons += why_no_orders(reagent, store, lots, mine)
        ready.append((reagent, store, mine, lots))
    if reasons:
        raise NoOrderPlan(reasons)
    stores = []
    for reagent, store, mine, lots in ready:
        if progress is not None:
            progress(f"orders of {reagent.replace('_', ' ')}")
        stores.append(_solved(site, reagent, store, mine, lots))
    return OrderPlan(
        site=site, year=year, demand_from=GIVEN if demand else PLAN, stores=tuple(stores)
    )


def _next_month(today: datetime.date) -> datetime.date:
    return (today.replace(day=1) + datetime.timedelta(days=32)).replace(day=1)


def _given(site: Site, demand: Mapping[str, float]) -> list[Bought]:
    offers = {offer.offer: offer for offer in site.offers}
    deal = best_deal(demand, PriceBook(site.offers), solver=site.solver.name)
    return [
        Bought(
            offer=offers[buy.offer], bought_t=buy.bought_t_per_year, goods=buy.goods_per_year,
            used_t=buy.used_kg_pure_per_year / offers[buy.offer].kg_pure_per_t,
            freight=buy.freight_per_year,
        )
        for buy in deal.buys
        if buy.bought_t_per_year > _SHOWN_T
    ]  # fmt: skip


def _of_plan(site: Site, progress: Callable[[str], None] | None) -> list[Bought]:
    from optimiser.planning import plan

    offers = {offer.offer: offer for offer in site.offers}
    rows = plan(site, progress=progress, runners_up=0).to_dict()["purchases"]
    rows = [row for row in rows if row["bought_t_per_year"] > _SHOWN_T]
    return [
        Bought(
            offer=offers[row["offer"]], bought_t=row["bought_t_per_year"],
            used_t=row["used_t_per_year"], goods=row["goods_per_year"],
            freight=row["freight_per_year"],
        )
        for row in sorted(rows, key=lambda row: str(row["reagent"]))
    ]  # fmt: skip


def _solved(
    site: Site, reagent: str, store: Store, bought: tuple[Bought, ...], lots: tuple[LotOffer, ...]
) -> StoreOrders:
    seconds = min(site.solver.time_limit_s, MOST_SECONDS)
    solver = open_solver(
        site.solver.name, time_limit_s=seconds, relative_gap=GAP, seed=site.solver.seed
    )
    plans, report = plan_lots(lots, store.size, solver)
    if plans is None:
        raise NoOrderPlan([_nothing_fits(reagent, store, bought)])
    return StoreOrders(
        reagent=reagent, store=store, bought=bought, lots=lots, plans=plans, gap=report.gap
    )


def _nothing_fits(reagent: str, store: Store, bought: Sequence[Bought]) -> str:
    names = " and ".join(one.offer.offer for one in bought)
    held = "" if math.isinf(store.size) else f" of {store.size:g} {store.unit}"
    return (
        f"{reagent.replace('_', ' ')}: in some week no order on {names} keeps the stock between "
        f"what must be there and the store{held}; a larger store, smaller orders (least order, "
        "packs, orders a year) or a shorter lead time is needed"
    )


def _orders(plan: OrderPlan, held: StoreOrders) -> list[Data]:
    rows = []
    for one, lot in zip(held.bought, held.lots, strict=True):
        found = held.plans[lot.key]
        for week, group in groupby(found.deliveries, key=lambda d: d.week):
            rows.append(_order(plan, one, lot, found, week, list(group)))
    return rows


def _order(
    plan: OrderPlan, one: Bought, lot: LotOffer, found: LotPlan, week: int, came: list[Delivery]
) -> Data:
    offer, day = one.offer, plan.year.starts[week]
    before = found.stock_t[week - 1] if week else lot.opening_t
    ordered = math.fsum(delivery.tonnes for delivery in came)
    return {
        "order_by": (day - datetime.timedelta(days=math.ceil(offer.lead_time_d))).isoformat(),
        "delivered": day.isoformat(), "week": week + 1, "reagent": offer.reagent,
        "offer": offer.offer, "supplier": offer.supplier, "product": offer.product,
        "ordered_t": ordered, "drops": len(came),
        "packs": round(ordered / offer.pack_t) if lot.pack_t > 0.0 else None,
        "goods": math.fsum(delivery.goods for delivery in came),
        "freight": math.fsum(delivery.freight for delivery in came),
        "fees": lot.fees[week] * len(came),
        "stock_before_t": before, "stock_after_t": before + ordered,
    }  # fmt: skip


_KEYS = {
    GOODS: "goods_per_year", FREIGHT: "freight_per_year", FEES: "fees_per_year",
    HOLDING: "holding_per_year", WRITTEN_OFF: "written_off_per_year",
}  # fmt: skip


def _total(plan: OrderPlan, held: StoreOrders, k: int) -> Data:
    one, lot = held.bought[k], held.lots[k]
    found = held.plans[lot.key]
    ordered = math.fsum(delivery.tonnes for delivery in found.deliveries)
    off = math.fsum(found.written_off_t)
    kept = math.fsum(found.stock_t) + 0.5 * math.fsum(lot.use_t)
    terms = order_terms(one, plan.site.stock)
    room_t = held.store.size / lot.volume_per_t - min(lot.held_floor_t)
    steady = None
    if one.used_t > 0.0:
        steady = steady_order(one.used_t, replace(terms, most_t=min(terms.most_t, room_t)))
    count = len(found.deliveries)
    return {
        "reagent": one.offer.reagent, "offer": one.offer.offer, "supplier": one.offer.supplier,
        "product": one.offer.product, "orders": count, "ordered_t_per_year": ordered,
        "plan_bought_t_per_year": one.bought_t, "used_t_per_year": one.used_t,
        "opening_t": lot.opening_t, "closing_t": found.stock_t[-1], "written_off_t_per_year": off,
        "mean_order_t": ordered / count if count else None,
        "steady_order_t": steady.size_t if steady is not None else None,
        "goods_per_year": math.fsum(d.goods for d in found.deliveries),
        "freight_per_year": math.fsum(d.freight for d in found.deliveries),
        "fees_per_year": math.fsum(lot.fees[d.week] for d in found.deliveries),
        "holding_per_year": kept * lot.holding_per_t_and_week,
        "written_off_per_year": off * lot.value_per_t,
        "plan_goods_per_year": one.goods, "plan_freight_per_year": one.freight,
    }  # fmt: skip


def _stock(year: OrderYear, held: StoreOrders) -> Data:
    """The level of a store week by week, all offers together, in the store's unit."""
    weeks = []
    for week in range(WEEKS):
        start = end = floor = 0.0
        for lot in held.lots:
            found = held.plans[lot.key]
            before = found.stock_t[week - 1] if week else lot.opening_t
            came = math.fsum(d.tonnes for d in found.deliveries if d.week == week)
            start += lot.volume_per_t * (before + came)
            end += lot.volume_per_t * found.stock_t[week]
            floor += lot.volume_per_t * lot.floor_t[week]
        row = {"from": year.starts[week].isoformat(), "after_delivery": start, "end": end}
        weeks.append({**row, "least": floor})
    opening = math.fsum(lot.volume_per_t * lot.opening_t for lot in held.lots)
    return {
        "reagent": held.reagent, "unit": held.store.unit, "opening": opening,
        "store": None if math.isinf(held.store.size) else held.store.size,
        "offers": [lot.key for lot in held.lots], "gap": held.gap, "weeks": weeks,
    }  # fmt: skip


def _notes(plan: OrderPlan, totals: Sequence[Data]) -> list[str]:
    notes = []
    for row in totals:
        more = row["ordered_t_per_year"] - row["plan_bought_t_per_year"]
        kept = row["closing_t"] - row["opening_t"]
        if more > _SHOWN_T:
            notes.append(
                f"{row['offer']}: whole orders bring {more:.3g} t more than the plan's year buys; "
                f"{max(kept, 0.0):.3g} t of stock go into next year"
            )
        elif kept > _SHOWN_T:
            notes.append(
                f"{row['offer']}: {kept:.3g} t that are bought beyond the year's use go into next "
                "year's stock"
            )
        if row["written_off_t_per_year"] > _SHOWN_T:
            notes.append(
                f"{row['offer']}: {row['written_off_t_per_year']:.3g} t are not used in time and "
                "are written off at the price of the goods, their disposal not counted"
            )
    endless = [held.reagent for held in plan.stores if math.isinf(held.store.size)]
    if endless:
        names = " and ".join(name.replace("_", " ") for name in endless)
        notes.append(
            f"no store is given for {names}, so that stock has no upper end; write `dosing: "
            f"{{{endless[0]}: {{store_m3: ...}}}}`, or store_t for a silo, into the site file"
        )
    last = plan.year.end.isoformat()
    ending = [
        f"{one.offer.offer} ({one.offer.valid_until})"
        for held in plan.stores
        for one in held.bought
        if one.offer.valid_until and one.offer.valid_until < last
    ]
    if ending:
        notes.append(
            f"valid for a part of this year only: {', '.join(ending)}; orders after that day need "
            "a new offer"
        )
    return notes
