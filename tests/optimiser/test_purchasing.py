"""Purchasing covers a demand at the least cost, names why it cannot, and shows every surplus."""

from __future__ import annotations

import itertools
import math
import os
import random
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import optimiser
from catalogs.problems import InputFileError
from optimiser import purchasing
from optimiser.deal import Deal
from optimiser.errors import Interrupted, ModelError, NoPurchase
from optimiser.linear_model import Expression, Model, Sense
from optimiser.offer import Offer, Tier
from optimiser.price_book import LEAST_DEMAND_KG, cheapest_purchase
from optimiser.purchasing import add_purchasing, purchase
from optimiser.solver import SOLVERS, Termination, open_solver

GOLDEN = Path(__file__).parents[1] / "golden"


def offer(key: str, reagent: str = "caustic_soda", **terms: Any) -> Offer:
    given = {
        "supplier": "Larkspur Supplies", "product": f"product {key}", "form": "solution",
        "strength_fraction": 0.5, "density_kg_per_l": 1.5, "price": 300.0, "price_per": "t",
    }  # fmt: skip
    return Offer(offer=key, reagent=reagent, **{**given, **terms})


def summed_by_hand(deal: Deal) -> float:
    return math.fsum(buy.goods_per_year + buy.freight_per_year for buy in deal.buys)


# --- what a purchase is ------------------------------------------------------------------------


@pytest.mark.parametrize("solver", SOLVERS)
def test_tonnes_follow_from_the_strength_and_costs_from_the_tonnes(solver: str) -> None:
    deal = purchase({"caustic_soda": 4000.0}, [offer("a", freight_per_t=40.0)], solver=solver)
    (buy,) = deal.buys
    assert buy.bought_t_per_year == pytest.approx(8.0, rel=1e-7)
    assert buy.bought_kg_pure_per_year == pytest.approx(4000.0, rel=1e-7)
    assert buy.surplus_kg_pure_per_year == pytest.approx(0.0, abs=1e-3)
    assert deal.cost == pytest.approx({"goods": 2400.0, "freight": 320.0, "total": 2720.0})
    assert not buy.at_least_order


def test_a_price_per_litre_is_turned_into_tonnes_by_the_density() -> None:
    by_litre = offer("l", price=0.45, price_per="L", density_kg_per_l=1.5)
    assert purchase({"caustic_soda": 500.0}, [by_litre]).cost["total"] == pytest.approx(300.0)


def test_a_weaker_product_needs_more_tonnes_and_more_freight() -> None:
    weak = offer("weak", strength_fraction=0.25, price=140.0, freight_per_t=30.0)
    strong = offer("strong", strength_fraction=0.5, price=300.0, freight_per_t=30.0)
    deal = purchase({"caustic_soda": 1000.0}, [weak, strong])
    assert [buy.offer for buy in deal.buys] == ["strong"]
    assert deal.cost["total"] == pytest.approx(660.0)
    nearby = [replace(weak, freight_per_t=0.0), replace(strong, freight_per_t=0.0)]
    assert [buy.offer for buy in purchase({"caustic_soda": 1000.0}, nearby).buys] == ["weak"]


@pytest.mark.parametrize("solver", SOLVERS)
def test_a_least_order_is_bought_in_full_and_its_surplus_shown(solver: str) -> None:
    deal = purchase({"caustic_soda": 400.0}, [offer("a", least_order_t=5.0)], solver=solver)
    (buy,) = deal.buys
    assert buy.bought_t_per_year == pytest.approx(5.0)
    assert buy.used_kg_pure_per_year == pytest.approx(400.0)
    assert buy.surplus_kg_pure_per_year == pytest.approx(2100.0)
    assert buy.at_least_order
    assert deal.cost["goods"] == pytest.approx(1500.0)


def test_a_dear_offer_without_least_order_wins_for_little_and_loses_for_much() -> None:
    bulk = offer("bulk", price=200.0, least_order_t=20.0)
    can = offer("can", price=900.0)
    little = purchase({"caustic_soda": 2200.0}, [bulk, can])
    much = purchase({"caustic_soda": 2240.0}, [bulk, can])
    assert [buy.offer for buy in little.buys] == ["can"]
    assert [buy.offer for buy in much.buys] == ["bulk"]
    assert much.cost["total"] == pytest.approx(4000.0)


