"""Explanations against closed forms: entry prices of offers, costs of limits, why reagents lost."""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from typing import Any

import pytest

import optimiser
from optimiser import cli
from optimiser.entry_prices import ABOVE, BELOW
from optimiser.explain import Explanation, _alone, explain_plan
from optimiser.planning import find
from optimiser.render_explain import explain_text
from optimiser.site import Limit, Site
from tests.optimiser.small_sites import (
    CARBONATE,
    KG_PER_MG_PER_L,
    OFFERS,
    SULFIDE,
    row_of,
    small_site,
)

ONE = {
    "treatment": {
        "reagents": ["caustic_soda"], "most_reagents": 1,
        "equipment_cost_per_year": {"hydrated_lime": None},
    },
}  # fmt: skip
# a second caustic: weaker, dearer, with a least order below the demand; and one far above it
WEAK = ("NA-30", "caustic_soda", 30, 1.33, 330, "t", 55, 0.5)
BULK = ("NA-XL", "caustic_soda", 50, 1.525, 300, "t", 20, 60.0)


# sulfide needs a higher pH than this site's set points allow
NO_WAY = {
    "treatment": {
        "reagents": ["caustic_soda", "sodium_hydrosulfide"], "sulfide_least_ph": 10.9,
        "equipment_cost_per_year": {"hydrated_lime": None},
    },
}  # fmt: skip
LOOSE = {
    "limits": {"own": [{"parameter": "Cd", "daily_mg_per_l": 5.0, "source": "invented"}]},
}  # fmt: skip


@cache
def single() -> tuple[Site, Explanation]:
    """One reagent, three offers."""
    site = small_site(ONE, offers=(*OFFERS, WEAK, BULK))
    return site, explain_plan(site)


@cache
def pair() -> tuple[Site, Explanation]:
    """Two alkalis to choose from."""
    site = small_site()
    return site, explain_plan(site)


def offer_row(found: Explanation, offer: str) -> dict[str, Any]:
    """The row of one losing offer."""
    return next(row for row in found.data["offers"] if row["offer"] == offer)


def planned(site: Site, offer: str, price_per_t: float) -> float:
    """Cost of a new plan of the site with one price changed."""
    offers = tuple(
        replace(o, price=price_per_t, price_per="t") if o.offer == offer else o for o in site.offers
    )
    return optimiser.plan(replace(site, offers=offers)).cost["total"]


# -- entry prices ---------------------------------------------------------------------------------


def test_the_entry_price_of_a_second_offer_is_that_of_equal_delivered_compound() -> None:
    # 420 + 40 per t of 50 % is 0.92 per kg pure: 276 per t of 30 %, of which 55 are freight
    row = offer_row(single()[1], "NA-30")
    assert row["entry_price_per_t"] == pytest.approx(276.0 - 55.0, rel=1e-3)
    assert row["verified"]
    assert row["bracket_low"] <= 221.0 <= row["bracket_high"]


def test_a_least_order_above_the_demand_is_paid_for_in_the_entry_price() -> None:
    # at the demand of now the whole least order may cost what the caustic costs now; a plan that
    # owns more than it needs may use more of it, so the price may lie a little above
    _, found = single()
    row = offer_row(found, "NA-XL")
    used_kg = found.data["plan"]["doses"]["caustic_soda"] * KG_PER_MG_PER_L
    closed_form = 0.92 * used_kg / 60.0 - 20.0
    assert used_kg < 30000.0
    assert row["verified"]
    assert closed_form * (1.0 - 1e-6) <= row["entry_price_per_t"] <= closed_form * 1.1


def test_brackets_are_no_wider_than_a_thousandth() -> None:
    for _, found in (single(), pair()):
        priced = [row for row in found.data["offers"] if row["entry_price_per_t"] is not None]
        assert priced
        for row in priced:
            width = row["bracket_high"] - row["bracket_low"]
            assert width <= 1e-3 * row["entry_price_per_t"]
    assert BELOW + ABOVE <= 1e-3


def test_plans_made_anew_on_both_sides_of_a_bracket_buy_the_offer_or_leave_it() -> None:
    site, found = pair()
    reagent = (
        "hydrated_lime" if "caustic_soda" in found.data["plan"]["reagents"] else "caustic_soda"
    )
    row = next(r for r in found.data["offers"] if r["reagent"] == reagent)
    assert row["verified"]
    below = planned(site, row["offer"], row["bracket_low"])
    above = planned(site, row["offer"], row["bracket_high"])
    assert below < found.total
    assert above == pytest.approx(found.total, rel=1e-6)


# -- limits ---------------------------------------------------------------------------------------


def test_costs_to_first_order_agree_with_the_plan_solved_again() -> None:
    _, found = pair()
    limits = [row for row in found.data["marginal_costs"] if row["kind"] == "limit"]
    assert limits, "the cheapest plan stands at a limit"
    for row in found.data["marginal_costs"]:
        assert row["first_order_per_year"] == pytest.approx(row["resolved_per_year"], rel=0.1)
        assert row["resolved_per_year"] > 0.0 > row["looser_per_year"]


def test_a_new_plan_under_the_tighter_limit_costs_what_the_explanation_says() -> None:
    site, found = pair()
    row = next(r for r in found.data["marginal_costs"] if r["kind"] == "limit")
    tighter = tuple(_tightened(limit, row["parameter"]) for limit in site.limits)
    again = optimiser.plan(replace(site, limits=tighter)).cost["total"]
    assert again - found.total == pytest.approx(row["resolved_per_year"], rel=0.1)


