"""What is bought, from whom and for how much: the result of every purchase.

Owns the rows of a deal and their sums; how offers are chosen is `optimiser.purchasing`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING

from optimiser.offer import KG_PER_T, Offer
from optimiser.offer_cost import (
    CAUSES,
    FEES,
    FREIGHT,
    GOODS,
    REBATE,
    SHORTFALL,
    costs_at,
    least_bought_t,
    orders_in_a_year,
    pieces_of,
)

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["CAUSES", "FREIGHT", "GOODS", "KG_PER_T", "TOTAL", "Buy", "Deal", "buys_of", "deal_of"]

TOTAL = "total"
_AT_LEAST = 1.0 + 1e-6
"""A purchase within this factor of the least order counts as that order."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Buy:
    """What is bought on one offer in a year.

    ``bought_t_per_year`` is product as delivered, the other amounts pure compound; bought is used
    plus surplus. ``tier`` counts from 1; ``orders_per_year`` is None where the offer does not say
    how it is ordered. Costs are in the site's currency per year: ``not_taken_per_year`` is what a
    take-or-pay charges for goods that are not taken, ``rebate_per_year`` is 0 or less.
    """

    offer: str
    supplier: str
    reagent: str
    product: str
    bought_t_per_year: float
    bought_kg_pure_per_year: float
    used_kg_pure_per_year: float
    surplus_kg_pure_per_year: float
    at_least_order: bool
    goods_per_year: float
    freight_per_year: float
    not_taken_per_year: float = 0.0
    fees_per_year: float = 0.0
    rebate_per_year: float = 0.0
    tier: int = 1
    orders_per_year: float | None = None

    @property
    def cost_per_year(self) -> float:
        """All causes."""
        return math.fsum(self.by_cause.values())

    @property
    def by_cause(self) -> dict[str, float]:
        """Cost by cause."""
        return {
            GOODS: self.goods_per_year, FREIGHT: self.freight_per_year,
            SHORTFALL: self.not_taken_per_year, FEES: self.fees_per_year,
            REBATE: self.rebate_per_year,
        }  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Deal:
    """A purchase that covers a demand.

    Attributes
    ----------
    cost
        Currency per year by cause (`CAUSES`; those beyond goods and freight where they occur), with
        ``total``. Fees and rebates of framework agreements are here and on no row of ``buys``.
    buys
        One row per offer bought on, by reagent and falling amount used; contracts signed already
        are there too where they cost something.
    gap
        How far the cost may lie above the least one, as a fraction; None where a solver stopped
        before it could tell.
    solver
        What chose the offers, with its version.
    """

    cost: Mapping[str, float]
    buys: tuple[Buy, ...]
    gap: float | None
    solver: str

    def to_frame(self) -> pd.DataFrame:
        """Return the rows of the deal, one per offer bought on."""
        import pandas as pd

        frame = pd.DataFrame([asdict(buy) for buy in self.buys], columns=list(Buy.__annotations__))
        frame["cost_per_year"] = [buy.cost_per_year for buy in self.buys]
        return frame


def deal_of(
    buys: Iterable[Buy], *, gap: float | None, solver: str,
    shared: Mapping[str, float] = MappingProxyType({}),
) -> Deal:  # fmt: skip
    """Order and add up the rows of a deal; ``shared`` are costs that belong to no single offer."""
    rows = tuple(sorted(buys, key=lambda b: (b.reagent, -b.used_kg_pure_per_year, b.offer)))
    cost = {
        cause: math.fsum([shared.get(cause, 0.0), *(buy.by_cause[cause] for buy in rows)])
        for cause in CAUSES
    }
    cost = {cause: value for cause, value in cost.items() if value or cause in {GOODS, FREIGHT}}
    return Deal(cost={**cost, TOTAL: math.fsum(cost.values())}, buys=rows, gap=gap, solver=solver)


def buys_of(amounts: Iterable[tuple[Offer, float]], demand_kg: float) -> list[Buy]:
    """Rows for the tonnes bought of one reagent's offers.

    Demand is drawn from the cheapest delivered compound first, so that a surplus shows on the
    dearer offer.

    Parameters
    ----------
    amounts
        Offers that are used, with the tonnes bought of each.
    demand_kg
        What is used of all of them. [kg pure/year]
    """
    left, rows = demand_kg, []
    for offer, tonnes in sorted(amounts, key=lambda pair: delivered_per_kg(*pair)):
        costs, tier = costs_at(offer, tonnes)
        bought_kg = offer.kg_pure_per_t * tonnes
        used_kg = min(left, bought_kg)
        left -= used_kg
        rows.append(
            Buy(
                offer=offer.offer,
                supplier=offer.supplier,
                reagent=offer.reagent,
                product=offer.product,
                bought_t_per_year=tonnes,
                bought_kg_pure_per_year=bought_kg,
                used_kg_pure_per_year=used_kg,
                surplus_kg_pure_per_year=bought_kg - used_kg,
                at_least_order=0.0 < tonnes <= least_bought_t(offer) * _AT_LEAST,
                goods_per_year=costs[GOODS],
                freight_per_year=costs[FREIGHT],
                not_taken_per_year=costs.get(SHORTFALL, 0.0),
                fees_per_year=costs.get(FEES, 0.0),
                rebate_per_year=costs.get(REBATE, 0.0),
                tier=tier,
                orders_per_year=orders_in_a_year(offer, tonnes),
            )
        )
    return rows


def delivered_per_kg(offer: Offer, tonnes: float) -> float:
    """Cost of another kg pure around so many tonnes. [currency/kg]"""
    holding = [p for p in pieces_of(offer) if p.low_t <= tonnes <= p.high_t]
    slope = min((p.total.per_t for p in holding), default=offer.price_per_t)
    return slope / offer.kg_pure_per_t