def test_reagents_are_bought_apart_and_added_up() -> None:
    offers = [
        offer("c"), offer("l", "hydrated_lime", price=180.0, strength_fraction=0.9),
        offer("unused", "soda_ash"),
    ]  # fmt: skip
    both = purchase({"caustic_soda": 900.0, "hydrated_lime": 1800.0}, offers)
    apart = [
        purchase({"caustic_soda": 900.0}, offers), purchase({"hydrated_lime": 1800.0}, offers)
    ]  # fmt: skip
    assert both.cost["total"] == pytest.approx(sum(deal.cost["total"] for deal in apart))
    assert [buy.reagent for buy in both.buys] == ["caustic_soda", "hydrated_lime"]


def test_stages_of_a_reagent_are_bought_together() -> None:
    offers = [offer("a", least_order_t=2.0)]
    staged = purchase({"caustic_soda": 600.0, "caustic_soda@trim": 500.0}, offers)
    assert staged.cost == purchase({"caustic_soda": 1100.0}, offers).cost
    assert staged.buys[0].used_kg_pure_per_year == pytest.approx(1100.0)


def test_no_demand_buys_nothing() -> None:
    deal = purchase({"caustic_soda": 0.0, "soda_ash": 0.0}, [offer("a", least_order_t=9.0)])
    assert deal.buys == ()
    assert deal.cost == {"goods": 0.0, "freight": 0.0, "total": 0.0}
    assert purchase({}, []).cost["total"] == 0.0
    assert list(deal.to_frame().columns)[:2] == ["offer", "supplier"]


def test_a_trace_of_demand_still_needs_a_least_order() -> None:
    offers = [offer("a", least_order_t=3.0)]
    for demand_kg in (1e-9, LEAST_DEMAND_KG, 1.0):
        assert purchase({"caustic_soda": demand_kg}, offers).cost["total"] == pytest.approx(900.0)


def test_bought_is_never_less_than_used() -> None:
    rng = random.Random(2)
    for _ in range(20):
        offers = [
            offer(f"o{i}", strength_fraction=rng.uniform(0.05, 1.0), price=rng.uniform(50, 900),
                  least_order_t=rng.choice([0.0, rng.uniform(0.1, 40.0)]))
            for i in range(3)
        ]  # fmt: skip
        demand_kg = 10.0 ** rng.uniform(-2.0, 6.0)
        for solver in SOLVERS:
            deal = purchase({"caustic_soda": demand_kg}, offers, solver=solver)
            used = math.fsum(buy.used_kg_pure_per_year for buy in deal.buys)
            assert used >= demand_kg * (1.0 - 1e-12)
            for buy in deal.buys:
                assert buy.surplus_kg_pure_per_year >= 0.0
                pure = 1000.0 * buy.bought_t_per_year
                assert buy.bought_kg_pure_per_year <= pure
            assert deal.cost["total"] == pytest.approx(summed_by_hand(deal))


def test_a_deal_is_a_frame_with_one_row_per_offer() -> None:
    frame = purchase({"caustic_soda": 400.0}, [offer("a", freight_per_t=10.0)]).to_frame()
    assert frame["offer"].tolist() == ["a"]
    assert frame["cost_per_year"].tolist() == pytest.approx([0.8 * 310.0])
    assert frame["bought_t_per_year"].tolist() == pytest.approx([0.8])


def test_the_public_name_is_this_purchase() -> None:
    assert optimiser.purchase is purchasing.purchase


# --- the least cost ----------------------------------------------------------------------------


def brute_force(demand_kg: float, offers: Sequence[Offer]) -> float:
    """Least cost over every set of offers that is used, each at its least order or topped up.

    Once the set is chosen the problem is linear with one covering row, so at an optimum every
    offer but the cheapest per kg of the set stands at its least order.
    """
    least = math.inf
    for count in range(1, len(offers) + 1):
        for chosen in itertools.combinations(offers, count):
            tonnes = [one.least_order_t for one in chosen]
            pure = [1000.0 * one.strength_fraction for one in chosen]
            per_t = [one.price_per_t + one.freight_per_t for one in chosen]
            short = max(0.0, demand_kg - sum(a * b for a, b in zip(tonnes, pure, strict=True)))
            top_up = min(cost / kg for cost, kg in zip(per_t, pure, strict=True)) * short
            least = min(
                least, top_up + sum(a * b for a, b in zip(tonnes, per_t, strict=True))
            )  # fmt: skip
    return least


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("solver", SOLVERS)
def test_the_cost_is_the_least_over_every_set_of_offers(seed: int, solver: str) -> None:
    rng = random.Random(seed)
    offers = [
        offer(f"o{i}", strength_fraction=rng.uniform(0.2, 1.0), price=rng.uniform(100.0, 800.0),
              freight_per_t=rng.uniform(0.0, 80.0), least_order_t=rng.choice([0.0, 2.0, 9.0, 25.0]))
        for i in range(4)
    ]  # fmt: skip
    demand_kg = rng.uniform(10.0, 20000.0)
    deal = purchase({"caustic_soda": demand_kg}, offers, solver=solver)
    assert deal.cost["total"] == pytest.approx(brute_force(demand_kg, offers), rel=1e-6)
    assert deal.gap == pytest.approx(0.0, abs=1e-6)