def _tightened(limit: Limit, parameter: str) -> Limit:
    if limit.label != parameter or limit.daily_mg_per_l is None:
        return limit
    return replace(limit, daily_mg_per_l=0.99 * limit.daily_mg_per_l)


def test_the_tariff_costs_its_share_of_the_wet_sludge() -> None:
    site, found = pair()
    row = next(r for r in found.data["marginal_costs"] if r["kind"] == "sludge tariff")
    wet_t = optimiser.plan(site).sludge["wet_t_per_year"]
    assert row["first_order_per_year"] == pytest.approx(0.1 * 130.0 * wet_t, rel=1e-3)


def test_every_limit_either_has_a_cost_or_does_not_bind() -> None:
    site, found = pair()
    slack = {row["parameter"]: row["below_target_percent"] for row in found.data["not_binding"]}
    bound = {row["parameter"] for row in found.data["marginal_costs"] if row["kind"] == "limit"}
    assert bound | set(slack) == {limit.label for limit in site.limits}
    assert not bound & set(slack)
    rows = optimiser.assess(site, found.data["plan"]["doses"])
    for parameter, below in slack.items():
        row = row_of(rows, parameter)
        expected = 100.0 * (1.0 - row["predicted"] / row["target"])
        assert below == pytest.approx(expected, rel=1e-3)
        assert f"{parameter}, daily (" in " ".join(explain_text(found.data).split())


# -- reagents -------------------------------------------------------------------------------------


def test_a_reagent_that_complies_lost_by_what_its_best_recipe_costs_more() -> None:
    site, found = pair()
    (row,) = found.data["reagents"]
    alone = replace(site, treatment=replace(site.treatment, required=(row["reagent"],)))
    forced = optimiser.plan(alone).cost["total"]
    assert row["difference_per_year"] == pytest.approx(forced - found.total, rel=1e-3)
    assert sum(row["difference_by_cause"].values()) == pytest.approx(row["difference_per_year"])


def test_a_reagent_that_cannot_comply_alone_says_what_it_misses() -> None:
    site = small_site(CARBONATE)
    (row,) = explain_plan(site).data["reagents"]
    assert row["reagent"] == "caustic_soda"
    alone = optimiser.assess(site, {"caustic_soda": 230.0})
    lead = row_of(alone, "Pb")
    assert not lead["meets"]
    assert row["alone"].startswith("alone it misses Pb (daily), at ")


def test_a_rule_that_is_broken_is_named_as_one() -> None:
    # sulfide dosed alone meets the acid feed
    evaluator, findings = find(small_site(SULFIDE, {"treatment": {"most_reagents": 1}}, LOOSE))
    assert _alone(evaluator, findings, "sodium_hydrosulfide").startswith("alone it breaks the rule")


def test_a_reagent_that_no_recipe_complies_with_gets_no_price_but_a_reason() -> None:
    site = small_site(NO_WAY)
    found = explain_plan(site)
    row = next(r for r in found.data["reagents"] if r["reagent"] == "sodium_hydrosulfide")
    assert row["difference_per_year"] is None
    assert "no recipe with it was found to comply" in row["why"]
    assert offer_row(found, "HS-30")["entry_price_per_t"] is None
    assert "nearest recipe with it" in " ".join(explain_text(found.data).split())


# -- faces ----------------------------------------------------------------------------------------


def test_the_explanation_is_plain_data_and_its_text_keeps_the_width() -> None:
    for _, found in (single(), pair()):
        data = json.loads(json.dumps(found.to_dict(), allow_nan=False))
        lines = explain_text(data).splitlines()
        assert max(map(len, lines)) <= 100
        assert any("local" in line for line in lines)
        assert {"offer", "entry_price_per_t"} <= set(found.entry_prices.columns)
        parts = found.ledger.groupby("key")["amount_mg_per_l"].sum()
        for key, dose in data["plan"]["doses"].items():
            assert parts[key] == pytest.approx(dose, rel=1e-6)


def test_an_open_bracket_is_marked_in_the_text() -> None:
    data = json.loads(json.dumps(single()[1].to_dict()))
    row = next(r for r in data["offers"] if r["offer"] == "NA-30")
    line = next(text for text in explain_text(data).splitlines() if "NA-30" in text)
    assert "*" not in line
    row["verified"] = False
    line = next(text for text in explain_text(data).splitlines() if "NA-30" in text)
    assert "*" in line


def test_offers_of_reagents_that_are_not_allowed_stand_apart() -> None:
    row = offer_row(single()[1], "LI-95")
    assert not row["allowed"]
    assert row["entry_price_per_t"] is None
    assert "does not allow: LI-95 (hydrated lime)" in explain_text(single()[1].data)


def test_the_command_prints_the_text_or_the_data(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    site, found = single()
    monkeypatch.setattr(cli, "_load", lambda _options: site)
    monkeypatch.setattr("optimiser.explain.explain_plan", lambda *_args, **_named: found)
    assert cli.main(["explain", "site.yaml"]) == 0
    assert capsys.readouterr().out == explain_text(found.data)
    assert cli.main(["explain", "site.yaml", "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == json.loads(json.dumps(found.data))
