"""Offers are compared at given volumes: each alone, and the cheapest purchase of all."""

from __future__ import annotations

import json
import random
import time
from pathlib import Path
from typing import Any

import pytest

from catalogs.reagents import load_reagents
from optimiser.cli import main
from optimiser.errors import NoPurchase
from optimiser.offer import Framework, Offer, Rebate, Tier
from optimiser.offer_comparison import compare_offers
from optimiser.offer_cost import costs_at
from optimiser.price_book import PriceBook
from optimiser.purchasing import purchase

SITE = Path(__file__).parents[2] / "catalogs" / "sites" / "lead_battery"
REAGENTS = load_reagents()


def offer(key: str, reagent: str = "caustic_soda", **terms: Any) -> Offer:
    return Offer(
        offer=key, reagent=reagent, product=f"product {key}", form="solution", price_per="t",
        density_kg_per_l=1.5, **{
            "supplier": "Larkspur Supplies", "strength_fraction": 0.5, "price": 300.0, **terms,
        },
    )  # fmt: skip


def test_every_offer_is_ranked_as_if_it_covered_all() -> None:
    offers = [
        offer("dear", price=400.0),
        offer("weak", strength_fraction=0.25, price=140.0),
        offer("bulk", price=250.0, least_order_t=30.0),
        offer("small", price=100.0, most_t_per_year=6.0),
    ]
    found = compare_offers(offers, {"caustic_soda": 10000.0}, REAGENTS)
    assert [bid.offer.offer for bid in found.bids["caustic_soda"]] == [
        "weak", "bulk", "dear", "small",
    ]  # fmt: skip
    weak, bulk, _, small = found.bids["caustic_soda"]
    assert weak.per_kg == pytest.approx(0.56)
    assert weak.per_mol == pytest.approx(0.56 * 0.039997)
    assert bulk.buy is not None
    assert bulk.buy.surplus_kg_pure_per_year == pytest.approx(5000.0)
    assert bulk.per_kg == pytest.approx(0.75)
    assert (small.buy, small.covers_fraction) == (None, pytest.approx(0.3))


def test_the_cheapest_purchase_may_split_what_the_ranking_does_not() -> None:
    offers = [offer("small", price=100.0, most_t_per_year=6.0), offer("rest", price=280.0)]
    found = compare_offers(offers, {"caustic_soda": 10000.0}, REAGENTS)
    assert found.deal.cost["total"] == pytest.approx(600.0 + 14.0 * 280.0)
    assert found.bids["caustic_soda"][0].offer.offer == "rest"


def test_an_offer_alone_is_bought_up_to_its_tier_and_in_whole_packs() -> None:
    tiered = offer(
        "t", pack_t=1.5, tiers=(Tier(from_t=10.0, price=200.0),), tier_kind="all_units",
        tier_per="year",
    )  # fmt: skip
    found = compare_offers([tiered], {"caustic_soda": 4400.0}, REAGENTS)
    (bid,) = found.bids["caustic_soda"]
    assert bid.buy is not None
    assert bid.buy.bought_t_per_year == pytest.approx(10.5)
    assert bid.buy.tier == 2
    assert found.deal.cost["total"] == pytest.approx(bid.buy.cost_per_year, rel=1e-9)


def test_what_nobody_sells_is_no_comparison() -> None:
    with pytest.raises(NoPurchase, match="quicklime: no offer sells it"):
        compare_offers([offer("a")], {"quicklime": 5.0}, REAGENTS)


def random_book(count: int, seed: int, reagents: int) -> list[Offer]:
    rng = random.Random(seed)
    names = sorted(REAGENTS)[:reagents]
    offers = []
    for k in range(count):
        kind = rng.choice(["", "all_units", "incremental"])
        starts = sorted(rng.sample([10.0, 20.0, 50.0, 100.0], 2))
        tiers = tuple(Tier(from_t=t, price=280.0 - t * rng.uniform(0.1, 0.9)) for t in starts)
        offers.append(
            offer(
                f"o{k}", names[k % reagents], supplier=f"supplier {k % 9}",
                strength_fraction=rng.uniform(0.3, 0.99), price=rng.uniform(280.0, 420.0),
                freight_per_t=rng.uniform(5.0, 40.0), order_size_t=rng.choice([0.0, 5.0, 20.0]),
                least_order_t=rng.choice([0.0, 1.0, 4.0]),
                take_or_pay_t=rng.choice([0.0, 0.0, 15.0, 40.0]),
                most_t_per_year=rng.choice([60.0, 500.0, 900.0]),
                tiers=tiers if kind else (), tier_kind=kind, tier_per="year" if kind else "",
                rebate=Rebate(fraction=0.04, above_t=30.0, on="all") if k % 7 == 0 else None,
                mobilisation_fee=rng.choice([0.0, 0.0, 800.0]),
            )
        )  # fmt: skip
    return offers


