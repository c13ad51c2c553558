"""Every cause of yearly cost is worked out again by hand from doses, solids and prices."""

from __future__ import annotations

import pytest

from optimiser import assess, plan
from optimiser.outcome import Outcome
from tests.optimiser.small_sites import (
    DAYS,
    FLOW_M3_PER_D,
    KG_PER_MG_PER_L,
    OFFERS,
    SULFIDE,
    Tree,
    feed_totals,
    own,
    row_of,
    small_site,
)

CU, ZN, CL = 63.546, 65.38, 35.45
CU_OH_2, ZN_OH_2 = 97.561, 99.395
EXACT: Tree = {"treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0}}
CAUSTIC = {"caustic_soda": 240.0}  # pH 10.26: plain hydroxides and nothing else


def dry_t_per_year(outcome: Outcome, bound_water_factor: float = 1.2) -> float:
    """Dry copper and zinc hydroxide of a year from the two residuals."""
    copper = 58.0 - row_of(outcome, "Cu")["residual"]
    zinc = 40.0 - row_of(outcome, "Zn")["residual"]
    floc = bound_water_factor * (copper / CU * CU_OH_2 + zinc / ZN * ZN_OH_2)
    return floc * FLOW_M3_PER_D * DAYS / 1e6


def copper_mg_per_kg(outcome: Outcome) -> float:
    copper = 58.0 - row_of(outcome, "Cu")["residual"]
    return copper * FLOW_M3_PER_D * DAYS / dry_t_per_year(outcome)


def rules(*tariffs: dict[str, object]) -> Tree:
    return {"disposal": {"rules": list(tariffs)}}


def test_the_total_is_the_sum_of_its_causes() -> None:
    for doses in (CAUSTIC, {"caustic_soda": 300.0}, {"hydrated_lime": 300.0, "caustic_soda": 40.0}):
        cost = dict(assess(small_site(), doses).cost)
        total = cost.pop("total")
        assert total == pytest.approx(sum(cost.values()), rel=1e-12)


def test_wet_sludge_follows_from_the_formulas_of_its_solids() -> None:
    result = assess(small_site(EXACT), CAUSTIC, trim="none")
    dry = dry_t_per_year(result)
    assert result.sludge["dry_t_per_year"] == pytest.approx(dry, rel=1e-3)
    assert result.sludge["wet_t_per_year"] == pytest.approx(dry / 0.3, rel=1e-3)
    assert result.cost["disposal"] == pytest.approx(130.0 * dry / 0.3, rel=1e-3)


def test_cake_and_bound_water_of_the_site_are_used() -> None:
    cake: Tree = {"disposal": {"cake_solids_fraction": 0.4, "bound_water_factor": 1.0}}
    result = assess(small_site(EXACT, cake), CAUSTIC, trim="none")
    dry = dry_t_per_year(result, 1.0)
    assert result.cost["disposal"] == pytest.approx(130.0 * dry / 0.4, rel=1e-3)


def test_the_first_rule_whose_condition_holds_sets_class_tariff_pickups_and_fee() -> None:
    content = copper_mg_per_kg(assess(small_site(EXACT), CAUSTIC, trim="none"))
    hazardous = {
        "sludge_class": "hazardous", "metals": ["Cd", "Cu"], "tariff_per_wet_t": 300,
        "pickup_fee": 250, "tonnes_per_pickup": 8, "yearly_fee": 700,
    }  # fmt: skip
    cheap = {
        "sludge_class": "recycled", "metals": ["Cu"], "above_mg_per_kg_dry": 0.5 * content,
        "tariff_per_wet_t": 20,
    }  # fmt: skip
    rest = {"sludge_class": "ordinary", "tariff_per_wet_t": 130}
    above = {**hazardous, "above_mg_per_kg_dry": 1.001 * content}
    below = {**hazardous, "above_mg_per_kg_dry": 0.999 * content}

    def judged(*tariffs: dict[str, object]) -> Outcome:
        return assess(small_site(EXACT, rules(*tariffs)), CAUSTIC, trim="none")

    assert judged(above, rest).sludge["sludge_class"] == "ordinary"
    assert judged(above, cheap, rest).sludge["sludge_class"] == "recycled"
    assert judged(cheap, below, rest).sludge["sludge_class"] == "recycled"
    result = judged(below, cheap, rest)
    assert result.sludge["sludge_class"] == "hazardous"
    wet = dry_t_per_year(result) / 0.3
    assert result.cost["disposal"] == pytest.approx(300.0 * wet, rel=1e-3)
    assert result.cost["disposal fees"] == pytest.approx(700.0 + 250.0 * wet / 8.0, rel=1e-3)


def test_the_sludge_class_moves_the_plan() -> None:
    # cake with cadmium is dear unless calcium and its slurry thin it below the threshold
    lime = small_site(EXACT)
    content = copper_mg_per_kg(assess(lime, CAUSTIC, trim="none"))
    thin: Tree = rules(
        {"sludge_class": "hazardous", "metals": ["Cu"], "above_mg_per_kg_dry": 0.97 * content,
         "tariff_per_wet_t": 900},
        {"sludge_class": "ordinary", "tariff_per_wet_t": 60},
    )  # fmt: skip
    dear: Tree = {"treatment": {"equipment_cost_per_year": {"hydrated_lime": 5000}}}
    assert list(plan(small_site(dear)).doses) == ["caustic_soda"]
    moved = plan(small_site(dear, thin))
    assert "hydrated_lime" in moved.doses
    assert moved.sludge["sludge_class"] == "ordinary"


def test_goods_freight_equipment_and_separator() -> None:
    result = assess(small_site(), {"caustic_soda": 300.0, "hydrochloric_acid@trim": 40.0})
    caustic_t = 300.0 * KG_PER_MG_PER_L / 1000.0 / 0.5
    acid_t = 40.0 * KG_PER_MG_PER_L / 1000.0 / 0.33
    assert result.cost["caustic_soda"] == pytest.approx(420.0 * caustic_t, rel=1e-6)
    assert result.cost["hydrochloric_acid"] == pytest.approx(180.0 * acid_t, rel=1e-6)
    assert result.cost["freight"] == pytest.approx(40.0 * caustic_t + 50.0 * acid_t, rel=1e-6)
    assert result.cost["equipment"] == 500.0 + 300.0
    assert result.cost["separator"] == 400.0


def test_a_price_per_litre_is_turned_by_the_density() -> None:
    by_litre = (*OFFERS[1:], ("NA-L", "caustic_soda", 50, 1.525, 0.61, "L", 40, 0.5))
    result = assess(small_site(offers=by_litre), CAUSTIC)
    tonnes = 240.0 * KG_PER_MG_PER_L / 1000.0 / 0.5
    assert result.cost["caustic_soda"] == pytest.approx(0.61 * 1000.0 * tonnes / 1.525, rel=1e-6)


@pytest.mark.parametrize(("least", "chosen"), [(14.0, "BULK"), (19.0, "DRUM")])
def test_a_least_order_is_bought_whole_where_that_is_still_cheapest(
    least: float, chosen: str
) -> None:
    book = (
        *OFFERS[1:],
        ("BULK", "caustic_soda", 50, 1.525, 400, "t", 50, least),
        ("DRUM", "caustic_soda", 50, 1.525, 600, "t", 50, 0.1),
    )
    result = assess(small_site(offers=book), CAUSTIC)
    used = 240.0 * KG_PER_MG_PER_L / 1000.0 / 0.5  # 12 t: 14 x 450 < 12 x 650 < 19 x 450
    bought = least if chosen == "BULK" else used
    price = 400.0 if chosen == "BULK" else 600.0
    row = next(r for r in result.data["purchases"] if r["reagent"] == "caustic_soda")
    assert row["offer"] == chosen
    assert row["bought_t_per_year"] == pytest.approx(bought, rel=1e-6)
    assert row["used_t_per_year"] == pytest.approx(used, rel=1e-6)
    assert row["surplus_t_per_year"] == pytest.approx(bought - used, rel=1e-6, abs=1e-9)
    assert result.cost["caustic_soda"] == pytest.approx(price * bought, rel=1e-6)
    assert result.doses["caustic_soda"] == pytest.approx(240.0, rel=1e-6)  # surplus is not dosed


def test_polymer_is_a_fixed_use_per_kg_of_solids_and_ends_in_the_sludge() -> None:
    polymer: Tree = {
        "treatment": {"polymer_g_per_kg_solids": 4.0, "polymer_price_per_kg": 5.0}
    }  # fmt: skip
    result = assess(small_site(EXACT, polymer), CAUSTIC, trim="none")
    dry = dry_t_per_year(result)
    assert result.cost["polymer"] == pytest.approx(5.0 * 4.0 * dry, rel=1e-3)
    assert result.sludge["dry_t_per_year"] == pytest.approx(1.004 * dry, rel=1e-3)


def test_burden_charges_count_each_kilogram_discharged() -> None:
    site = small_site(EXACT, {"burden_charges_per_kg": {"Cl": 0.8, "Na": 0.3}})
    result = assess(site, CAUSTIC, trim="none")
    chloride = float(feed_totals(site)[site.system.index["Cl-"]]) * 1000.0 * CL
    sodium = 240.0 * 22.990 / 39.997
    expected = KG_PER_MG_PER_L * (0.8 * chloride + 0.3 * sodium)
    assert result.cost["burden charges"] == pytest.approx(expected, rel=1e-4)


def test_a_burden_charge_moves_the_plan_to_the_other_alkali() -> None:
    plain = plan(small_site())
    assert list(plain.doses) == ["hydrated_lime"]
    charged = plan(small_site({"burden_charges_per_kg": {"hardness": 3.0}}))
    assert list(charged.doses) == ["caustic_soda"]


def test_equipment_of_the_trim_is_paid_only_where_the_trim_runs() -> None:
    with_trim = assess(small_site(), {"caustic_soda": 300.0})
    without = assess(small_site(EXACT), {"caustic_soda": 215.0})
    assert any(key.endswith("@trim") for key in with_trim.doses)
    assert not any(key.endswith("@trim") for key in without.doses)
    assert with_trim.cost["equipment"] - without.cost["equipment"] == 300.0


def test_trim_acid_is_bought_together_with_the_same_acid_of_the_tank() -> None:
    site = small_site(SULFIDE)
    acid = {"caustic_soda": 200.0, "hydrochloric_acid": 30.0, "hydrochloric_acid@trim": 20.0}
    result = assess(site, acid)
    bought = [r for r in result.data["purchases"] if r["reagent"] == "hydrochloric_acid"]
    tonnes = (result.doses["hydrochloric_acid"] + 20.0) * KG_PER_MG_PER_L / 1000.0 / 0.33
    assert sum(r["used_t_per_year"] for r in bought) == pytest.approx(tonnes, rel=1e-6)
    assert result.cost["hydrochloric_acid"] == pytest.approx(180.0 * tonnes, rel=1e-6)


def test_limits_alone_do_not_change_the_cost_of_given_doses() -> None:
    doses = {"caustic_soda": 230.0}
    tight = own({"parameter": "Cu", "daily_mg_per_l": 0.2})
    assert assess(small_site(), doses).cost["total"] == pytest.approx(
        assess(small_site(tight), doses).cost["total"], rel=1e-9
    )
