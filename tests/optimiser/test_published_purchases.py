"""Published purchasing models come out through `purchase`, by both solvers."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest
import yaml

from optimiser.offer import ALL_UNITS, INCREMENTAL, Framework, Offer, Tier
from optimiser.price_book import PriceBook
from optimiser.purchasing import purchase
from optimiser.solver import SOLVERS

REFERENCE = Path(__file__).parents[1] / "reference"
DATA = yaml.safe_load((REFERENCE / "published_models.yaml").read_text(encoding="utf-8"))
DEMAND_KG_PER_T = 1000.0


def offer(key: str, reagent: str, price: float, **terms: Any) -> Offer:
    return Offer(
        offer=key, reagent=reagent, price=price, price_per="t", product="p", form="f",
        strength_fraction=1.0, density_kg_per_l=1.0, **{"supplier": key, **terms},
    )  # fmt: skip


def bids(kind: str) -> list[Offer]:
    """The bids as offers: set-up as a fee for one year, first lot as least amount."""
    found = []
    for vendor, bid in DATA["H01"]["bids"].items():
        first, *further = bid["segments"]
        found.append(
            offer(
                vendor, "item", first["price"], mobilisation_fee=bid["setup"],
                least_order_t=first["qmin"], least_order_per="year",
                most_t_per_year=bid["segments"][-1]["qmax"],
                tiers=tuple(Tier(from_t=s["qmin"], price=s["price"]) for s in further),
                tier_kind=kind, tier_per="year",
            )
        )  # fmt: skip
    return found


@pytest.mark.parametrize("solver", SOLVERS)
def test_the_vendors_h01(solver: str) -> None:
    case = DATA["H01"]
    demand = {"item": DEMAND_KG_PER_T * case["requirement"]}
    deal = purchase(demand, bids(INCREMENTAL), solver=solver)
    assert deal.cost["total"] == pytest.approx(case["total_cost"], rel=case["relative"])
    bought = {row.offer: row.bought_t_per_year for row in deal.buys}
    assert bought == pytest.approx(case["buy"], rel=case["relative"])


@pytest.mark.parametrize("solver", SOLVERS)
def test_the_same_table_read_as_all_units_h01(solver: str) -> None:
    """The set-up stays, the whole lot has the price of its segment."""
    case = DATA["H01"]
    demand = {"item": DEMAND_KG_PER_T * case["requirement"]}
    deal = purchase(demand, bids(ALL_UNITS), solver=solver)
    assert deal.cost["total"] == pytest.approx(case["total_cost_all_units"], rel=case["relative"])
    bought = {row.offer: row.bought_t_per_year for row in deal.buys}
    assert bought == pytest.approx(case["buy_all_units"], rel=case["relative"])


@pytest.mark.parametrize("kind", [INCREMENTAL, ALL_UNITS])
def test_the_closed_form_agrees_on_the_vendors(kind: str) -> None:
    case = DATA["H01"]
    demand = {"item": DEMAND_KG_PER_T * case["requirement"]}
    deal = PriceBook(bids(kind)).cheapest(demand)
    total = case["total_cost" if kind == INCREMENTAL else "total_cost_all_units"]
    assert deal.cost["total"] == pytest.approx(total, rel=case["relative"])


@pytest.mark.parametrize("solver", SOLVERS)
def test_the_sites_to_open_h14(solver: str) -> None:
    """A site is a framework whose fee opens it; a region is a product that each site sells."""
    case = DATA["H14"]
    offers = [
        offer(
            f"{region} to {site}", region, cost, supplier=site,
            framework=Framework(name=site, fee_per_year=case["open_cost"]),
        )
        for region, costs in case["assign"].items()
        for site, cost in zip(case["sites"], costs, strict=True)
    ]  # fmt: skip
    deal = purchase(dict.fromkeys(case["assign"], DEMAND_KG_PER_T), offers, solver=solver)
    assert deal.cost["total"] == pytest.approx(case["total"], rel=case["relative"])
    assert sorted({row.supplier for row in deal.buys}) == sorted(case["open"])
    assert deal.cost["fees"] == pytest.approx(case["open_cost"] * len(case["open"]))


@pytest.mark.parametrize("solver", SOLVERS)
def test_the_transport_h16(solver: str) -> None:
    """A plant is a framework with its capacity as cap; a market is a product, freight the cost."""
    case = DATA["H16"]
    offers = [
        offer(
            f"{plant} to {market}", f"market {market}", 0.0, supplier=f"plant {plant}",
            freight_per_t=case["freight_per_1000_miles"] * miles / 1000.0,
            framework=Framework(name=f"plant {plant}", most_t=case["capacity"][plant]),
        )
        for plant, row in enumerate(case["distance_1000_miles"])
        for market, miles in enumerate(row)
    ]  # fmt: skip
    demand = {f"market {k}": DEMAND_KG_PER_T * t for k, t in enumerate(case["demand"])}
    deal = purchase(demand, offers, solver=solver)
    assert deal.cost["freight"] == pytest.approx(case["total_thousand"], rel=case["relative"])
    assert deal.cost["goods"] == 0.0
    for plant, most in enumerate(case["capacity"]):
        sent = [r.bought_t_per_year for r in deal.buys if r.supplier == f"plant {plant}"]
        assert math.fsum(sent) <= most * (1.0 + 1e-9)