@pytest.mark.slow
@pytest.mark.parametrize("tied", [False, True])
def test_two_hundred_offers_are_compared_in_two_seconds(tied: bool) -> None:
    offers = random_book(200, 5, 12)
    if tied:
        framework = Framework(
            name="all", fee_per_year=900.0, rebate_fraction=0.03, rebate_above_t=90
        )
        offers += [offer(f"f{k}", name, framework=framework, pack_t=0.025)
                   for k, name in enumerate(sorted(REAGENTS)[:3])]  # fmt: skip
    demand = {name: 9000.0 + 700.0 * k for k, name in enumerate(sorted(REAGENTS)[:12])}
    purchase({"caustic_soda": 1.0}, [offer("warm")])
    started = time.process_time()
    found = compare_offers(offers, demand, REAGENTS)
    assert time.process_time() - started < 2.0
    assert sum(len(bids) for bids in found.bids.values()) == len(offers)
    assert found.deal.cost["total"] > 0.0


@pytest.mark.parametrize(("count", "by"), [(40, "closed form"), (41, "HiGHS"), (200, "HiGHS")])
def test_many_offers_of_one_reagent_agree_with_the_solver(count: int, by: str) -> None:
    offers = random_book(count, 6, 1)
    name = sorted(REAGENTS)[0]
    found = compare_offers(offers, {name: 70000.0}, REAGENTS)
    by_solver = purchase({name: 70000.0}, offers)
    assert found.deal.solver.startswith(by)
    assert found.deal.cost["total"] == pytest.approx(by_solver.cost["total"], rel=1e-6)
    assert PriceBook(offers).cost(name, 70000.0) <= by_solver.cost["total"] * (1.0 + 1e-9)
    best = found.bids[name][0]
    assert best.buy is not None
    assert found.deal.cost["total"] <= best.buy.cost_per_year
    costs, _ = costs_at(best.offer, best.buy.bought_t_per_year)
    assert best.buy.cost_per_year == pytest.approx(sum(costs.values()))


# --- the command ---------------------------------------------------------------------------------


def test_the_command_ranks_at_the_volumes_given(
    capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    csv = tmp_path / "ranking.csv"
    words = ["offers", str(SITE), "--demand", "soda_ash=9000", "--csv", str(csv)]
    assert main([*words, "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert data["demand_kg_pure_per_year"] == {"soda_ash": 9000.0}
    assert [row["offer"] for row in data["ranking"]["soda_ash"]] == ["VB-SAD", "PT-SAL"]
    cost = 9.0 / 0.992 * (347.0 + 31.0)
    assert data["best"]["cost"]["total"] == pytest.approx(cost)
    assert csv.read_text(encoding="utf-8").splitlines()[1].startswith("VB-SAD,")
    assert main(words) == 0
    text = capsys.readouterr().out
    assert "EUR 3,429 a year buys volumes given" in text
    assert max(len(line) for line in text.splitlines()) <= 100


def test_the_command_takes_today_s_doses_where_no_volume_is_given(
    capsys: pytest.CaptureFixture[str],
) -> None:
    assert main(["offers", str(SITE), "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert data["demand_from"] == "today's doses"
    assert data["demand_kg_pure_per_year"] == pytest.approx(
        {"hydrated_lime": 3100 * 37.5, "sodium_hydrosulfide": 20 * 37.5}
    )


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--demand", "sodaash=5"], "--demand sodaash: unknown reagent; did you mean `soda_ash`?"),
        (["--demand", "quicklime"], "expected REAGENT=KG_PER_YEAR such as caustic_soda=18000"),
        (["--demand", "quicklime=-5"], "expected a number above 0, found '-5'"),
    ],
)
def test_the_command_refuses_what_is_no_demand(
    words: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    try:
        code = main(["offers", str(SITE), *words])
    except SystemExit as stop:
        code = int(stop.code or 0)
    assert code == 2
    assert said in capsys.readouterr().err
