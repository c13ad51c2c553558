"""The combined wastestream formula: worked by hand, read from a site, refused where it must be."""

from __future__ import annotations

import pytest

from catalogs.limit_sets import load_limit_sets
from catalogs.problems import InputFileError
from optimiser import plan
from optimiser.combined_flow import alternative_limit_mg_per_l, treated_ceiling_mg_per_l
from optimiser.site import Limit, Site
from tests.optimiser.small_sites import FLOW_M3_PER_D, Tree, row_of, small_site

# 40 CFR 433.15: zinc 2.61 and 1.48, copper 3.38 and 2.07 mg/L
COOLING = {"stream": "cooling water", "kind": "dilute", "flow_m3_per_d": 30}
FLOORS = {"stream": "floor wash", "kind": "unregulated", "flow_m3_per_d": 20}
SECOND = {"stream": "second line", "kind": "regulated", "flow_m3_per_d": 25,
          "set": "metal_finishing_new"}  # fmt: skip


def tree(mixed: str, *streams: Tree, **more: object) -> Tree:
    block = {"mixed": mixed, "streams": list(streams), **more}
    return {
        "limits": {"sets": ["metal_finishing_existing"], "own": None, "combined_flow": block}
    }  # fmt: skip


def limit_of(site: Site, parameter: str) -> Limit:
    return next(limit for limit in site.limits if limit.parameter == parameter)


def refusals(change: Tree) -> list[str]:
    with pytest.raises(InputFileError) as caught:
        small_site(change)
    return [problem.found for problem in caught.value.problems]


def test_dilution_earns_nothing_and_unregulated_water_counts_as_regulated() -> None:
    one = [(60.0, 2.0)]
    assert alternative_limit_mg_per_l(one, total_m3_per_d=60, dilute_m3_per_d=0) == 2.0
    assert alternative_limit_mg_per_l(one, total_m3_per_d=100, dilute_m3_per_d=0) == 2.0
    diluted = alternative_limit_mg_per_l(one, total_m3_per_d=100, dilute_m3_per_d=40)
    assert diluted == pytest.approx(1.2)
    # what clean dilute water leaves to the treated stream is its own limit again
    assert treated_ceiling_mg_per_l(diluted, 60, [(40, 0.0)]) == pytest.approx(2.0)


def test_the_inverse_meets_the_limit_at_the_sampling_point() -> None:
    others = [(30.0, 0.4), (20.0, 0.1), (40.0, 0.02)]
    ceiling = treated_ceiling_mg_per_l(1.1, 60.0, others)
    mixed = (60.0 * ceiling + sum(f * c for f, c in others)) / 150.0
    assert mixed == pytest.approx(1.1, rel=1e-12)


@pytest.mark.parametrize(("regulated", "total", "dilute"), [
    ([(0.0, 1.0)], 10.0, 0.0), ([(60.0, 1.0)], 90.0, 40.0), ([(60.0, 1.0)], 90.0, -1.0),
])  # fmt: skip
def test_flows_that_cannot_be_are_refused(
    regulated: list[tuple[float, float]], total: float, dilute: float
) -> None:
    with pytest.raises(ValueError, match="flow"):
        alternative_limit_mg_per_l(regulated, total_m3_per_d=total, dilute_m3_per_d=dilute)


def test_streams_in_the_feed_lower_the_limit_of_the_treated_water() -> None:
    site = small_site(tree("before_treatment", COOLING, FLOORS))
    zinc = limit_of(site, "Zn")
    assert zinc.daily_mg_per_l == pytest.approx(2.61 * (FLOW_M3_PER_D - 30) / FLOW_M3_PER_D)
    assert zinc.monthly_mg_per_l == pytest.approx(1.48 * 0.7)
    assert "403.6(e)" in zinc.source
    text = " ".join(site.notes)
    assert "Zn daily 2.61 mg/L at the end of the process is 1.827 mg/L at the sampling" in text
    assert "(50 regulated and 30 dilute of 100 m3/d)" in text


def test_another_category_counts_with_its_own_limits() -> None:
    sets = load_limit_sets()
    new = {row.parameter: row for row in sets["metal_finishing_new"].limits}
    site = small_site(
        {"feed": {"analysis": {"Cd": "0.5 mg/L"}}}, tree("before_treatment", SECOND, COOLING)
    )
    cadmium = new["Cd"].daily_mg_per_l
    assert cadmium is not None
    expected = (45.0 * 0.69 + 25.0 * cadmium) / 70.0 * 0.7
    assert limit_of(site, "Cd").daily_mg_per_l == pytest.approx(expected)


def test_streams_that_join_later_leave_a_ceiling_and_never_more_than_the_limit() -> None:
    dirty = {**FLOORS, "mg_per_l": {"Zn": 4.0, "Cu": 0.1}}
    site = small_site(tree("after_treatment", COOLING, dirty))
    alternative = 2.61 * 120.0 / 150.0
    expected = (alternative * 150.0 - 20.0 * 4.0) / 100.0
    assert limit_of(site, "Zn").daily_mg_per_l == pytest.approx(expected)
    assert limit_of(site, "Cu").daily_mg_per_l == 3.38  # 403.6(d): dilution is no treatment
    assert f"leaves {expected:.4g} mg/L for the treated stream" in " ".join(site.notes)


def test_a_plan_meets_the_ceiling_and_pays_for_it() -> None:
    plain = plan(small_site({"limits": {"sets": ["metal_finishing_existing"], "own": None}}))
    many = {**COOLING, "flow_m3_per_d": 50}
    held = plan(small_site(tree("before_treatment", many)))
    row = row_of(held, "Zn", "monthly")
    assert row["limit"] == pytest.approx(1.48 * 0.5)
    assert row["predicted"] <= row["target"] * (1.0 + 1e-9)
    assert held.cost["total"] >= plain.cost["total"]


def test_own_limits_stand_as_written() -> None:
    own = {"limits": {"own": [{"parameter": "Zn", "daily_mg_per_l": 2.0, "source": "permit"}]}}
    site = small_site(tree("before_treatment", COOLING), own)
    assert [x.daily_mg_per_l for x in site.limits if x.source == "permit"] == [2.0]


def test_what_the_formula_forbids_is_refused() -> None:
    below = tree("before_treatment", COOLING, detection_mg_per_l={"Zn": 1.2})
    assert refusals(below) == ["an alternative limit of 1.036 mg/L monthly for Zn"]
    more = {**COOLING, "flow_m3_per_d": 100}
    assert refusals(tree("before_treatment", more)) == [
        "100 m3/d of other streams in a feed of 100 m3/d"
    ]
    used_up = {**FLOORS, "mg_per_l": {"Zn": 60.0, "Cu": 0.1}}
    assert set(refusals(tree("after_treatment", used_up))) == {
        "other streams that use up the daily limit of Zn",
        "other streams that use up the monthly limit of Zn",
    }


def test_streams_need_their_category_and_their_concentrations() -> None:
    nameless = {key: value for key, value in SECOND.items() if key != "set"}
    assert refusals(tree("before_treatment", nameless)) == [
        "a regulated stream without its category"
    ]
    assert refusals(tree("before_treatment", {**COOLING, "set": "metal_finishing_new"})) == [
        "`set` beside `kind: dilute`"
    ]
    assert "no Zn of the stream floor wash" in refusals(tree("after_treatment", FLOORS))
    without = tree("before_treatment", COOLING)
    without["limits"] |= {"sets": None, "own": [{"parameter": "Zn", "daily_mg_per_l": 2.0}]}
    assert refusals(without) == ["a combined flow without a limit set"]