sound_offers = st.builds(
    lambda i, **terms: offer(f"o{i}", "soda_ash" if i % 3 == 0 else "caustic_soda", **terms),
    st.integers(0, 10**6),
    strength_fraction=st.floats(0.05, 1.0),
    price=st.floats(1.0, 2000.0),
    freight_per_t=st.floats(0.0, 200.0),
    least_order_t=st.sampled_from([0.0, 0.0, 0.5, 4.0, 24.0]),
)


@settings(max_examples=60, deadline=None)
@given(
    offers=st.lists(sound_offers, min_size=1, max_size=6, unique_by=lambda one: one.offer),
    amounts=st.lists(st.floats(0.0, 50000.0), min_size=2, max_size=2),
)
def test_the_closed_form_is_the_mixed_integer_optimum(
    offers: list[Offer], amounts: list[float]
) -> None:
    sold = {one.reagent for one in offers}
    names = ("caustic_soda", "soda_ash")
    demand = {name: kg for name, kg in zip(names, amounts, strict=True) if name in sold}
    by_solver = purchase(demand, offers)
    closed = cheapest_purchase(demand, offers)
    assert closed.cost["total"] == pytest.approx(by_solver.cost["total"], rel=1e-6, abs=1e-6)
    for name, kg in demand.items():
        used = sum(b.used_kg_pure_per_year for b in closed.buys if b.reagent == name)
        assert used == pytest.approx(max(kg, LEAST_DEMAND_KG) if kg > 0.0 else 0.0, rel=1e-12)


def test_three_times_the_prices_cost_three_times_as_much() -> None:
    offers = [
        offer("a", price=310.0, freight_per_t=22.0, least_order_t=20.0),
        offer("b", price=0.7, price_per="L", freight_per_t=45.0),
        offer("c", "soda_ash", price=260.0, freight_per_t=31.0, strength_fraction=0.99),
    ]
    demand = {"caustic_soda": 7100.0, "soda_ash": 4300.0}
    tripled = [
        replace(one, price=3.0 * one.price, freight_per_t=3.0 * one.freight_per_t) for one in offers
    ]
    base, dear = purchase(demand, offers), purchase(demand, tripled)
    for cause, cost in base.cost.items():
        assert dear.cost[cause] == pytest.approx(3.0 * cost, rel=1e-9)
    assert [buy.offer for buy in dear.buys] == [buy.offer for buy in base.buys]


def test_the_cost_never_falls_when_the_demand_rises() -> None:
    offers = [offer("bulk", price=200.0, least_order_t=20.0), offer("can", price=900.0)]
    costs = [purchase({"caustic_soda": kg}, offers).cost["total"] for kg in range(0, 30000, 1500)]
    assert costs == sorted(costs)
    assert costs[0] < costs[-1]


# --- refusals ----------------------------------------------------------------------------------


def test_every_reason_why_nothing_covers_the_demand_is_named() -> None:
    with pytest.raises(NoPurchase) as caught:
        purchase(
            {"soda_ash": 5.0, "caustic_soda": math.nan, "quicklime": 7.0, "hydrated_lime": 0.0},
            [offer("a"), offer("f", "ferric_chloride")],
        )
    assert str(caught.value) == (
        "no purchase covers this demand:\n"
        "    caustic_soda: a demand in kg pure per year is a number of 0 or more, found nan\n"
        "    soda_ash: no offer sells it; the offers sell caustic_soda, ferric_chloride\n"
        "    quicklime: no offer sells it; the offers sell caustic_soda, ferric_chloride"
    )
    assert caught.value.exit_code == 3
    assert len(caught.value.reasons) == 3


@pytest.mark.parametrize("amount", [-1.0, math.inf, math.nan, "12", True, None])
def test_a_demand_that_is_no_amount_is_refused(amount: Any) -> None:
    with pytest.raises(NoPurchase, match="a demand in kg pure per year is a number of 0 or more"):
        purchase({"caustic_soda": amount}, [offer("a")])


def test_no_offers_at_all_are_a_reason() -> None:
    with pytest.raises(NoPurchase, match="soda_ash: no offer sells it; the offers sell nothing"):
        purchase({"soda_ash": 5.0}, [])


