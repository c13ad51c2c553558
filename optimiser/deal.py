"""What is bought, from whom and for how much: the result of every purchase.

Owns the rows of a deal and their sums; how offers are chosen is `optimiser.purchasing`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING

from optimiser.site import Offer

if TYPE_CHECKING:
    import pandas as pd

KG_PER_T = 1000.0
GOODS, FREIGHT, TOTAL = "goods", "freight", "total"
CAUSES = (GOODS, FREIGHT)
"""Causes of purchasing cost, in the order they are printed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Buy:
    """What is bought on one offer in a year.

    ``bought_t_per_year`` is product as delivered, the other amounts pure compound; bought is used
    plus surplus. Costs are in the site's currency per year.
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

    @property
    def cost_per_year(self) -> float:
        """Goods and freight."""
        return self.goods_per_year + self.freight_per_year


@dataclass(frozen=True, slots=True, kw_only=True)
class Deal:
    """A purchase that covers a demand.

    Attributes
    ----------
    cost
        Currency per year by cause (`CAUSES`), with ``total``.
    buys
        One row per offer bought on, by reagent and falling amount used.
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
        frame["cost_per_year"] = frame["goods_per_year"] + frame["freight_per_year"]
        return frame


def deal_of(buys: Iterable[Buy], *, gap: float | None, solver: str) -> Deal:
    """Order and add up the rows of a deal."""
    rows = tuple(sorted(buys, key=lambda b: (b.reagent, -b.used_kg_pure_per_year, b.offer)))
    goods = math.fsum(buy.goods_per_year for buy in rows)
    freight = math.fsum(buy.freight_per_year for buy in rows)
    cost = {GOODS: goods, FREIGHT: freight, TOTAL: goods + freight}
    return Deal(cost=cost, buys=rows, gap=gap, solver=solver)


def buy_of(
    offer: Offer, *, bought_t: float, used_kg: float, costs: Mapping[str, float], at_least: bool
) -> Buy:
    """Row for one offer from what was bought of it and what that costs by cause."""
    bought_kg = KG_PER_T * offer.strength_fraction * bought_t
    used_kg = min(used_kg, bought_kg)
    return Buy(
        offer=offer.offer,
        supplier=offer.supplier,
        reagent=offer.reagent,
        product=offer.product,
        bought_t_per_year=bought_t,
        bought_kg_pure_per_year=bought_kg,
        used_kg_pure_per_year=used_kg,
        surplus_kg_pure_per_year=bought_kg - used_kg,
        at_least_order=at_least,
        goods_per_year=costs[GOODS],
        freight_per_year=costs[FREIGHT],
    )
