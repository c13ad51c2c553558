"""Limits as permits write them, from the site file to the plan: loads, sums, sulfide, hardness."""

from __future__ import annotations

import pytest

from optimiser import NoPlan, assess, plan
from optimiser.explain import explain_plan
from optimiser.render import plan_text
from optimiser.site import Site
from tests.optimiser.small_sites import FLOW_M3_PER_D, SULFIDE, Tree, own, row_of, small_site

CAUSTIC = {"caustic_soda": 240.0}
EXACT: Tree = {"treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0}}
AVERAGE: Tree = {"feed": {"stands_for": "average"}}
RATIO = {"Cu": (1.9 / 0.58, 1.0 / 0.58), "Zn": (1.46 / 0.33, 0.61 / 0.33)}
"""One-day maximum and ten-day mean over mean, US EPA 440/1-83 chapter VII."""


def test_monthly_and_daily_loads_of_a_sum_take_the_ratios_of_their_period() -> None:
    both = {"parameter": "sum", "of": ["Cu", "Zn"]}
    limits = own(
        {"parameter": "Cu", "daily_mg_per_l": 9}, {"parameter": "Zn", "daily_mg_per_l": 9},
        {**both, "daily_load_kg_per_d": 2, "monthly_load_kg_per_d": 1},
    )  # fmt: skip
    made = assess(small_site(EXACT, AVERAGE, limits), CAUSTIC, trim="none")
    mean = sum(row_of(made, m)["predicted"] / RATIO[m][0] for m in ("Cu", "Zn"))
    kg_per_d = mean * FLOW_M3_PER_D / 1000.0
    for period, k in (("daily load", 0), ("monthly load", 1)):
        row = row_of(made, "Cu + Zn", period)
        worst = max(ratio[k] for ratio in RATIO.values())
        assert row["predicted"] == pytest.approx(kg_per_d * worst, rel=1e-3)
        assert (row["unit"], row["meets"]) == ("kg/d", True)


def test_a_monthly_load_binds_like_the_concentration_it_stands_for() -> None:
    copper = {"parameter": "Cu", "daily_mg_per_l": 1.0}
    by_load = plan(small_site(own(copper, {"parameter": "Zn", "monthly_load_kg_per_d": 0.1})))
    by_concentration = plan(small_site(own(copper, {"parameter": "Zn", "monthly_mg_per_l": 1.0})))
    assert by_load.cost["total"] == pytest.approx(by_concentration.cost["total"], rel=1e-9)
    assert "monthly load" in plan_text(by_load.to_dict())


def test_the_price_of_a_monthly_load_is_told() -> None:
    limits = own(
        {"parameter": "Cu", "daily_mg_per_l": 1.0, "daily_load_kg_per_d": 4.0},
        {"parameter": "Zn", "monthly_load_kg_per_d": 0.1, "daily_mg_per_l": 40.0},
    )
    rows = explain_plan(small_site(limits)).to_dict()["marginal_costs"]
    (row,) = [r for r in rows if r["averaging"] == "monthly load"]
    assert row["parameter"] == "Zn"
    assert row["resolved_per_year"] > 0.0


CADMIUM = (
    {"parameter": "Cd", "daily_mg_per_l": 0.05}, {"parameter": "Cu", "daily_mg_per_l": 0.5},
)  # fmt: skip


def sulfide_capped(limit: float) -> Site:
    return small_site(SULFIDE, own(*CADMIUM, {"parameter": "sulfide", "daily_mg_per_l": limit}))


def test_residual_sulfide_is_bounded_down_to_what_the_dose_needs_and_no_further() -> None:
    """Of a dose that just binds the metals 5 % too much is left: less cannot be promised."""

    def capped(limit: float) -> Site:
        return small_site(SULFIDE, own(*CADMIUM, {"parameter": "sulfide", "daily_mg_per_l": limit}))

    free, loose = plan(small_site(SULFIDE, own(*CADMIUM))), plan(capped(90.0))
    assert free.doses["sodium_hydrosulfide"] > 0.0
    assert loose.cost["total"] == pytest.approx(free.cost["total"], rel=1e-9)
    least = row_of(loose, "sulfide")["predicted"]
    assert least > 0.1
    held = plan(capped(1.1 * least / 0.8))
    assert row_of(held, "sulfide")["predicted"] <= 1.1 * least
    assert held.cost["total"] == pytest.approx(free.cost["total"], rel=1e-4)
    with pytest.raises(NoPlan) as refused:
        plan(capped(0.98 * least / 0.8))
    assert "not together: Cd, daily (0.05 mg/L); sulfide, daily" in str(refused.value)


def test_a_monthly_limit_on_hardness_keeps_lime_out() -> None:
    metals = (
        {"parameter": "Cu", "daily_mg_per_l": 1.0},
        {"parameter": "Zn", "daily_mg_per_l": 2.0},
    )
    assert "hydrated_lime" in plan(small_site(own(*metals))).doses
    for limit in ({"monthly_mg_per_l": 60.0}, {"monthly_load_kg_per_d": 6.0}):
        soft = plan(small_site(own(*metals, {"parameter": "hardness", **limit})))
        (row,) = [r for r in soft.data["limits"] if r["parameter"] == "hardness"]
        # as CaCO3: every mole of lime is 100.09 g of it
        lime = soft.doses.get("hydrated_lime", 0.0) * 100.09 / 74.09
        scale = FLOW_M3_PER_D / 1000.0 if row["unit"] == "kg/d" else 1.0
        assert row["predicted"] <= 0.8 * row["limit"] * (1.0 + 1e-9)
        assert row["predicted"] == pytest.approx(lime * scale, rel=0.12, abs=1e-6)
