"""Contracts compared: each against a plan made anew, figures against arithmetic by hand."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import pytest

import optimiser
from catalogs.problems import InputFileError
from optimiser import cli
from optimiser.contracts import ContractComparison, commits, sign
from optimiser.errors import UnknownOffer
from optimiser.offer import Offer
from optimiser.render_contracts import contracts_text
from optimiser.site import Procurement, Site
from tests.optimiser.cli_runs import write_site
from tests.optimiser.small_sites import OFFERS, small_site

SECOND = ("LI-90", "hydrated_lime", 90, 0.5, 230, "t", 30, 0.5)
SWITCHING = {"hydrated_lime": 6000.0, "caustic_soda": 2500.0}
LAST_YEAR = 4000.0
YEARS = 3.0


def sellers(site: Site, **terms: dict[str, Any]) -> Site:
    """The site with further terms on some of its offers."""
    changed = [replace(o, **terms.get(o.offer.replace("-", "_"), {})) for o in site.offers]
    return replace(site, offers=tuple(changed))


@cache
def base() -> Site:
    """Two alkalis, a second lime; caustic is dosed today."""
    return replace(
        small_site(offers=(*OFFERS, SECOND)), today={"caustic_soda": 150.0},
        procurement=Procurement(
            switching_costs=SWITCHING, term_years=YEARS, last_year_bill=LAST_YEAR
        ),
    )  # fmt: skip


@cache
def owing() -> Site:
    """Caustic is sold with a take-or-pay far above any need, and a fee."""
    terms = {"take_or_pay_t": 30.0, "mobilisation_fee": 900.0, "term_years": 3.0}
    return sellers(base(), NA_50=terms)


@cache
def compared(site: str = "base") -> ContractComparison:
    return optimiser.compare_contracts({"base": base, "owing": owing}[site]())


def row(offer: str, site: str = "base") -> dict[str, Any]:
    (found,) = [r for r in compared(site).data["candidates"] if r["offers"] == [offer]]
    return dict(found)


def planned(site: Site, *offers: Offer, required: str = "") -> float:
    """Cost of a plan searched anew with these offers."""
    treatment = replace(site.treatment, required=(required,) if required else ())
    return optimiser.plan(replace(site, offers=offers, treatment=treatment)).cost["total"]


@pytest.mark.parametrize("offer", ["NA-50", "LI-95", "LI-90"])
def test_an_offer_that_obliges_to_nothing_supplies_all_of_its_reagent(offer: str) -> None:
    site, found = base(), row(offer)
    mine = next(o for o in site.offers if o.offer == offer)
    others = [o for o in site.offers if o.reagent != mine.reagent]
    anew = planned(site, mine, *others, required=mine.reagent)
    assert found["verified"]
    assert found["total"] == pytest.approx(anew, rel=2e-4)
    assert found["doses"][mine.reagent] > 0.0
    bought = {p["offer"] for p in found["purchases"] if p["reagent"] == mine.reagent}
    assert bought == {offer}


def test_the_plan_without_a_contract_is_the_plan() -> None:
    best = compared().data["best"]
    assert best["total"] == pytest.approx(optimiser.plan(base()).cost["total"], rel=2e-4)
    assert best["dearer_than_best_per_year"] == 0.0
    totals = [r["total"] for r in compared().data["candidates"] if r["total"] is not None]
    assert totals == sorted(totals)
    assert totals[0] == pytest.approx(best["total"], rel=1e-6)
    assert min(totals) >= best["total"] * (1.0 - 1e-5)


def test_what_a_contract_obliges_to_is_due_and_others_may_be_bought_beside_it() -> None:
    site, found = owing(), row("NA-50", "owing")
    mine = next(o for o in site.offers if o.offer == "NA-50")
    others = [o for o in site.offers if o.offer != "NA-50"]
    anew = planned(site, replace(mine, signed=True), *others)
    assert found["total"] == pytest.approx(anew + 900.0 / 3.0, rel=2e-4)
    assert found["terms"] == ["30 t a year due"]
    assert found["cost"]["mobilisation"] == pytest.approx(300.0)
    goods = 30.0 * mine.price_per_t
    assert found["bill_per_year"] >= goods + 300.0 - 1e-6


def test_figures_of_the_meeting_follow_from_the_costs() -> None:
    today = compared().data["today"]
    assert today["total"] == pytest.approx(optimiser.assess(base(), base().today).cost["total"])
    lime, caustic = row("LI-95"), row("NA-50")
    for found in (lime, caustic):
        saving = today["total"] - found["total"]
        new = {key.partition("@")[0] for key in found["doses"]} - {"caustic_soda"}
        switching = sum(SWITCHING.get(name, 0.0) for name in new)
        assert found["saving_per_year"] == pytest.approx(saving)
        assert found["switching_cost"] == pytest.approx(switching)
        assert found["cost_over_term"] == pytest.approx(YEARS * found["total"] + switching)
        bill = sum(
            p["goods_per_year"] + p["freight_per_year"] + p["other_per_year"]
            for p in found["purchases"]
        )
        assert found["bill_per_year"] == pytest.approx(bill)
        assert found["change_of_bill_per_year"] == pytest.approx(bill - LAST_YEAR)
        if saving > 0.0:
            assert found["payback_months"] == pytest.approx(12.0 * switching / saving)
        else:
            assert found["payback_months"] is None
    assert lime["switching_cost"] >= 6000.0
    assert "hydrated_lime" in lime["new_reagents"]
    assert "caustic_soda" not in caustic["new_reagents"]


def test_an_offer_that_no_recipe_of_the_search_can_use_says_so() -> None:
    found = row("SU-93")
    assert found["total"] is None
    assert "not allowed at this site" in found["why"]
    assert "SU-93: not compared" in contracts_text(compared().data)


def test_a_bundle_is_signed_as_a_whole_and_supplies_its_reagents_alone() -> None:
    together = {"bundle": "both", "mobilisation_fee": 100.0}
    site = sellers(base(), NA_50=together, LI_90=together)
    group = tuple(o for o in site.offers if o.bundle)
    signing = sign(site, group)
    assert not [o for o in signing.site.offers if o.offer == "LI-95"]
    assert [o.signed for o in signing.site.offers if o.offer in ("NA-50", "LI-90")] == [True, True]
    assert signing.fees_per_year == pytest.approx(200.0)
    found = optimiser.compare_contracts(site, [["LI-90"]]).data["candidates"]
    assert [r["offers"] for r in found] == [["NA-50", "LI-90"]]


def test_least_amounts_oblige_by_the_year_only() -> None:
    offer = base().offers[0]
    assert not commits(replace(offer, least_order_t=5.0, least_order_per="order"))
    assert commits(replace(offer, least_order_t=5.0, least_order_per="year"))
    assert commits(replace(offer, take_or_pay_t=1.0))


@pytest.mark.parametrize("name", ["NA-51", "LI-95"])
def test_an_unknown_or_signed_offer_is_refused(name: str) -> None:
    site = sellers(base(), LI_95={"signed": True})
    with pytest.raises(UnknownOffer, match=name):
        optimiser.compare_contracts(site, [[name]])


def test_the_text_keeps_the_width_and_the_frame_has_every_candidate() -> None:
    found = compared()
    lines = contracts_text(found.to_dict()).splitlines()
    assert max(map(len, lines)) <= 100
    assert any("payback" in line for line in lines)
    assert "3 years" in "\n".join(lines)
    frame = found.to_frame()
    assert len(frame) == 1 + len(found.data["candidates"])
    assert next(iter(frame["offers"])) == ""
    json.dumps(found.to_dict(), allow_nan=False)


def test_the_command_prints_a_table_data_and_a_file(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    site = str(write_site(tmp_path / "plant", {"procurement": {"term_years": 2}}))
    target = tmp_path / "table.csv"
    command = ["contracts", site, "--candidate", "NA-50", "--candidate", "NA-50+LI-95"]
    assert cli.main([*command, "--csv", str(target), "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert {"+".join(r["offers"]) for r in data["candidates"]} == {"NA-50", "NA-50+LI-95"}
    assert data["term_years"] == 2
    assert data["today"] is None
    with target.open(encoding="utf-8") as stream:
        assert len(list(csv.DictReader(stream))) == 3
    assert cli.main(["contracts", site, "--candidate", "NA-51"]) == 2
    assert "NA-50" in capsys.readouterr().err


def test_slips_in_the_block_of_the_site_file_are_told() -> None:
    with pytest.raises(InputFileError) as caught:
        small_site({"procurement": {"switching_costs": {"soda": 4}, "term_years": 0, "bill": 3}})
    told = [problem.field for problem in caught.value.problems]
    assert told == [
        "procurement.switching_costs.soda", "procurement.term_years", "procurement.bill"
    ]  # fmt: skip
