"""The negotiation sheet: drop-out prices and terms against closed forms and plans made anew."""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import pytest

import optimiser
from optimiser import cli
from optimiser.negotiation import Negotiation
from optimiser.offer import Tier
from optimiser.render_negotiation import negotiation_text
from optimiser.site import Site
from tests.optimiser.cli_runs import write_site
from tests.optimiser.small_sites import OFFERS, small_site

ONE = {
    "treatment": {
        "reagents": ["caustic_soda"], "most_reagents": 1,
        "equipment_cost_per_year": {"hydrated_lime": None},
    },
}  # fmt: skip
WEAK = ("NA-30", "caustic_soda", 30, 1.33, 330, "t", 55, 0.5)
TOTAL_AGREES = 2e-4  # share of the cost that two searches may differ by


def with_terms(site: Site, offer: str, **terms: Any) -> Site:
    changed = [replace(o, **terms) if o.offer == offer else o for o in site.offers]
    return replace(site, offers=tuple(changed))


@cache
def single() -> Site:
    """One reagent, two sellers."""
    return small_site(ONE, offers=(*OFFERS, WEAK))


@cache
def pair() -> Site:
    """Two alkalis, one seller each."""
    return small_site()


@cache
def told(name: str) -> Negotiation:
    return optimiser.negotiate({"single": single, "pair": pair}[name]())


def row(found: Negotiation, part: str, **wanted: str) -> dict[str, Any]:
    (one,) = [r for r in found.data[part] if all(r[k] == v for k, v in wanted.items())]
    return dict(one)


def offers_bought(site: Site) -> set[str]:
    return {one["offer"] for one in optimiser.plan(site).to_dict()["purchases"]}


def test_an_offer_drops_out_where_the_second_seller_delivers_as_cheaply() -> None:
    """Delivered cost per kg pure is equal: (p + 40) / 0.50 = (330 + 55) / 0.30."""
    found = row(told("single"), "bought", offer="NA-50")
    expected = 0.50 * (330 + 55) / 0.30 - 40
    assert found["drop_out_price_per_t"] == pytest.approx(expected, rel=1e-3)
    assert found["verified"]
    assert found["without_offers"] == ["NA-30"]
    assert found["room_percent"] == pytest.approx(100 * (expected / 420 - 1), rel=5e-3)


@pytest.mark.parametrize("name", ["single", "pair"])
def test_plans_made_anew_on_both_sides_of_a_bracket_buy_the_offer_or_leave_it(name: str) -> None:
    site = {"single": single, "pair": pair}[name]()
    found = told(name).data["bought"][0]
    low, high = found["bracket_low"], found["bracket_high"]
    assert found["verified"]
    assert high / low <= 1.001
    offer = next(o for o in site.offers if o.offer == found["offer"])
    for price, is_bought in ((low * 0.999, True), (high * 1.001, False)):
        terms = offer.priced_at(price)
        again = replace(
            site, offers=tuple(terms if o.offer == offer.offer else o for o in site.offers)
        )
        assert (offer.offer in offers_bought(again)) is is_bought


def test_what_a_plan_cannot_do_without_has_no_price_to_drop_out_at() -> None:
    site = replace(single(), offers=tuple(o for o in single().offers if o.offer != "NA-30"))
    found = optimiser.negotiate(site)
    mine = row(found, "bought", offer="NA-50")
    assert mine["drop_out_price_per_t"] is None
    assert not mine["verified"]
    assert "no plan is known without it" in " ".join(negotiation_text(found.data).split())


def test_losers_have_the_entry_price_of_the_explanation() -> None:
    found = row(told("single"), "not_bought", offer="NA-30")
    (explained,) = [
        r for r in optimiser.explain_plan(single()).to_dict()["offers"] if r["offer"] == "NA-30"
    ]
    assert found["entry_price_per_t"] == pytest.approx(explained["entry_price_per_t"], rel=1e-3)
    expected = 100.0 * (found["entry_price_per_t"] / 330.0 - 1.0)
    assert found["change_percent"] == pytest.approx(expected)


def bought_t(site: Site) -> float:
    (one,) = [
        r for r in optimiser.plan(site).to_dict()["purchases"] if r["offer"] == "NA-50"
    ]  # fmt: skip
    return float(one["bought_t_per_year"])


