"""What to ask each supplier: prices at which offers come in or drop out, and what terms are worth.

Owns drop-out prices of offers that the plan buys, and the value of single terms; entry prices are
`optimiser.entry_prices`, plans under other offers `optimiser.contracts`.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

from optimiser.contracts import Pool, Signing, exactly
from optimiser.deal import Buy
from optimiser.entry_prices import entry_price, recipe_at
from optimiser.errors import NoPurchase, VerificationFault
from optimiser.evaluation import Evaluator
from optimiser.nearby import RESOLUTION, Standing
from optimiser.offer import Offer, Tier
from optimiser.polish import Track
from optimiser.price_book import PriceBook
from optimiser.site import Site

if TYPE_CHECKING:
    import pandas as pd

Data = dict[str, Any]

NEXT_TIER, NO_TAKE_OR_PAY, NO_LEAST, LARGER_ORDER = (
    "next tier", "no take-or-pay", "no least order", "larger order",
)  # fmt: skip
TIMES_LARGER = 2.0

SCOPE = (
    "recipes are those of one search, polished anew at every price and term tried; a drop-out or "
    "entry price holds for that offer alone, every other price as it is"
)


@dataclass(frozen=True, eq=False, kw_only=True)
class Negotiation:
    """Prices and terms to talk about, with each supplier.

    Attributes
    ----------
    data
        The plain data of `to_dict`.
    """

    data: Data = field(repr=False)

    def to_dict(self) -> Data:
        """Everything as plain data, what ``--json`` prints."""
        return self.data

    def to_frame(self) -> pd.DataFrame:
        """Return one row per offer: those bought with drop-out price, the others with entry."""
        import pandas as pd

        rows = [{"bought": True, **row} for row in self.data["bought"]]
        rows += [{"bought": False, **row} for row in self.data["not_bought"]]
        return pd.DataFrame(
            [{k: v for k, v in row.items() if not isinstance(v, list)} for row in rows]
        )


def negotiate(site: Site, progress: Callable[[str], None] | None = None) -> Negotiation:
    """Work out what to ask each supplier.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    progress
        Called with a line of text now and then.

    Raises
    ------
    NoPlan, FeedRefused, Interrupted
        As `optimiser.plan` does.
    """
    begun = time.perf_counter()
    say = progress or (lambda _text: None)
    pool = Pool.of(site, progress)
    found = pool.cheapest(_as_offered(pool.plan.evaluator.site))
    if found is None:
        raise VerificationFault(1 + len(pool.others))
    others = (pool.plan.track, *pool.others)
    pool = Pool(plan=replace(pool.plan, track=found[1]), others=others)
    plan = pool.plan
    cost, deal = exactly(plan.evaluator, plan.place)
    buys = {buy.offer: buy for buy in deal.buys if buy.bought_t_per_year > 0.0}
    offers = plan.evaluator.site.offers
    bought, lost = [], []
    for offer in offers:
        say(f"prices of {offer.offer}")
        if offer.offer in buys:
            bought.append({**drop_out_price(pool, offer), **_volume(buys[offer.offer])})
        elif not offer.signed:
            row = entry_price(plan, offer, pool.others)
            lost.append(_with_percent({**row, **_exactness(site, offer, row)}))
    lost.sort(key=lambda row: (row["change_percent"] is None, -(row["change_percent"] or 0.0)))
    terms = []
    for offer in (one for one in offers if not one.signed):
        say(f"terms of {offer.offer}")
        terms += [_worth(pool, cost["total"], lever) for lever in _levers(offer, buys)]
    terms.sort(key=lambda row: -row["worth_per_year"])
    data = {
        "site": site.name, "currency": site.currency,
        "plan": {"reagents": list(plan.recipe), "total": cost["total"]},
        "bought": bought, "not_bought": lost, "terms": terms,
        "resolution_per_year": RESOLUTION * cost["total"], "scope": SCOPE,
        "seconds": time.perf_counter() - begun,
    }  # fmt: skip
    return Negotiation(data=data)


def _volume(buy: Buy) -> Data:
    return {"bought_t_per_year": buy.bought_t_per_year, "paid_per_year": buy.cost_per_year}


# -- prices ---------------------------------------------------------------------------------------


def drop_out_price(pool: Pool, offer: Offer) -> Data:
    """Price up to which the cheapest plan buys an offer, every other price as it is.

    Returns
    -------
    dict
        ``drop_out_price_per_t`` without freight, with ``bracket_low`` and ``bracket_high``: at the
        low price a verified plan that buys the offer costs less than the cheapest verified plan
        that does not (of cost ``without_total``, recipe ``without_recipe``), at the high price none
        that was polished does. None where no plan without the offer is known, or where the offer is
        signed already.

    Notes
    -----
    The cheapest plan without the offer is a plan that the offer has to come into: its drop-out
    price is the entry price against that plan.
    """
    plan = pool.plan
    row: Data = {
        "offer": offer.offer, "supplier": offer.supplier, "reagent": offer.reagent,
        "price_per_t": offer.price_per_t, "freight_per_t": offer.freight_per_t,
        "drop_out_price_per_t": None, "bracket_low": None, "bracket_high": None,
        "verified": False, "room_percent": None, "without_total": None, "without_recipe": [],
        "without_dearer_by": None, "without_offers": [], "signed": offer.signed, "exact": True,
    }  # fmt: skip
    if offer.signed:
        return row  # owed whatever its price
    site = plan.evaluator.site
    rest = tuple(other for other in site.offers if other.offer != offer.offer)
    found = pool.cheapest(_as_offered(replace(site, offers=rest)))
    if found is None:
        return row
    rival = Standing(evaluator=plan.evaluator, solver=plan.solver, track=found[1])
    entry = entry_price(rival, offer, (plan.track, *pool.others))
    entry |= _exactness(site, offer, entry)
    price = entry["entry_price_per_t"]
    return {
        **row, "drop_out_price_per_t": price, "bracket_low": entry["bracket_low"],
        "bracket_high": entry["bracket_high"], "verified": entry["verified"],
        "exact": entry["exact"],
        "room_percent": _percent(offer.price_per_t, price), "without_total": rival.total,
        "without_recipe": recipe_at(rival, found[1].place),
        "without_dearer_by": rival.total - plan.total,
        "without_offers": _offers_bought(*found),
    }  # fmt: skip


def _exactness(site: Site, offer: Offer, entry: Data) -> Data:
    """Whether the price counts every term of what is bought at it; else it is not verified.

    Packs, bundles, frameworks and shares of the offer itself, or of what is bought beside it, are
    left aside where the price is looked for: such an offer may have to be cheaper still.
    """
    beside = [o for o in site.offers if o.reagent != offer.reagent]
    tied = PriceBook((offer, *beside)).inexact & {offer.reagent, *(entry["recipe"] or ())}
    return {"exact": not tied, "verified": entry["verified"] and not tied}


def _offers_bought(evaluator: Evaluator, track: Track) -> list[str]:
    try:
        return [buy.offer for buy in exactly(evaluator, track.place)[1].buys]
    except NoPurchase:
        return []


def _as_offered(site: Site) -> Signing:
    return Signing(site=site, terms=(), alone=frozenset(), fees_per_year=0.0)


def _with_percent(row: Data) -> Data:
    return {**row, "change_percent": _percent(row["price_per_t"], row["entry_price_per_t"])}


def _percent(now: float, then: float | None) -> float | None:
    return None if then is None or now <= 0.0 else 100.0 * (then / now - 1.0)


# -- terms ----------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Lever:
    """One term of an offer changed."""

    offer: Offer
    term: str
    detail: str
    changed: Offer


def _levers(offer: Offer, buys: dict[str, Buy]) -> Iterator[_Lever]:
    """Terms worth asking for: of any offer its take-or-pay, of those bought what hems them in."""
    if offer.take_or_pay_t > 0.0:
        yield _Lever(
            offer, NO_TAKE_OR_PAY, f"{offer.take_or_pay_t:g} t a year dropped",
            replace(offer, take_or_pay_t=0.0),
        )  # fmt: skip
    buy = buys.get(offer.offer)
    if buy is None:
        return
    if buy.tier <= len(offer.tiers):
        tier = offer.tiers[buy.tier - 1]
        yield _Lever(
            offer, NEXT_TIER, f"{tier.price:g} already below {tier.from_t:g} t",
            _with_next_tier(offer, buy.tier),
        )  # fmt: skip
    if offer.least_order_t > 0.0 and buy.at_least_order:
        yield _Lever(
            offer, NO_LEAST, f"{offer.least_order_t:g} t dropped", replace(offer, least_order_t=0.0)
        )
    yield from _larger(offer, buy)


def _with_next_tier(offer: Offer, tier: int) -> Offer:
    """The tier reached, counted from 1, priced like the next."""
    price = offer.tiers[tier - 1].price
    if tier == 1:
        return replace(offer, price=price, tiers=offer.tiers[1:])
    kept = Tier(from_t=offer.tiers[tier - 2].from_t, price=price)
    return replace(offer, tiers=(*offer.tiers[: tier - 2], kept, *offer.tiers[tier:]))


def _larger(offer: Offer, buy: Buy) -> Iterator[_Lever]:
    """A tank for larger loads, or fewer orders: twice as large, or what reaches the next edge."""
    if offer.orders_per_year > 1.0:
        fewer = max(1.0, offer.orders_per_year / TIMES_LARGER)
        yield _Lever(
            offer, LARGER_ORDER, f"{fewer:g} orders a year", replace(offer, orders_per_year=fewer)
        )
        return
    if offer.order_size_t <= 0.0:
        return
    edges = [tier.from_t for tier in offer.tiers if offer.tier_per == "order"]
    sizes = {TIMES_LARGER * offer.order_size_t, offer.freight_free_from_t, *edges}
    for size in sorted(size for size in sizes if size > offer.order_size_t):
        yield _Lever(offer, LARGER_ORDER, f"loads of {size:g} t", replace(offer, order_size_t=size))


def _worth(pool: Pool, total: float, lever: _Lever) -> Data:
    """What the cheapest plan costs less a year with the term changed."""
    site = pool.plan.evaluator.site
    offers = tuple(
        lever.changed if other.offer == lever.offer.offer else other for other in site.offers
    )
    found = pool.cheapest(_as_offered(replace(site, offers=offers)))
    least = math.inf
    if found is not None:
        try:
            least = exactly(found[0], found[1].place)[0]["total"]
        except NoPurchase:
            least = math.inf
    worth = max(0.0, total - least)
    return {
        "offer": lever.offer.offer, "supplier": lever.offer.supplier,
        "reagent": lever.offer.reagent, "term": lever.term, "detail": lever.detail,
        "worth_per_year": worth if worth > RESOLUTION * total else 0.0,
    }  # fmt: skip
