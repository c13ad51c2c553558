"""Plans under contracts: tiers and take-or-pay move the plan, packs and frameworks are exact."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache

import pytest

from optimiser import assess, plan
from optimiser.offer import Framework, Offer, Tier
from optimiser.outcome import Plan
from optimiser.price_book import PriceBook
from optimiser.purchasing import purchase
from optimiser.site import Site
from tests.optimiser.small_sites import KG_PER_MG_PER_L, small_site

SITE = small_site()


def with_terms(**terms: object) -> Site:
    """The small site whose caustic soda comes under these terms."""
    offers = tuple(
        replace(o, **terms) if o.reagent == "caustic_soda" else o  # type: ignore[arg-type]
        for o in SITE.offers
    )
    return replace(SITE, offers=offers)


@cache
def plan_of(site_of: str) -> tuple[Site, Plan]:
    terms: dict[str, dict[str, object]] = {
        "plain": {},
        "packs": {"pack_t": 1.5},
        "framework": {
            "framework": Framework(
                name="two years", fee_per_year=250.0, rebate_fraction=0.1, rebate_above_t=5.0
            )
        },
        "signed": {"signed": True, "take_or_pay_t": 60.0},
        "tiers": {
            "tiers": (Tier(from_t=30.0, price=60.0),), "tier_kind": "all_units",
            "tier_per": "year",
        },
    }  # fmt: skip
    site = with_terms(**terms[site_of])
    return site, plan(site)


def demand_of(found: Plan) -> dict[str, float]:
    return {key: dose * KG_PER_MG_PER_L for key, dose in found.data["doses"].items()}


@pytest.mark.parametrize("name", ["plain", "packs", "framework", "signed", "tiers"])
def test_a_plan_costs_what_its_purchase_costs(name: str) -> None:
    site, found = plan_of(name)
    deal = purchase(demand_of(found), site.offers)
    bought = [row["goods_per_year"] + row["other_per_year"] for row in found.data["purchases"]]
    freight = math.fsum(row["freight_per_year"] for row in found.data["purchases"])
    agreements = found.cost.get("framework agreements", 0.0)
    assert math.fsum(bought) + freight + agreements == pytest.approx(deal.cost["total"], rel=1e-6)
    assert found.cost["freight"] == pytest.approx(freight, rel=1e-6)
    parts = [value for cause, value in found.cost.items() if cause != "total"]
    assert found.cost["total"] == pytest.approx(math.fsum(parts), rel=1e-9)
    again = assess(site, found.data["doses"])
    assert again.cost["total"] == pytest.approx(found.cost["total"], rel=1e-3)


def test_packs_are_whole_in_a_plan() -> None:
    site, found = plan_of("packs")
    caustic = [o.offer for o in site.offers if o.reagent == "caustic_soda"]
    rows = [row for row in found.data["purchases"] if row["offer"] in caustic]
    for row in rows:
        packs = row["bought_t_per_year"] / 1.5
        assert packs == pytest.approx(round(packs), abs=1e-9)
    lower = PriceBook(site.offers)
    for row in rows:
        demand = demand_of(found)["caustic_soda"]
        assert lower.cost("caustic_soda", demand) <= row["goods_per_year"] + row["freight_per_year"]


def test_a_sunk_contract_is_used_up_before_another_reagent_is_bought() -> None:
    site, found = plan_of("signed")
    old = next(row for row in found.data["purchases"] if row["reagent"] == "caustic_soda")
    offer = next(o for o in site.offers if o.offer == old["offer"])
    paid = old["goods_per_year"] + old["other_per_year"]
    assert paid == pytest.approx(60.0 * offer.price_per_t, rel=1e-6)
    assert set(found.data["doses"]) <= {"caustic_soda", "hydrochloric_acid@trim"}


def test_contracts_that_only_add_choice_never_make_a_plan_dearer() -> None:
    _, plain = plan_of("plain")
    extra = replace(
        next(o for o in SITE.offers if o.reagent == "caustic_soda"),
        offer="more", take_or_pay_t=20.0, price=400.0,
    )  # fmt: skip
    wider = plan(replace(SITE, offers=(*SITE.offers, extra)))
    assert wider.cost["total"] <= plain.cost["total"] * (1.0 + 1e-5)


def test_a_deep_tier_is_reached_where_it_pays() -> None:
    _, plain = plan_of("plain")
    site, tiered = plan_of("tiers")
    assert tiered.cost["total"] <= plain.cost["total"] * (1.0 + 1e-5)
    for row in tiered.data["purchases"]:
        if row["reagent"] == "caustic_soda" and row["tier"] == 2:
            assert row["bought_t_per_year"] >= 30.0 * (1.0 - 1e-9)
    assert isinstance(site.offers[0], Offer)