def test_a_solver_that_runs_out_of_time_is_no_verdict_on_the_offers() -> None:
    class Late:
        def solve(self, model: Model) -> Any:
            report = open_solver().solve(model)
            late = Termination.TIME_LIMIT_WITHOUT_SOLUTION
            return replace(report, termination=late, values={})

        def solve_with_integers_fixed(self, model: Model, values: Mapping[str, float]) -> Any:
            raise AssertionError

    with pytest.raises(Interrupted, match="highs found no purchase within its time limit"):
        purchase({"caustic_soda": 5.0}, [offer("a")], solver=Late())


def test_offers_that_cannot_be_used_are_all_named() -> None:
    bad = [
        offer("a", strength_fraction=32.0),
        offer("a", price=-1.0),
        offer("b", price_per="kg", freight_per_t=math.nan),
        offer("c", price_per="L", density_kg_per_l=0.0, least_order_t=math.inf),
    ]
    with pytest.raises(InputFileError) as caught:
        purchase({"caustic_soda": 1.0}, bad)
    places = [(problem.line, problem.field) for problem in caught.value.problems]
    assert places == [
        (1, "strength_percent"), (2, "price"), (2, "offer"), (3, "price_per"),
        (3, "freight_per_t"), (4, "density_kg_per_l"), (4, "least_order_t"),
    ]  # fmt: skip
    assert str(caught.value.problems[0]) == (
        "offers:1: strength_percent: found 3200, expected above 0 and at most 100\n"
        "    Give the mass of pure compound per mass of product."
    )


# --- the block inside a larger model -----------------------------------------------------------


def dosing_model() -> Model:
    """Two reagents share an alkali demand; doses are in kg pure per year."""
    model = Model("dosing")
    model.add_variable("caustic", high=9000.0)
    model.add_variable("lime", high=9000.0)
    alkali = {"caustic": 1.0 / 40.0, "lime": 2.0 / 74.09}
    model.add_row("alkali", alkali, Sense.AT_LEAST, 150.0)
    return model


DOSING_OFFERS = (
    offer("lye", price=400.0, freight_per_t=20.0),
    offer("lye bulk", price=310.0, freight_per_t=20.0, least_order_t=12.0),
    offer("lime", "hydrated_lime", strength_fraction=0.92, price=210.0, freight_per_t=30.0),
)
DEMANDS = {
    "caustic_soda": Expression({"caustic": 1.0}),
    "hydrated_lime": Expression({"lime": 1.1}, 40.0),
}


@pytest.mark.parametrize("solver", SOLVERS)
def test_doses_and_offers_are_chosen_together(solver: str) -> None:
    model = dosing_model()
    block = add_purchasing(model, DOSING_OFFERS, DEMANDS)
    report = open_solver(solver).solve(model)
    deal = block.deal(report.values, gap=report.gap, solver=report.version)
    assert deal.cost["total"] == pytest.approx(report.objective, rel=1e-6)
    by_hand = math.inf
    for step in range(2001):
        caustic = 3.0 * step
        lime = max(0.0, (150.0 - caustic / 40.0) * 74.09 / 2.0)
        demand = {"caustic_soda": caustic, "hydrated_lime": 1.1 * lime + 40.0}
        by_hand = min(by_hand, cheapest_purchase(demand, DOSING_OFFERS).cost["total"])
    assert report.objective == pytest.approx(by_hand, rel=1e-3)
    assert report.objective <= by_hand * (1.0 + 1e-6)


def test_the_cost_of_a_purchase_is_kept_apart_from_other_causes() -> None:
    model = dosing_model()
    model.add_cost("disposal", Expression({"lime": 0.01}))
    add_purchasing(model, DOSING_OFFERS, DEMANDS)
    values = open_solver().solve(model).values
    cost = model.cost(values)
    assert set(cost) == {"disposal", "goods", "freight", "total"}
    assert cost["total"] == pytest.approx(cost["disposal"] + cost["goods"] + cost["freight"])


def test_the_price_of_a_least_order_shows_in_the_marginal_value_of_the_need() -> None:
    model = Model("need")
    model.add_variable("dose", low=1000.0, high=9000.0)
    add_purchasing(
        model, [offer("a", least_order_t=4.0)], {"caustic_soda": Expression({"dose": 1})}
    )
    solver = open_solver()
    report = solver.solve(model)
    fixed = solver.solve_with_integers_fixed(model, report.values)
    assert fixed.marginal_values["cover caustic_soda"] == pytest.approx(0.0)
    more = Model("more")
    more.add_variable("dose", low=3000.0, high=9000.0)
    add_purchasing(more, [offer("a", least_order_t=4.0)], {"caustic_soda": Expression({"dose": 1})})
    fixed = solver.solve_with_integers_fixed(more, solver.solve(more).values)
    assert fixed.marginal_values["cover caustic_soda"] == pytest.approx(0.6)


