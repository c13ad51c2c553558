"""Comparing offers at given volumes, without chemistry.

Owns the ranking of every offer on its own and the cheapest purchase of all, with where the money
goes; what offers cost is `optimiser.offer_cost`, the purchase is `optimiser.purchasing`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from catalogs.reagents import Reagent
from optimiser.deal import Buy, Deal, buys_of
from optimiser.offer import Offer
from optimiser.offer_cost import FREIGHT, GOODS, costs_at, pieces_of, whole_packs_t
from optimiser.price_book import PriceBook, counted_demand
from optimiser.purchasing import best_deal

if TYPE_CHECKING:
    import pandas as pd

    from optimiser.solver import SolverPort

Data = dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Bid:
    """One offer that covers the whole demand of its reagent alone.

    ``buy`` is None where it cannot: ``covers_fraction`` then says how much of the demand it could.
    ``per_mol`` and ``per_kg`` are all-in costs per mole and per kg of the pure compound that is
    needed, a surplus earns nothing. [currency]
    """

    offer: Offer
    buy: Buy | None
    per_mol: float | None
    per_kg: float | None
    covers_fraction: float


@dataclass(frozen=True, eq=False, kw_only=True)
class OfferComparison:
    """Offers ranked by reagent, and the cheapest purchase of everything."""

    demand_kg_per_year: Mapping[str, float]
    bids: Mapping[str, tuple[Bid, ...]]
    deal: Deal
    currency: str = ""
    site: str = ""
    basis: str = ""
    metal_removed_kg_per_year: float | None = None
    notes: tuple[str, ...] = ()

    def to_dict(self) -> Data:
        """Everything as plain data, as ``--json`` prints it."""
        rows = {name: [_row(bid, bids) for bid in bids] for name, bids in self.bids.items()}
        metal = self.metal_removed_kg_per_year
        return {
            "site": self.site, "currency": self.currency, "demand_from": self.basis,
            "demand_kg_pure_per_year": dict(self.demand_kg_per_year),
            "ranking": rows,
            "best": {
                "cost": dict(self.deal.cost),
                "buys": [_bought(row) for row in self.deal.buys],
                "solver": self.deal.solver, "gap": self.deal.gap,
                "per_kg_metal_removed": self.deal.cost["total"] / metal if metal else None,
            },
            "metal_removed_kg_per_year": metal,
            "notes": list(self.notes),
        }  # fmt: skip

    def to_frame(self) -> pd.DataFrame:
        """Return the ranking, one row per offer."""
        import pandas as pd

        rows = [row for some in self.to_dict()["ranking"].values() for row in some]
        return pd.DataFrame(rows)


def compare_offers(
    offers: Iterable[Offer],
    demand: Mapping[str, float],
    reagents: Mapping[str, Reagent],
    *,
    solver: SolverPort | str = "highs",
) -> OfferComparison:
    """Rank offers at given volumes and find the cheapest purchase of all.

    Parameters
    ----------
    offers
        Everything on offer.
    demand
        Demand per reagent; keys ``reagent@stage`` are added up by reagent. [kg pure/year]
    reagents
        The catalog; costs per mole need it.
    solver
        Asked where terms tie offers together or come in whole packs.

    Raises
    ------
    NoPurchase
        The offers cannot cover the demand.
    InputFileError
        The offers cannot be used as they stand.
    """
    book = PriceBook(offers)
    needed = {k: kg for k, kg in counted_demand(demand, set(book.reagents)).items() if kg > 0.0}
    ranked = {name: rank(book.offers, name, kg, reagents.get(name)) for name, kg in needed.items()}
    deal = best_deal(needed, book, solver=solver)
    return OfferComparison(demand_kg_per_year=needed, bids=ranked, deal=deal)


def rank(
    offers: Sequence[Offer], reagent: str, demand_kg: float, known: Reagent | None
) -> tuple[Bid, ...]:
    """Offers of a reagent by the yearly cost of covering a demand alone, cheapest first.

    Bundles, frameworks and shares are left aside: a ranking asks what each offer is worth by
    itself; the cheapest purchase counts them.
    """
    bids = [_bid(one, demand_kg, known) for one in offers if one.reagent == reagent]
    return tuple(sorted(bids, key=lambda bid: (bid.per_kg is None, bid.per_kg, bid.offer.offer)))


def _bid(offer: Offer, demand_kg: float, known: Reagent | None) -> Bid:
    offer = replace(offer, bundle="") if offer.bundle else offer
    tonnes = _cheapest_tonnes(offer, demand_kg / offer.kg_pure_per_t)
    if tonnes is None:
        most = offer.most_t * offer.kg_pure_per_t if pieces_of(offer) else 0.0
        return Bid(
            offer=offer, buy=None, per_mol=None, per_kg=None,
            covers_fraction=min(most / demand_kg, 1.0),
        )  # fmt: skip
    (buy,) = buys_of([(offer, tonnes)], demand_kg)
    per_kg = buy.cost_per_year / demand_kg
    per_mol = None if known is None else per_kg * known.molar_mass_g_per_mol / 1000.0
    return Bid(offer=offer, buy=buy, per_mol=per_mol, per_kg=per_kg, covers_fraction=1.0)


def _cheapest_tonnes(offer: Offer, need_t: float) -> float | None:
    """Tonnes that cover a need at the least cost: the need itself, or more to reach an edge."""
    pieces = pieces_of(offer)
    if not pieces:
        return None
    wanted = [max(need_t, pieces[0].low_t), *(p.low_t for p in pieces if p.low_t >= need_t)]
    tried = [whole_packs_t(offer, tonnes) for tonnes in wanted]
    tried = [tonnes for tonnes in tried if tonnes <= offer.most_t * (1.0 + 1e-12)]
    return min(tried, key=lambda t: math.fsum(costs_at(offer, t)[0].values()), default=None)


def _row(bid: Bid, bids: Sequence[Bid]) -> Data:
    offer, buy, best = bid.offer, bid.buy, bids[0].buy
    row: Data = {
        "offer": offer.offer, "supplier": offer.supplier, "reagent": offer.reagent,
        "product": offer.product, "covers_fraction": bid.covers_fraction,
        "cost_per_mol": bid.per_mol, "cost_per_kg_pure": bid.per_kg,
    }  # fmt: skip
    figures = _figures(buy) if buy is not None else dict.fromkeys(_FIGURES)
    more = buy.cost_per_year - best.cost_per_year if buy is not None and best is not None else None
    return {**row, **figures, "dearer_than_best_per_year": more}


def _bought(buy: Buy) -> Data:
    return {
        "offer": buy.offer, "supplier": buy.supplier, "reagent": buy.reagent,
        "product": buy.product, **_figures(buy),
    }  # fmt: skip


_FIGURES = (
    "bought_t_per_year", "surplus_t_per_year", "tier", "orders_per_year", "goods_per_year",
    "freight_per_year", "other_per_year", "cost_per_year",
)  # fmt: skip


def _figures(buy: Buy) -> Data:
    by_cause = buy.by_cause
    other = math.fsum(v for cause, v in by_cause.items() if cause not in {GOODS, FREIGHT})
    pure_per_t = buy.bought_kg_pure_per_year / buy.bought_t_per_year if buy.bought_t_per_year else 0
    surplus = buy.surplus_kg_pure_per_year / pure_per_t if pure_per_t else 0.0
    values = (
        buy.bought_t_per_year, surplus, buy.tier, buy.orders_per_year, buy.goods_per_year,
        buy.freight_per_year, other, buy.cost_per_year,
    )  # fmt: skip
    return dict(zip(_FIGURES, values, strict=True))
