"""The cheapest order is the published one, and no whole number of tonnes is cheaper."""

from __future__ import annotations

import math
import random
from pathlib import Path
from typing import Any

import pytest
import yaml

from optimiser.offer import Offer, Tier
from optimiser.order_size import OrderTerms, order_pieces, steady_order, terms_of_offer

DATA: dict[str, Any] = yaml.safe_load(
    (Path(__file__).parents[1] / "reference" / "order_quantities.yaml").read_text("utf-8")
)


def terms(prices: list[list[float]], **more: Any) -> OrderTerms:
    return OrderTerms(tiers=tuple(Tier(from_t=q, price=p) for q, p in prices), **more)


@pytest.mark.parametrize("case", ["H05", "H06"])
def test_published_order_quantities_come_out(case: str) -> None:
    row = DATA[case]
    best = steady_order(
        row["annual_demand"],
        terms(row["prices"], tier_kind=row["tier_kind"], order_fee=row["order_cost"],
              holding_fraction=row["holding_rate"]),
    )  # fmt: skip
    assert best is not None
    assert best.size_t == pytest.approx(row["order_qty"], rel=row["order_qty_relative"])
    assert best.total_per_year == pytest.approx(row["total_cost"], rel=row["relative"])


def test_without_breaks_fees_and_holding_balance() -> None:
    best = steady_order(300.0, terms([[0.0, 250.0]], order_fee=90.0, holding_fraction=0.12))
    assert best is not None
    assert best.size_t == pytest.approx(math.sqrt(2.0 * 300.0 * 90.0 / (0.12 * 250.0)))
    assert best.fees_per_year == pytest.approx(best.holding_per_year)


def cost_of(use: float, one: OrderTerms, size: int) -> float:
    """A year of orders of one size, written out slice by slice."""
    if one.tier_kind == "all_units":
        price = [t.price for t in one.tiers if t.from_t <= size][-1]
        goods = price * size
    else:
        ends = [t.from_t for t in one.tiers[1:]] + [math.inf]
        goods = 0.0
        for tier, end in zip(one.tiers, ends, strict=True):
            goods += tier.price * max(0.0, min(size, end) - tier.from_t)
    loads = 1 if math.isinf(one.load_t) else -(-size // int(one.load_t))
    freight = one.freight_per_t * size + one.drop_fee * loads
    if size >= one.freight_free_from_t:
        freight = 0.0
    orders = use / size
    return orders * (goods + freight + one.order_fee) + one.holding_fraction * goods / 2.0


def random_terms(rng: random.Random) -> OrderTerms:
    edges = sorted(rng.sample(range(5, 90), rng.randint(0, 3)))
    prices = [rng.uniform(200.0, 500.0)]
    for _ in edges:
        prices.append(prices[-1] * rng.uniform(0.85, 0.995))
    return terms(
        [[float(q), p] for q, p in zip([0, *edges], prices, strict=True)],
        tier_kind=rng.choice(["all_units", "incremental"]), order_fee=rng.uniform(0.0, 400.0),
        drop_fee=rng.choice([0.0, rng.uniform(20.0, 300.0)]),
        load_t=rng.choice([math.inf, float(rng.randint(4, 30))]),
        freight_per_t=rng.uniform(0.0, 50.0),
        freight_free_from_t=rng.choice([math.inf, float(rng.randint(10, 80))]),
        holding_fraction=rng.uniform(0.02, 0.6), least_t=float(rng.choice([0, 0, 7])),
        most_t=float(rng.choice([18, 60, 120])), pack_t=1.0,
    )  # fmt: skip


def test_no_whole_number_of_tonnes_is_cheaper_in_300_cases() -> None:
    rng = random.Random(1913)
    for number in range(300):
        use, one = rng.uniform(5.0, 900.0), random_terms(rng)
        sizes = range(max(1, math.ceil(one.least_t)), int(one.most_t) + 1)
        least = min(cost_of(use, one, size) for size in sizes)
        best = steady_order(use, one)
        assert best is not None
        assert best.size_t == pytest.approx(round(best.size_t), abs=1e-9), number
        assert best.total_per_year == pytest.approx(least, rel=1e-9), number


def test_packs_and_ends_leave_nothing_to_order() -> None:
    assert steady_order(10.0, terms([[0.0, 100.0]], least_t=3.0, most_t=2.0)) is None
    assert steady_order(10.0, terms([[0.0, 100.0]], pack_t=3.0, most_t=2.0)) is None


def test_an_order_without_end_is_refused() -> None:
    with pytest.raises(ValueError, match="has no end"):
        steady_order(10.0, terms([[0.0, 100.0]], order_fee=5.0))


def test_the_pieces_of_an_offer_reach_as_far_as_its_load() -> None:
    offer = Offer(
        offer="A", supplier="Larkspur Supplies", reagent="caustic_soda", product="50 %",
        form="solution", strength_fraction=0.5, density_kg_per_l=1.5, price=300.0, price_per="t",
        freight_per_t=10.0, freight_per_drop=80.0, freight_free_from_t=20.0, order_size_t=20.0,
        least_order_t=4.0, tiers=(Tier(from_t=8.0, price=280.0), Tier(from_t=25.0, price=200.0)),
        tier_kind="all_units", tier_per="order",
    )  # fmt: skip
    pieces = order_pieces(terms_of_offer(offer, order_fee=50.0, holding_fraction=0.1))
    assert [(p.low_t, p.high_t, p.goods_per_t) for p in pieces] == [
        (4.0, 8.0, 300.0), (8.0, 20.0, 280.0), (20.0, 20.0, 280.0),
    ]  # fmt: skip
    assert [p.freight(10.0) for p in pieces] == [180.0, 180.0, 0.0]
