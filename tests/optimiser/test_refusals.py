"""Waters that precipitation must not be planned on are refused with the way out."""

from __future__ import annotations

import pytest

from catalogs.problems import InputFileError
from optimiser import assess, plan
from optimiser.errors import FeedRefused, OptimiserError
from tests.optimiser.small_sites import Tree, own, small_site

LOOSE = own({"parameter": "Cu", "daily_mg_per_l": 5.0}, {"parameter": "Zn", "daily_mg_per_l": 8.0})


def refused(*changes: Tree) -> str:
    with pytest.raises(InputFileError) as caught:
        small_site(*changes)
    return str(caught.value)


@pytest.mark.parametrize(("analyte", "name"), [("Cr(VI)", "hexavalent"), ("CN", "cyanide")])
def test_unreduced_chromium_and_free_cyanide_are_refused(analyte: str, name: str) -> None:
    said = refused(LOOSE, {"feed": {"analysis": {analyte: "0.06 mg/L"}}})
    assert f"feed.analysis.{analyte}" in said
    assert "0.05 mg/L" in said
    assert name in said.lower() or analyte in said
    assert "pretreated" in said


@pytest.mark.parametrize("analyte", ["Cr(VI)", "CN"])
def test_what_is_at_or_below_the_threshold_is_planned(analyte: str) -> None:
    site = small_site(LOOSE, {"feed": {"analysis": {analyte: "0.05 mg/L"}}})
    assert plan(site).compliant


@pytest.mark.parametrize("analyte", ["Cr(VI)", "CN"])
def test_a_pretreatment_with_its_date_is_taken_at_its_word_and_noted(analyte: str) -> None:
    site = small_site(
        LOOSE,
        {"feed": {"analysis": {analyte: "0.4 mg/L"}, "pretreated": {analyte: "2026-05-04"}}},
    )
    result = assess(site, {"caustic_soda": 230.0})
    assert any(analyte in text and "2026-05-04" in text for text in result.data["assumptions"])


def test_a_pretreatment_without_a_date_is_refused() -> None:
    said = refused(
        LOOSE, {"feed": {"analysis": {"CN": "0.4 mg/L"}, "pretreated": {"CN": "last spring"}}}
    )
    assert "last spring" in said


def test_total_chromium_without_its_states_asks_for_them() -> None:
    said = refused(LOOSE, {"feed": {"analysis": {"Cr": "3 mg/L"}}})
    assert "Cr(III)" in said
    assert "Cr(VI)" in said


def test_hexavalent_chromium_counts_in_a_limit_on_total_chromium() -> None:
    chromium: Tree = {
        "feed": {"analysis": {"Cr(III)": "5 mg/L", "Cr(VI)": "0.04 mg/L"}},
    }
    site = small_site(chromium, own({"parameter": "Cr", "daily_mg_per_l": 1.0}))
    row = assess(site, {"caustic_soda": 230.0}).data["limits"][0]
    assert row["residual"] >= 0.04


SALTY: Tree = {"activity": "davies", "feed": {"analysis": {"Na": "14 g/L"}}}
BRINE: Tree = {"activity": "davies", "feed": {"analysis": {"Na": "26 g/L"}}}


def test_an_ionic_strength_above_one_half_warns() -> None:
    result = assess(small_site(LOOSE, SALTY), {"caustic_soda": 230.0})
    strength = result.water["ionic_strength_mol_per_l"].max()
    assert 0.5 < strength < 1.0
    assert any("ionic strength" in text for text in result.cautions)


def test_a_weak_water_does_not_warn_of_its_ionic_strength() -> None:
    result = assess(small_site(LOOSE), {"caustic_soda": 230.0})
    assert not any("ionic strength" in text for text in result.cautions)


def test_an_ionic_strength_above_one_is_not_planned_on_unless_told() -> None:
    with pytest.raises(FeedRefused, match="ionic strength of 1") as caught:
        plan(small_site(LOOSE, BRINE))
    assert isinstance(caught.value, OptimiserError)
    assert caught.value.exit_code == 2
    assert "salty_water_allowed" in str(caught.value)
    assert plan(small_site(LOOSE, BRINE, {"treatment": {"salty_water_allowed": True}})).compliant


def test_an_ionic_strength_above_one_is_not_assessed_unless_told() -> None:
    with pytest.raises(FeedRefused, match="ionic strength"):
        assess(small_site(LOOSE, BRINE), {"caustic_soda": 230.0})
    allowed: Tree = {"treatment": {"salty_water_allowed": True}}
    assert assess(small_site(LOOSE, BRINE, allowed), {"caustic_soda": 230.0}).cost["total"] > 0.0
