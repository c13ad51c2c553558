"""The closed form: least cost, its slopes and its jump, for one price and a least order."""

from __future__ import annotations

import math
import random
import time
from typing import Any

import pytest

from catalogs.problems import InputFileError
from optimiser.errors import NoPurchase
from optimiser.price_book import LEAST_DEMAND_KG, PriceBook, cheapest_purchase
from optimiser.site import Offer


def offer(key: str, per_kg: float, least_kg: float = 0.0, **terms: Any) -> Offer:
    """An offer of half strength with this price per kg pure and least order in kg pure."""
    return Offer(
        offer=key, supplier="Tamarisk Trading", reagent=terms.pop("reagent", "soda_ash"),
        product="p", form="powder", strength_fraction=0.5, density_kg_per_l=1.0,
        price=500.0 * per_kg, price_per="t", least_order_t=least_kg / 500.0, **terms,
    )  # fmt: skip


BULK, CAN = offer("bulk", 0.3, 1000.0), offer("can", 0.9)
BOOK = PriceBook([BULK, CAN])


@pytest.mark.parametrize(
    ("demand_kg", "cost"),
    [(0.0, 0.0), (100.0, 90.0), (333.0, 299.7), (334.0, 300.0), (1000.0, 300.0), (2000.0, 600.0)],
)
def test_the_least_cost_follows_the_cheapest_offer(demand_kg: float, cost: float) -> None:
    assert BOOK.cost("soda_ash", demand_kg) == pytest.approx(cost)
    assert BOOK.cheapest({"soda_ash": demand_kg}).cost["total"] == pytest.approx(cost)


@pytest.mark.parametrize(
    ("demand_kg", "up", "down"),
    [
        (100.0, 0.9, 0.9),
        (500.0, 0.0, 0.0),
        (1000.0, 0.3, 0.0),
        (2000.0, 0.3, 0.3),
        (1000.0 * 0.3 / 0.9, 0.0, 0.9),
    ],
)
def test_slopes_are_told_on_both_sides(demand_kg: float, up: float, down: float) -> None:
    slope = BOOK.marginal_cost("soda_ash", demand_kg)
    assert slope.up_per_kg == pytest.approx(up)
    assert slope.down_per_kg == pytest.approx(down)
    step = 1e-4
    here = BOOK.cost("soda_ash", demand_kg)
    above = (BOOK.cost("soda_ash", demand_kg + step) - here) / step
    below = (here - BOOK.cost("soda_ash", demand_kg - step)) / step
    assert slope.up_per_kg == pytest.approx(above, abs=1e-6)
    assert slope.down_per_kg == pytest.approx(below, abs=1e-6)


def test_slopes_match_finite_differences_on_random_books() -> None:
    rng = random.Random(4)
    for _ in range(200):
        offers = [
            offer(f"o{i}", rng.uniform(0.1, 2.0), rng.choice([0.0, rng.uniform(10.0, 3000.0)]))
            for i in range(rng.randint(1, 5))
        ]
        book = PriceBook(offers)
        kg = rng.uniform(1.0, 4000.0)
        slope = book.marginal_cost("soda_ash", kg)
        here, step = book.cost("soda_ash", kg), 1e-5
        above = (book.cost("soda_ash", kg + step) - here) / step
        below = (here - book.cost("soda_ash", kg - step)) / step
        assert slope.up_per_kg == pytest.approx(above, abs=1e-4)
        assert slope.down_per_kg == pytest.approx(below, abs=1e-4)


def test_the_first_gram_costs_the_cheapest_least_order() -> None:
    bulk_only = PriceBook([BULK, offer("sack", 0.7, 200.0)])
    assert bulk_only.entry_cost("soda_ash") == pytest.approx(140.0)
    assert bulk_only.cost("soda_ash", 1e-12) == pytest.approx(140.0)
    assert bulk_only.cost("soda_ash", 0.0) == 0.0
    assert BOOK.entry_cost("soda_ash") == 0.0
    assert BOOK.cost("soda_ash", 1e-12) == pytest.approx(0.9 * LEAST_DEMAND_KG)
    assert bulk_only.marginal_cost("soda_ash", 0.0).down_per_kg == 0.0


def test_splitting_a_demand_over_two_offers_never_costs_less() -> None:
    rng = random.Random(9)
    for _ in range(300):
        pair = [offer(f"o{i}", rng.uniform(0.1, 2.0), rng.uniform(0.0, 900.0)) for i in range(2)]
        demand_kg = rng.uniform(1.0, 2000.0)
        alone = cheapest_purchase({"soda_ash": demand_kg}, pair).cost["total"]
        share = rng.random()
        parts = (share * demand_kg, (1.0 - share) * demand_kg)
        split = sum(
            cheapest_purchase({"soda_ash": kg}, [one]).cost["total"]
            for one, kg in zip(pair, parts, strict=True)
        )
        assert alone <= split * (1.0 + 1e-12)


def test_of_equally_cheap_offers_the_smaller_surplus_is_bought() -> None:
    twins = [offer("large", 0.5, 600.0), offer("small", 0.75, 400.0)]
    (buy,) = cheapest_purchase({"soda_ash": 100.0}, twins).buys
    assert buy.offer == "small"
    assert buy.surplus_kg_pure_per_year == pytest.approx(300.0)
    assert buy.at_least_order


def test_goods_and_freight_are_kept_apart() -> None:
    deal = cheapest_purchase({"soda_ash": 1000.0}, [offer("a", 0.4, freight_per_t=25.0)])
    assert deal.cost == pytest.approx({"goods": 400.0, "freight": 50.0, "total": 450.0})
    assert deal.solver == "closed form"
    assert deal.gap == 0.0


def test_what_cannot_be_bought_is_named() -> None:
    with pytest.raises(NoPurchase, match="quicklime: no offer sells it; the offers sell soda_ash"):
        BOOK.cheapest({"quicklime": 1.0})
    with pytest.raises(NoPurchase, match="quicklime"):
        BOOK.cost("quicklime", 1.0)
    with pytest.raises(NoPurchase, match="quicklime"):
        BOOK.marginal_cost("quicklime", 1.0)
    with pytest.raises(NoPurchase, match="quicklime"):
        BOOK.entry_cost("quicklime")
    for amount in (-1.0, math.nan, math.inf):
        with pytest.raises(NoPurchase, match="number of 0 or more"):
            BOOK.cost("soda_ash", amount)
    assert BOOK.cost("quicklime", 0.0) == 0.0
    assert BOOK.reagents == ("soda_ash",)


def test_offers_that_break_the_argument_are_refused() -> None:
    with pytest.raises(InputFileError, match="price: found -"):
        PriceBook([offer("a", -0.1)])


def test_ten_thousand_prices_take_less_than_a_second() -> None:
    book = PriceBook([offer(f"o{i}", 0.3 + 0.05 * i, 100.0 * i) for i in range(6)])
    started = time.process_time()
    total = sum(book.cost("soda_ash", float(kg)) for kg in range(10000))
    assert total > 0.0
    assert time.process_time() - started < 1.0
