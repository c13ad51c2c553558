"""Where no doses comply, the reason names the limit, how low it gets and what stops it."""

from __future__ import annotations

import math

import pytest

from optimiser import NoPlan, plan
from optimiser.errors import OptimiserError
from tests.optimiser.small_sites import (
    SULFATE,
    Tree,
    dissolved_mg_per_l,
    feed_totals,
    own,
    settled,
    small_site,
)

CAUSTIC_ONLY: Tree = {
    "treatment": {
        "reagents": ["caustic_soda"], "equipment_cost_per_year": {"hydrated_lime": None},
    }
}  # fmt: skip
# solids so few that what is dissolved decides
CLEAR: Tree = {
    "treatment": {"separator": {"tss_mg_per_l": 0.001, "capture_fraction": 0.99999}},
    "limits": {"floors": {"Zn": {"hydroxide": 0.0001}, "Cu": {"hydroxide": 0.0001}}},
}


def no_plan(*changes: Tree) -> NoPlan:
    with pytest.raises(NoPlan) as caught:
        plan(small_site(*changes))
    return caught.value


def only_clash(error: NoPlan) -> dict[str, object]:
    assert len(error.clashes) == 1
    return dict(error.clashes[0])


def test_no_plan_is_told_with_exit_code_3() -> None:
    error = no_plan(CAUSTIC_ONLY, own({"parameter": "Zn", "daily_mg_per_l": 0.05}))
    assert isinstance(error, OptimiserError)
    assert error.exit_code == 3
    assert error.reasons


def test_a_dissolved_metal_out_of_reach_is_named_with_its_lowest_value_and_its_species() -> None:
    site = small_site(CAUSTIC_ONLY, CLEAR)
    lowest = min(
        dissolved_mg_per_l(settled(site, {"caustic_soda": float(d)}), "Zn+2", 65.38)
        for d in range(225, 270)
    )  # amphoteric: a least value of about 0.6 mg/L near pH 9.5 to 10
    error = no_plan(CAUSTIC_ONLY, CLEAR, own({"parameter": "Zn", "daily_mg_per_l": 0.3}))
    clash = only_clash(error)
    assert clash["limit"] == "Zn, daily (0.3 mg/L)"
    assert clash["target"] == pytest.approx(0.24)
    # the lowest over the points examined, each with its tolerance where that was tried
    assert 0.999 * lowest < float(str(clash["lowest_reachable"])) < 1.5 * lowest
    assert "dissolved as Zn" in str(clash["stopped_by"])
    assert "out of reach whatever is dosed: Zn, daily (0.3 mg/L)" in str(error)


def test_carry_over_is_named_where_it_is_what_stops_a_metal() -> None:
    coarse: Tree = {"treatment": {"separator": {
        "name": "old clarifier", "tss_mg_per_l": 20, "capture_fraction": 0.5,
    }}}  # fmt: skip
    clash = only_clash(no_plan(coarse, own({"parameter": "Cu", "daily_mg_per_l": 1.0})))
    assert clash["stopped_by"] == "carry-over past the old clarifier"
    # 20 mg/L of floc that is at most 65 % copper and at least 58 mg/L of about 160
    assert 20.0 * 58.0 / 175.0 < float(str(clash["lowest_reachable"])) < 20.0 * 0.6513 + 0.1


def test_the_practical_floor_is_named_where_it_is_what_stops_a_metal() -> None:
    fine: Tree = {"treatment": {"separator": {"tss_mg_per_l": 0.001, "capture_fraction": 0.99999}}}
    clash = only_clash(no_plan(fine, own({"parameter": "Cu", "daily_mg_per_l": 0.06})))
    assert "practical floor" in str(clash["stopped_by"])
    assert clash["lowest_reachable"] == pytest.approx(0.07)
    assert clash["target"] == pytest.approx(0.048)


def test_a_salt_that_the_feed_brings_is_named_with_what_it_brings() -> None:
    changes = (SULFATE, own({"parameter": "SO4", "daily_mg_per_l": 500}))
    site = small_site(SULFATE)
    brought = float(feed_totals(site)[site.system.index["SO4-2"]]) * 96056.0
    clash = only_clash(no_plan(*changes))
    assert clash["limit"] == "SO4, daily (500 mg/L)"
    assert f"{brought:.4g} mg/L" in str(clash["stopped_by"])
    assert float(str(clash["lowest_reachable"])) > 400.0


def test_an_averages_limit_is_told_in_the_values_that_the_permit_is_written_in() -> None:
    average: Tree = {
        "feed": {"stands_for": "average"},
        "limits": {"variability": {"Zn": {"daily": 4.0, "monthly": 2.0}}},
    }
    peak = only_clash(no_plan(CAUSTIC_ONLY, CLEAR, own({"parameter": "Zn", "daily_mg_per_l": 0.3})))
    mean = only_clash(
        no_plan(CAUSTIC_ONLY, CLEAR, average, own({"parameter": "Zn", "daily_mg_per_l": 0.3}))
    )
    assert mean["target"] == pytest.approx(0.24)
    assert float(str(mean["lowest_reachable"])) == pytest.approx(
        4.0 * float(str(peak["lowest_reachable"])), rel=0.05
    )


def test_limits_that_clash_only_with_one_another_are_told_apart_from_those_out_of_reach() -> None:
    # zinc wants pH 9 and so more sodium than the salt limit leaves: 8.98 is as far as it allows
    zinc = {"parameter": "Zn", "daily_mg_per_l": 2.0}
    close = no_plan(CAUSTIC_ONLY, own(zinc, {"parameter": "TDS", "daily_mg_per_l": 420.0}))
    assert [c["limit"] for c in close.clashes] == ["Zn, daily (2 mg/L)", "TDS, daily (420 mg/L)"]
    assert all(c["reachable_alone"] for c in close.clashes)
    assert all(float(str(c["lowest_reachable"])) <= float(str(c["target"])) for c in close.clashes)
    assert "each within reach, but not together: Zn, daily (2 mg/L); TDS" in str(close)
    assert plan(small_site(CAUSTIC_ONLY, own(zinc))).compliant

    far = no_plan(CAUSTIC_ONLY, own(zinc, {"parameter": "TDS", "daily_mg_per_l": 290.0}))
    tds = next(c for c in far.clashes if "TDS" in str(c["limit"]))
    assert not tds["reachable_alone"]
    assert float(str(tds["lowest_reachable"])) > 232.0
    assert "out of reach whatever is dosed: TDS, daily (290 mg/L)" in str(far)


NO_ROOM: Tree = {
    "treatment": {
        "ph_set_point": {"low": 10.4, "high": 10.5},
        "trim_reagents": None,
        "equipment_cost_per_year": {"hydrochloric_acid": None},
    }
}  # every set point is above the window of the discharge, and nothing trims


def test_a_site_whose_windows_leave_no_set_point_has_no_plan() -> None:
    assert "no set point and doses are left" in str(no_plan(NO_ROOM))


def test_windows_that_leave_no_set_point_are_named_instead_of_the_metals() -> None:
    error = no_plan(NO_ROOM)
    assert "no set point and doses are left" in str(error)
    assert all(math.isfinite(float(str(c["lowest_reachable"]))) for c in error.clashes)


def test_a_ceiling_on_the_only_alkali_is_named() -> None:
    error = no_plan(CAUSTIC_ONLY, {"treatment": {"dose_ceilings_mg_per_l": {"caustic_soda": 50}}})
    assert "the best compromise also breaks: least real dose and dose ceiling" in str(error)