def test_a_solver_s_rounding_is_no_purchase() -> None:
    model = Model("rounding")
    block = add_purchasing(
        model, [offer("a"), offer("b", least_order_t=4.0)], {"caustic_soda": 1000.0}
    )
    values = {"bought a": 2.0 - 1e-7, "bought b": 5e-7, "used b": 0.0}
    assert model.violations(values) == []
    (buy,) = block.deal(values, gap=0.0, solver="none").buys
    assert buy.offer == "a"
    assert buy.bought_t_per_year == pytest.approx(2.0, rel=1e-12)
    values = {"bought a": 5e-8, "bought b": 4.0 - 1e-7, "used b": 1.0}
    (buy,) = block.deal(values, gap=0.0, solver="none").buys
    assert buy.offer == "b"
    assert buy.bought_t_per_year == 4.0
    assert buy.at_least_order


def test_a_least_order_needs_a_demand_with_an_upper_end() -> None:
    model = Model("open")
    model.add_variable("dose")
    demand = {"caustic_soda": Expression({"dose": 1.0})}
    add_purchasing(model, [offer("free")], demand)
    with pytest.raises(ModelError, match="'bulk' has a least order, so the demand of caustic_soda"):
        add_purchasing(model, [offer("bulk", least_order_t=1.0)], demand)


def test_a_reagent_that_cannot_be_dosed_needs_no_offer() -> None:
    model = Model("none")
    model.add_variable("dose", high=0.0)
    block = add_purchasing(model, [], {"soda_ash": Expression({"dose": 1.0})})
    assert block.columns == {}
    model.add_variable("other", high=1.0)
    with pytest.raises(NoPurchase, match="soda_ash: no offer sells it"):
        add_purchasing(model, [], {"soda_ash": Expression({"other": 1.0})})


# --- golden text: one file per kind of term, and one for the whole block -------------------------

BULK: dict[str, Any] = {"price": 310.0, "freight_per_t": 20.0, "least_order_t": 12.0}
CHEAPER_FROM_10: dict[str, Any] = {
    "tiers": (Tier(from_t=10.0, price=280.0),), "tier_kind": "all_units", "tier_per": "year",
}  # fmt: skip
GOLDEN_TERMS: dict[str, list[Offer]] = {
    "least_order": [offer("bulk", **BULK)],
    "tiers": [offer("bulk", **CHEAPER_FROM_10)],
    "take_or_pay": [offer("lake", take_or_pay_t=8.0, mobilisation_fee=900.0, term_years=3.0)],
    "packs": [offer("drum", pack_t=0.3, freight_per_drop=60.0, order_size_t=1.2)],
    "signed": [offer("old", take_or_pay_t=3.0, left_t=9.0, signed=True), offer("new")],
    "shares": [
        offer("near", most_share_fraction=0.6),
        offer("far", supplier="Tamarisk Trading", least_share_fraction=0.3),
    ],
    "bundle": [
        offer("both", bundle="pair", price=250.0),
        offer("soda", "soda_ash", bundle="pair", take_or_pay_t=2.0),
        offer("alone"),
    ],
}


def golden_models() -> dict[str, Model]:
    models = {}
    for name, offers in GOLDEN_TERMS.items():
        model = Model(f"purchasing {name}")
        add_purchasing(model, offers, {"caustic_soda": 2500.0})
        models[f"purchasing_{name}"] = model
    whole = dosing_model()
    add_purchasing(whole, DOSING_OFFERS, DEMANDS)
    models["purchasing_block"] = whole
    return models


@pytest.mark.parametrize("name", sorted(golden_models()))
def test_the_model_text_is_the_golden_one(name: str) -> None:
    """Set RENEW_GOLDEN=1 to write the files anew; the test then fails once, to be looked at."""
    path = GOLDEN / f"{name}.lp"
    text = golden_models()[name].to_text()
    if os.environ.get("RENEW_GOLDEN") == "1":
        path.write_text(text, encoding="utf-8")
        pytest.fail(f"{path.name} was written anew; read the difference before keeping it")
    assert text == path.read_text(encoding="utf-8")


def test_every_golden_file_has_its_model() -> None:
    found = {path.stem for path in GOLDEN.glob("purchasing_*.lp")}
    assert found == set(golden_models())
