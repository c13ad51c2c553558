"""Orders over time: published optima, a dynamic programme of its own, and every rule each week."""

from __future__ import annotations

import math
import random
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pytest
import yaml

from optimiser.linear_model import Model
from optimiser.lot_offer import LotOffer, LotPlan
from optimiser.lot_sizing import add_lots, plan_lots
from optimiser.offer import Tier
from optimiser.order_size import OrderPiece, OrderTerms, order_pieces
from optimiser.solver import SOLVERS, Termination, open_solver

DATA: dict[str, Any] = yaml.safe_load(
    (Path(__file__).parents[1] / "reference" / "order_quantities.yaml").read_text("utf-8")
)
ANY_SIZE = OrderPiece(
    low_t=0.0, high_t=math.inf, goods_fixed=0.0, goods_per_t=0.0, freight_fixed=0.0,
    freight_per_t=0.0,
)  # fmt: skip


def lot_offer(
    use: Sequence[float], fees: Sequence[float] | float, holding: float, **more: Any
) -> LotOffer:
    by_week = [fees] * len(use) if isinstance(fees, (int, float)) else list(fees)
    return LotOffer(
        key=more.pop("key", "A"), use_t=tuple(use), fees=tuple(by_week),
        floor_t=tuple(more.pop("floor_t", [0.0] * len(use))), holding_per_t_and_week=holding,
        **{"pieces": (ANY_SIZE,), **more},
    )  # fmt: skip


def least_cost(use: Sequence[float], fees: Sequence[float], holding: float) -> float:
    """Wagner and Whitin's recursion: each order covers whole periods up to the next one."""
    best = [0.0] + [math.inf] * len(use)
    for first in range(len(use)):
        if use[first] == 0.0:
            best[first + 1] = min(best[first + 1], best[first])
        kept = 0.0
        for last in range(first, len(use)):
            kept += holding * (last - first) * use[last]
            best[last + 1] = min(best[last + 1], best[first] + fees[first] + kept)
    return best[-1]


def checked_cost(offer: LotOffer, plan: LotPlan, most: float = math.inf) -> float:
    """The cost of fees and stock, with the balance of every week followed by hand."""
    stock, cost = offer.opening_t, 0.0
    for week, use in enumerate(offer.use_t):
        came = [d.tonnes for d in plan.deliveries if d.week == week]
        assert stock + sum(came) <= most + 1e-6
        stock += sum(came) - use - plan.written_off_t[week]
        assert stock == pytest.approx(plan.stock_t[week], abs=1e-5)
        assert stock >= offer.floor_t[week] - 1e-5
        cost += offer.fees[week] * len(came) + offer.holding_per_t_and_week * stock
    assert stock >= offer.opening_t - 1e-5
    return cost


@pytest.mark.parametrize("solver", SOLVERS)
@pytest.mark.parametrize("case", ["wagner_whitin", "silver_meal"])
def test_published_lot_sizes_cost_what_was_published(case: str, solver: str) -> None:
    row = DATA[case]
    one = lot_offer(row["demands"], row["order_costs"], row["holding_per_unit"])
    plans, report = plan_lots([one], math.inf, open_solver(solver))
    assert plans is not None
    assert report.termination is Termination.OPTIMAL
    assert checked_cost(one, plans["A"]) == pytest.approx(row["total_cost"], rel=1e-6)


def test_a_dynamic_programme_agrees_on_40_cases() -> None:
    rng = random.Random(1958)
    for number in range(40):
        weeks = rng.randint(4, 26)
        use = [rng.choice([0.0, rng.uniform(1.0, 90.0)]) for _ in range(weeks)]
        fees = [rng.uniform(20.0, 200.0) for _ in range(weeks)]
        holding = rng.uniform(0.05, 3.0)
        one = lot_offer(use, fees, holding)
        plans, _ = plan_lots([one], math.inf, open_solver(relative_gap=1e-9))
        assert plans is not None
        expected = least_cost(use, fees, holding)
        assert checked_cost(one, plans["A"]) == pytest.approx(expected, rel=1e-6), number


