"""What a limit sees: carry-over, floors, dose factors, variability, margin, sums and burden."""

from __future__ import annotations

import pytest

from optimiser import NoPlan, assess, plan
from optimiser.site import Site
from tests.optimiser.small_sites import (
    FLOW_M3_PER_D,
    KG_PER_MG_PER_L,
    SULFATE,
    SULFIDE,
    Tree,
    dissolved_mg_per_l,
    dosed,
    feed_totals,
    own,
    row_of,
    settled,
    small_site,
)

CU = 63.546
ZN = 65.38
CD = 112.414
CA = 40.078
S = 32.06
CL = 35.45
NA = 22.990
CU_OH_2 = 97.561
ZN_OH_2 = 99.395
GYPSUM = "CaSO4.2H2O(s)"
EXACT: Tree = {"treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0}}
CAUSTIC_TO_PH_10 = 240.0  # brings the copper and zinc water to pH 10.26: plain hydroxides

# -- carry-over -----------------------------------------------------------------------------------

COPPER_ONLY: Tree = {
    "feed": {"analysis": {"Zn": None, "Cu": "58 mg/L"}},
    "limits": {"own": [{"parameter": "Cu", "daily_mg_per_l": 50, "source": "invented"}]},
}


def separator(tss: float, capture: float) -> Tree:
    return {"treatment": {"separator": {"tss_mg_per_l": tss, "capture_fraction": capture}}}


def test_20_mg_per_l_of_copper_hydroxide_carry_13_mg_per_l_of_copper() -> None:
    site = small_site(EXACT, COPPER_ONLY, separator(20, 0.0))
    result = assess(site, {"caustic_soda": 200.0}, trim="none")
    assert list(result.sludge["dry_kg_per_d_by_solid"]) == [
        "Cu(OH)2(s,fresh) (copper hydroxide, fresh)"
    ]
    row = row_of(result, "Cu")
    assert 0.05 + row["carry_over"] == pytest.approx(13.08, rel=1e-3)  # 0.05 + 20 x 0.6513
    assert row["predicted"] == pytest.approx(row["residual"] + 20.0 * 0.6513, rel=1e-3)


@pytest.mark.parametrize(("tss", "capture"), [(5.0, 0.9), (50.0, 0.99), (9.0, 0.9)])
def test_carry_over_is_the_lesser_of_tss_and_the_share_not_captured(
    tss: float, capture: float
) -> None:
    site = small_site(EXACT, COPPER_ONLY, separator(tss, capture))
    row = row_of(assess(site, {"caustic_soda": 200.0}, trim="none"), "Cu")
    formed = (58.0 - row["residual"]) / CU * CU_OH_2  # mg/L of Cu(OH)2, about 89
    carried = min(tss, (1.0 - capture) * formed) * CU / CU_OH_2
    assert row["carry_over"] == pytest.approx(carried, rel=1e-4)


def test_metal_content_of_a_mixed_floc_follows_from_the_mass_balance() -> None:
    site = small_site(EXACT, separator(4, 0.5))
    result = assess(site, {"caustic_soda": CAUSTIC_TO_PH_10}, trim="none")
    assert all(
        "hydroxide" in name and "chlor" not in name
        for name in result.sludge["dry_kg_per_d_by_solid"]
    )
    cu, zn = row_of(result, "Cu"), row_of(result, "Zn")
    copper, zinc = 58.0 - cu["residual"], 40.0 - zn["residual"]
    floc = copper / CU * CU_OH_2 + zinc / ZN * ZN_OH_2
    assert cu["carry_over"] == pytest.approx(4.0 / floc * copper, rel=1e-3)
    assert zn["carry_over"] == pytest.approx(4.0 / floc * zinc, rel=1e-3)


def test_particles_of_the_feed_are_carried_like_the_floc() -> None:
    feed: Tree = {
        "feed": {"tss_mg_per_l": 30,
                 "analysis": {"Cu": {"dissolved": "50 mg/L", "total": "58 mg/L"}}},
    }  # fmt: skip
    site = small_site(EXACT, COPPER_ONLY, separator(10, 0.0), feed)
    row = row_of(assess(site, {"caustic_soda": 190.0}, trim="none"), "Cu")
    formed = (50.0 - row["residual"]) / CU * CU_OH_2
    expected = 10.0 / (formed + 30.0) * (58.0 - row["residual"])
    assert row["carry_over"] == pytest.approx(expected, rel=1e-3)


def test_gypsum_made_by_lime_dilutes_the_carried_floc_only_where_the_site_allows_it() -> None:
    doses = {"hydrated_lime": 1150.0}
    no_delay: Tree = {"treatment": {"scale_supersaturation_si": 0}}
    allowed: Tree = {"treatment": {"inert_solids_dilute": True}}
    base = (SULFATE, EXACT, separator(10, 0.0), no_delay)
    strict = assess(small_site(*base), doses, trim="none")
    loose = assess(small_site(*base, allowed), doses, trim="none")
    site = small_site(SULFATE, EXACT)
    water = settled(site, {"hydrated_lime": 1000.0})
    solids = {name: float(water.solids[name].iloc[0]) for name in water.solids.columns}
    weights = dict(
        zip(site.system.solid_names, site.system.solid_molar_masses_g_per_mol, strict=True)
    )
    present = {n: 1000.0 * m * weights[n] for n, m in solids.items() if m > 1e-9}
    assert present[GYPSUM] > 100.0
    copper = 30.0 - dissolved_mg_per_l(water, "Cu+2", CU)
    all_mass = sum(present.values())
    metal_mass = all_mass - present[GYPSUM]
    assert row_of(strict, "Cu")["carry_over"] == pytest.approx(10 / metal_mass * copper, rel=1e-3)
    assert row_of(loose, "Cu")["carry_over"] == pytest.approx(10 / all_mass * copper, rel=1e-3)


def test_gypsum_that_may_not_form_dilutes_nothing_even_where_dilution_is_allowed() -> None:
    allowed: Tree = {"treatment": {"inert_solids_dilute": True, "scale_supersaturation_si": 1.0}}
    site = small_site(SULFATE, EXACT, separator(10, 0.0), allowed)
    row = row_of(assess(site, {"hydrated_lime": 1150.0}, trim="none"), "Cu")
    assert "scale held back" in row["worst_state"]


# -- floors ---------------------------------------------------------------------------------------


def test_no_prediction_goes_below_the_practical_floor_unless_a_jar_test_lowers_it() -> None:
    clean = separator(0.01, 0.9999)
    doses = {"caustic_soda": CAUSTIC_TO_PH_10}
    row = row_of(assess(small_site(EXACT, clean), doses), "Cu")
    assert row["residual"] + row["carry_over"] < 0.07
    assert row["predicted"] == pytest.approx(0.07)
    tested: Tree = {"limits": {"floors": {"Cu": {"hydroxide": 0.001}}}}
    lowered = row_of(assess(small_site(EXACT, clean, tested), doses), "Cu")
    assert lowered["predicted"] == pytest.approx(row["residual"] + row["carry_over"], rel=1e-9)


def test_the_floor_of_hydroxides_holds_for_basic_chlorides_and_sulfates_too() -> None:
    # at pH 8 to 9 the copper of these waters is atacamite and brochantite
    tested: Tree = {"limits": {"floors": {"Cu": {"hydroxide": 0.001}}}}
    for site, dose in (
        (small_site(EXACT, tested), {"caustic_soda": 225.0}),
        (small_site(SULFATE, EXACT, tested), {"caustic_soda": 575.0}),
    ):
        result = assess(site, dose, trim="none")
        assert 8.0 < result.set_points[0]["ph_set_point"] < 10.0
        kinds = " ".join(result.sludge["dry_kg_per_d_by_solid"])
        assert "atacamite" in kinds or "brochantite" in kinds
        assert row_of(result, "Cu")["floor"] == pytest.approx(0.001)


def test_a_floor_is_a_constraint() -> None:
    below = own({"parameter": "Cu", "daily_mg_per_l": 0.07})  # target 0.056
    with pytest.raises(NoPlan, match="Cu"):
        plan(small_site(separator(0.01, 0.9999), below))
    assert plan(
        small_site(
            separator(0.01, 0.9999), below, {"limits": {"floors": {"Cu": {"hydroxide": 0.02}}}}
        )
    ).compliant


def test_the_floor_belongs_to_the_solid_that_holds_the_metal() -> None:
    site = small_site(SULFIDE, EXACT)
    hydroxide = row_of(assess(site, {"caustic_soda": 160.0}), "Cd")
    both = row_of(assess(site, {"caustic_soda": 160.0, "sodium_hydrosulfide": 40.0}), "Cd")
    assert hydroxide["floor"] == pytest.approx(0.05)
    assert both["floor"] == pytest.approx(0.008)
    assert hydroxide["predicted"] >= 0.05
    assert both["predicted"] == pytest.approx(0.008)


def test_a_floor_does_not_promise_more_metal_than_the_feed_holds() -> None:
    site = small_site(EXACT, {"feed": {"analysis": {"Cu": "0.04 mg/L"}}})
    row = row_of(assess(site, {"caustic_soda": 120.0}), "Cu")
    assert row["predicted"] <= 0.04 * (1.0 + 1e-9)


# -- dose factors ---------------------------------------------------------------------------------


@pytest.mark.parametrize("factor", [1.15, 1.4])
def test_slurry_fed_beyond_what_reacts_goes_to_the_sludge_and_is_paid(factor: float) -> None:
    site = small_site(EXACT, {"treatment": {"dose_factors": {"hydrated_lime": factor}}})
    fed = 200.0 * factor
    result = assess(site, {"hydrated_lime": fed}, trim="none")
    water = settled(site, {"hydrated_lime": 200.0})
    assert result.set_points[0]["ph_set_point"] == pytest.approx(float(water.ph[0]), abs=1e-6)
    unreacted = (fed - 200.0) * FLOW_M3_PER_D / 1000.0
    assert result.sludge["unreacted_kg_per_d"] == pytest.approx(unreacted, rel=1e-6)
    by_solid = sum(result.sludge["dry_kg_per_d_by_solid"].values())
    assert result.sludge["dry_t_per_year"] == pytest.approx(
        (by_solid + unreacted) * 250.0 / 1000.0, rel=1e-6
    )
    product_t = fed * KG_PER_MG_PER_L / 1000.0 / 0.95
    assert result.cost["hydrated_lime"] == pytest.approx(product_t * 210.0, rel=1e-6)
    assert result.cost["freight"] == pytest.approx(product_t * 35.0, rel=1e-6)
    calcium = 1000.0 * CA * 200.0 / 74.092 / 1000.0
    assert result.data["burden"]["Ca"]["effluent_mg_per_l"] == pytest.approx(calcium, rel=1e-4)


def test_the_catalogs_factor_of_lime_holds_by_default() -> None:
    result = assess(small_site(EXACT), {"hydrated_lime": 230.0}, trim="none")
    assert result.sludge["unreacted_kg_per_d"] == pytest.approx(3.0, rel=1e-6)


def test_fed_is_the_factor_times_reacting_for_soluble_reagents_too() -> None:
    plain = small_site(SULFIDE, EXACT)
    wasteful = small_site(
        SULFIDE, EXACT, {"treatment": {"dose_factors": {"sodium_hydrosulfide": 1.5}}}
    )
    exact = assess(plain, {"caustic_soda": 160.0, "sodium_hydrosulfide": 12.0})
    fed = assess(wasteful, {"caustic_soda": 160.0, "sodium_hydrosulfide": 18.0})
    assert row_of(fed, "Cd")["residual"] == pytest.approx(row_of(exact, "Cd")["residual"], rel=0.2)


# -- average, peak, variability, margin -----------------------------------------------------------

BOTH_COLUMNS = own(
    {"parameter": "Cu", "daily_mg_per_l": 5.0, "monthly_mg_per_l": 3.0},
    {"parameter": "Zn", "daily_mg_per_l": 5.0, "monthly_mg_per_l": 3.0},
    {"parameter": "sum", "of": ["Cu", "Zn"], "daily_mg_per_l": 9.0},
    {"parameter": "Zn", "daily_load_kg_per_d": 0.8},
)
# one-day maximum and ten-day mean over mean, US EPA 440/1-83 chapter VII
RATIOS = {"Cu": (1.9 / 0.58, 1.0 / 0.58), "Zn": (1.46 / 0.33, 0.61 / 0.33)}


def test_an_average_feed_is_multiplied_by_the_published_ratios_each_against_its_column() -> None:
    doses = {"caustic_soda": CAUSTIC_TO_PH_10}
    peak = assess(small_site(BOTH_COLUMNS), doses)
    mean = assess(small_site(BOTH_COLUMNS, {"feed": {"stands_for": "average"}}), doses)
    for metal, (daily, monthly) in RATIOS.items():
        base = row_of(peak, metal)["predicted"]
        assert row_of(peak, metal, "monthly")["predicted"] == pytest.approx(base)
        assert row_of(mean, metal)["predicted"] == pytest.approx(base * daily, rel=1e-3)
        assert row_of(mean, metal, "monthly")["predicted"] == pytest.approx(
            base * monthly, rel=1e-3
        )


def test_a_sites_own_variability_replaces_the_published_one() -> None:
    changed: Tree = {
        "feed": {"stands_for": "average"},
        "limits": {"variability": {"Cu": {"daily": 2.5, "monthly": 1.5}}},
    }
    result = assess(small_site(BOTH_COLUMNS, changed), {"caustic_soda": CAUSTIC_TO_PH_10})
    ratio = row_of(result, "Cu")["predicted"] / row_of(result, "Cu", "monthly")["predicted"]
    assert ratio == pytest.approx(2.5 / 1.5)


def test_sums_and_loads_are_sums_and_loads() -> None:
    result = assess(small_site(EXACT, BOTH_COLUMNS), {"caustic_soda": CAUSTIC_TO_PH_10})
    cu, zn = row_of(result, "Cu"), row_of(result, "Zn")
    both, load = row_of(result, "Cu + Zn"), row_of(result, "Zn", "daily load")
    assert both["predicted"] == pytest.approx(cu["predicted"] + zn["predicted"], rel=1e-9)
    assert load["predicted"] == pytest.approx(zn["predicted"] * FLOW_M3_PER_D / 1000.0, rel=1e-9)
    assert load["unit"] == "kg/d"


@pytest.mark.parametrize("kind", ["concentration", "sum", "load"])
@pytest.mark.parametrize("margin", [None, 0.5, 1.0])
def test_predictions_stay_at_or_below_the_margin_of_each_limit(
    kind: str, margin: float | None
) -> None:
    doses = {"caustic_soda": CAUSTIC_TO_PH_10}
    seen = assess(small_site(BOTH_COLUMNS), doses)
    share = 0.8 if margin is None else margin
    change: Tree = {} if margin is None else {"limits": {"design_margin": margin}}
    for factor, meets in ((1.001, True), (0.999, False)):
        if kind == "concentration":
            edge = factor * row_of(seen, "Zn")["predicted"] / share
            limit = {"parameter": "Zn", "daily_mg_per_l": edge}
            where = ("Zn", "daily")
        elif kind == "sum":
            edge = factor * row_of(seen, "Cu + Zn")["predicted"] / share
            limit = {"parameter": "sum", "of": ["Cu", "Zn"], "daily_mg_per_l": edge}
            where = ("Cu + Zn", "daily")
        else:
            edge = factor * row_of(seen, "Zn", "daily load")["predicted"] / share
            limit = {"parameter": "Zn", "daily_load_kg_per_d": edge}
            where = ("Zn", "daily load")
        result = assess(small_site(own(limit), change), doses)
        assert row_of(result, *where)["meets"] is meets
        assert result.compliant is meets


# -- burden ---------------------------------------------------------------------------------------


def test_burden_of_caustic_is_its_sodium_beside_the_chloride_of_the_feed() -> None:
    site = small_site(EXACT, own({"parameter": "TDS", "daily_mg_per_l": 1e5}))
    result = assess(site, {"caustic_soda": CAUSTIC_TO_PH_10}, trim="none")
    sodium = CAUSTIC_TO_PH_10 * NA / 39.997
    chloride = float(feed_totals(site)[site.system.index["Cl-"]]) * 1000.0 * CL
    burden = result.data["burden"]
    assert burden["Na"]["effluent_mg_per_l"] == pytest.approx(sodium, rel=1e-4)
    assert burden["Cl"]["effluent_mg_per_l"] == pytest.approx(chloride, rel=1e-3)
    row = row_of(result, "TDS")
    # metals and hydroxide make the small rest
    assert sodium + chloride < row["predicted"] < (sodium + chloride) * 1.02


def test_a_tds_limit_is_a_constraint_on_the_plan() -> None:
    caustic: Tree = {
        "treatment": {
            "reagents": ["caustic_soda"], "equipment_cost_per_year": {"hydrated_lime": None},
        }
    }  # fmt: skip
    zinc = {"parameter": "Zn", "daily_mg_per_l": 2.0}
    free = plan(small_site(caustic, own(zinc, {"parameter": "TDS", "daily_mg_per_l": 1e5})))
    reached = row_of(free, "TDS")["predicted"]
    tight = {"parameter": "TDS", "daily_mg_per_l": 0.95 * reached / 0.8}
    with pytest.raises(NoPlan, match="TDS"):
        plan(small_site(caustic, own(zinc, tight)))


def test_a_hardness_limit_moves_the_plan_from_lime_to_caustic() -> None:
    metals = ({"parameter": "Cu", "daily_mg_per_l": 1.0}, {"parameter": "Zn", "daily_mg_per_l": 2})
    cheap = plan(small_site(own(*metals)))
    assert list(cheap.doses) == ["hydrated_lime"]
    soft = plan(small_site(own(*metals, {"parameter": "hardness", "daily_mg_per_l": 50.0})))
    assert "caustic_soda" in soft.doses
    row = row_of(soft, "hardness")
    assert row["predicted"] <= 40.0 * (1.0 + 1e-6)
    lime = soft.doses.get("hydrated_lime", 0.0) / 1.15
    assert row["predicted"] == pytest.approx(1.05 * lime / 74.092 * 100.087, rel=1e-3, abs=1e-6)
    assert soft.cost["total"] > cheap.cost["total"]


def test_the_sulfide_limit_counts_what_stays_dissolved() -> None:
    site = small_site(SULFIDE, EXACT, own({"parameter": "sulfide", "daily_mg_per_l": 1.0}))
    doses = {"caustic_soda": 160.0, "sodium_hydrosulfide": 30.0}
    row = row_of(assess(site, doses, trim="none"), "sulfide")
    water = settled(site, doses)
    assert row["predicted"] == pytest.approx(dissolved_mg_per_l(water, "HS-", S), rel=1e-4)
    metals = 12.0 / CU + 9.0 / CD  # mmol/L bound in CuS and CdS
    assert row["predicted"] == pytest.approx((30.0 / 56.06 - metals) * S, rel=0.02)
    assert not row["meets"]


def test_dosed_totals_add_up_by_formula() -> None:
    site: Site = small_site(SULFATE)
    totals = dosed(site, {"hydrated_lime": 740.92}) - feed_totals(site)
    assert totals[site.system.index["Ca+2"]] == pytest.approx(0.01, rel=1e-4)
    assert totals[site.system.index["H+"]] == pytest.approx(-0.02, rel=1e-4)