def test_the_next_tier_is_worth_its_price_on_what_is_bought() -> None:
    tonnes = bought_t(single())
    tiers = (Tier(from_t=2.0 * tonnes, price=380.0), Tier(from_t=4.0 * tonnes, price=300.0))
    site = with_terms(single(), "NA-50", tiers=tiers, tier_kind="all_units", tier_per="year")
    found = row(optimiser.negotiate(site), "terms", term="next tier")
    assert found["worth_per_year"] == pytest.approx(40.0 * tonnes, rel=5e-3)
    assert found["detail"].startswith("380 already")


def test_a_larger_load_is_worth_the_deliveries_it_saves() -> None:
    load = bought_t(single()) / 8.0
    site = with_terms(single(), "NA-50", order_size_t=load, freight_per_drop=200.0)
    found = row(optimiser.negotiate(site), "terms", term="larger order")
    assert found["worth_per_year"] == pytest.approx(200.0 * (8.0 - 4.0), rel=5e-3)


def test_a_least_order_that_binds_is_worth_its_surplus() -> None:
    tonnes = bought_t(single())
    site = with_terms(single(), "NA-50", least_order_t=1.2 * tonnes)
    found = row(optimiser.negotiate(site), "terms", term="no least order")
    assert found["worth_per_year"] == pytest.approx(0.2 * tonnes * (420 + 40), rel=5e-3)


def test_a_take_or_pay_that_keeps_an_offer_out_is_worth_what_it_would_save() -> None:
    cheap: dict[str, Any] = {"price": 200.0, "take_or_pay_t": 60.0}
    site = with_terms(single(), "NA-30", **cheap)
    now, free = (
        optimiser.plan(one).cost["total"]
        for one in (site, with_terms(single(), "NA-30", price=200.0))
    )
    found = row(optimiser.negotiate(site), "terms", term="no take-or-pay")
    assert now > free
    assert found["worth_per_year"] == pytest.approx(now - free, abs=TOTAL_AGREES * now)


def test_terms_that_change_nothing_are_worth_nothing() -> None:
    site = with_terms(single(), "NA-30", take_or_pay_t=60.0)  # too dear even without it
    found = row(optimiser.negotiate(site), "terms", term="no take-or-pay")
    assert found["worth_per_year"] == 0.0


def test_a_contract_that_is_signed_has_nothing_to_ask() -> None:
    site = with_terms(single(), "NA-50", signed=True, take_or_pay_t=1.0)
    found = optimiser.negotiate(site)
    assert row(found, "bought", offer="NA-50")["drop_out_price_per_t"] is None
    assert not [r for r in found.data["terms"] if r["offer"] == "NA-50"]
    assert "signed already" in negotiation_text(found.data)


def test_the_sheet_is_one_page_and_names_what_to_ask() -> None:
    found = told("pair")
    text = negotiation_text(found.to_dict())
    lines = text.splitlines()
    assert max(map(len, lines)) <= 100
    assert len(lines) <= 60
    asks = text.partition("What to ask\n")[2]
    assert "we leave" in asks
    json.dumps(found.to_dict(), allow_nan=False)
    assert set(found.to_frame()["bought"]) == {True, False}


def test_the_command_prints_the_sheet_or_the_data(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    site = str(write_site(tmp_path / "plant"))
    target = tmp_path / "prices.csv"
    assert cli.main(["negotiate", site, "--csv", str(target)]) == 0
    assert "What to ask" in capsys.readouterr().out
    assert target.read_text(encoding="utf-8").count("\n") >= 2
    assert cli.main(["negotiate", site, "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["bought"]


def test_a_rival_in_a_bundle_costs_what_the_whole_bundle_costs() -> None:
    """The second seller comes with a fee for a partner that stays idle: 600 over two years."""
    fee = {"bundle": "both", "mobilisation_fee": 600.0, "term_years": 2.0}
    site = with_terms(with_terms(single(), "NA-30", bundle="both"), "SA-99", **fee)
    found = optimiser.negotiate(site)
    mine, free = row(found, "bought", offer="NA-50"), row(told("single"), "bought", offer="NA-50")
    assert mine["without_dearer_by"] == pytest.approx(free["without_dearer_by"] + 300.0, rel=2e-3)
    more = mine["drop_out_price_per_t"] - free["drop_out_price_per_t"]
    assert more == pytest.approx(300.0 / mine["bought_t_per_year"], rel=2e-2)
    assert mine["verified"]
    tied = row(found, "not_bought", offer="NA-30")
    assert not tied["verified"]
    assert "Not verified where packs, bundles" in negotiation_text(found.data)