def test_without_a_store_the_relaxation_is_the_answer() -> None:
    rng = random.Random(7)
    use = [rng.uniform(1.0, 9.0) for _ in range(20)]
    one = lot_offer(use, 60.0, 0.8)
    model = Model("hull")
    add_lots(model, [one], math.inf)
    report = open_solver().solve(model.relaxed())
    assert report.objective == pytest.approx(least_cost(use, [60.0] * 20, 0.8), rel=1e-7)


def enumerated(use: Sequence[float], fee: float, holding: float, store: int, least: int) -> float:
    """Least cost of whole tonnes under a store and a least order, over every stock level."""
    best = {0.0: 0.0}
    for one in use:
        after: dict[float, float] = {}
        for stock, cost in best.items():
            for order in [0, *range(least, int(store - stock) + 1)]:
                left = stock + order - one
                if left >= 0:
                    total = cost + (fee if order else 0.0) + holding * left
                    after[left] = min(after.get(left, math.inf), total)
        best = after
    return min(best.values(), default=math.inf)


def test_store_and_least_order_agree_with_every_stock_level_tried() -> None:
    rng = random.Random(1984)
    none = 0
    for number in range(25):
        use = [rng.randint(0, 24) / 4.0 for _ in range(rng.randint(3, 10))]
        store, least = rng.randint(5, 14), rng.randint(1, 9)
        fee, holding = float(rng.randint(5, 40)), rng.uniform(0.2, 2.0)
        piece = OrderPiece(
            low_t=float(least), high_t=math.inf, goods_fixed=0.0, goods_per_t=0.0,
            freight_fixed=0.0, freight_per_t=0.0,
        )  # fmt: skip
        one = lot_offer(use, fee, holding, pieces=(piece,), pack_t=1.0, value_per_t=1e4)
        plans, _ = plan_lots([one], float(store), open_solver(relative_gap=1e-9))
        expected = enumerated(use, fee, holding, store, least)
        if plans is None:
            none += 1
            assert expected == math.inf, number
            continue
        found = checked_cost(one, plans["A"], most=store)
        assert sum(plans["A"].written_off_t) < 1e-6
        assert found == pytest.approx(expected, rel=1e-6), number
        assert all(d.tonnes >= least - 1e-6 for d in plans["A"].deliveries)
    assert 0 < none < 15


def test_tiers_by_the_order_are_reached_where_they_pay() -> None:
    terms = OrderTerms(
        tiers=(Tier(from_t=0.0, price=100.0), Tier(from_t=20.0, price=90.0)), freight_per_t=5.0,
        freight_free_from_t=20.0,
    )  # fmt: skip
    dear, cheap = order_pieces(terms)
    one = lot_offer([5.0] * 8, 10.0, 0.1, pieces=(dear, cheap), least_total_t=40.0)
    plans, _ = plan_lots([one], 25.0, open_solver())
    assert plans is not None
    assert [d.tonnes for d in plans["A"].deliveries] == pytest.approx([20.0, 20.0])
    assert sum(d.goods + d.freight for d in plans["A"].deliveries) == pytest.approx(3600.0)


def test_nothing_is_kept_past_its_shelf_life() -> None:
    one = lot_offer([2.0] * 12, 500.0, 0.01, shelf_weeks=3, value_per_t=50.0)
    plans, _ = plan_lots([one], math.inf, open_solver())
    assert plans is not None
    assert [(d.week, round(d.tonnes, 6)) for d in plans["A"].deliveries] == [
        (0, 6.0), (3, 6.0), (6, 6.0), (9, 6.0),
    ]  # fmt: skip


def test_two_offers_share_a_store() -> None:
    first = lot_offer([1.0] * 10, 100.0, 0.01, key="A")
    second = lot_offer([2.0] * 10, 100.0, 0.01, key="B", volume_per_t=2.0)
    plans, _ = plan_lots([first, second], 20.0, open_solver())
    assert plans is not None
    a, b = plans["A"], plans["B"]
    for week in range(10):
        there = a.stock_t[week] + 1.0 + 2.0 * (b.stock_t[week] + 2.0)
        assert there <= 20.0 + 1e-6
    assert checked_cost(first, a) + checked_cost(second, b) > 400.0
