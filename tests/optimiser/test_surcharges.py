"""Surcharges per kilogram: priced by hand, linearised exactly, and traded against the doses."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from optimiser import assess, plan
from optimiser.bound_tree import prove
from optimiser.costing import SURCHARGES
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.explain import explain_plan
from optimiser.outcome import Outcome
from optimiser.points import Points
from optimiser.polish_step import Bounds, build_step
from optimiser.render import plan_text
from optimiser.site import Site
from tests.optimiser.small_sites import (
    KG_PER_MG_PER_L,
    SULFATE,
    Tree,
    dissolved_mg_per_l,
    own,
    row_of,
    settled,
    small_site,
)

CU, ZN, CU_OH_2, ZN_OH_2 = 63.546, 65.38, 97.561, 99.395
EXACT: Tree = {"treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0}}
TURBID: Tree = {"treatment": {"separator": {"tss_mg_per_l": 4.0, "capture_fraction": 0.9}}}
CAUSTIC = {"caustic_soda": 240.0}  # pH 10.26: plain hydroxides and nothing else
COPPER = {"parameter": "Cu", "daily_mg_per_l": 1.0}
CAPPED = own(COPPER, {"parameter": "Zn", "daily_mg_per_l": 2.0})


def charged(rate: float, free: float = 0.0, parameter: str = "Zn", **more: Any) -> Tree:
    """The copper limit, and a surcharge on another parameter."""
    rated = {"parameter": parameter, "surcharge_per_kg": rate, "free_mg_per_l": free, **more}
    return own(COPPER, rated)


def mean_by_hand(site: Site) -> dict[str, float]:
    """Total copper and zinc of the discharge at 240 mg/L caustic, from formulas. [mg/L]"""
    state = settled(site, CAUSTIC)
    dissolved = {
        "Cu": dissolved_mg_per_l(state, "Cu+2", CU), "Zn": dissolved_mg_per_l(state, "Zn+2", ZN),
    }  # fmt: skip
    held = {"Cu": 58.0 - dissolved["Cu"], "Zn": 40.0 - dissolved["Zn"]}
    floc = held["Cu"] / CU * CU_OH_2 + held["Zn"] / ZN * ZN_OH_2
    return {metal: dissolved[metal] + 4.0 / floc * held[metal] for metal in held}


def test_a_surcharge_is_volume_times_rate_times_what_is_above_the_free_mean() -> None:
    site = small_site(EXACT, TURBID, charged(30.0, 0.5))
    mean = mean_by_hand(site)["Zn"]
    made = assess(site, CAUSTIC, trim="none")
    expected = KG_PER_MG_PER_L * 30.0 * (mean - 0.5)
    assert made.cost[SURCHARGES] == pytest.approx(expected, rel=1e-4)
    (row,) = made.data["surcharges"]
    assert row["mean_mg_per_l"] == pytest.approx(mean, rel=1e-4)
    assert row["charged_kg_per_year"] == pytest.approx(KG_PER_MG_PER_L * (mean - 0.5), rel=1e-4)
    plain = assess(small_site(EXACT, TURBID, own(COPPER)), CAUSTIC, trim="none")
    assert made.cost["total"] - plain.cost["total"] == pytest.approx(expected, rel=1e-4)


def test_sums_burdens_and_steps_of_a_tariff_add_up() -> None:
    rates = own(
        COPPER,
        {"parameter": "sum", "of": ["Cu", "Zn"], "surcharge_per_kg": 10},
        {"parameter": "Zn", "surcharge_per_kg": 5, "free_mg_per_l": 0.1},
        {"parameter": "Zn", "surcharge_per_kg": 7, "free_mg_per_l": 1.0},
        {"parameter": "Cl", "surcharge_per_kg": 0.4, "free_mg_per_l": 100},
        {"parameter": "Na", "surcharge_per_kg": 0.4, "free_mg_per_l": 5000},
    )
    site = small_site(EXACT, TURBID, rates)
    made = assess(site, CAUSTIC, trim="none")
    mean = mean_by_hand(site)
    chloride = made.data["burden"]["Cl"]["effluent_mg_per_l"]
    per_litre = 10 * (mean["Cu"] + mean["Zn"]) + 5 * (mean["Zn"] - 0.1)
    per_litre += 7 * max(0.0, mean["Zn"] - 1.0) + 0.4 * (chloride - 100)
    assert made.cost[SURCHARGES] == pytest.approx(KG_PER_MG_PER_L * per_litre, rel=1e-4)
    assert made.data["surcharges"][-1]["cost_per_year"] == 0.0
    total = sum(row["cost_per_year"] for row in made.data["surcharges"])
    assert total == pytest.approx(made.cost[SURCHARGES], rel=1e-12)


def test_below_what_is_free_nothing_is_charged() -> None:
    made = assess(small_site(EXACT, charged(1000.0, 30.0)), CAUSTIC, trim="none")
    assert made.cost.get(SURCHARGES, 0.0) == 0.0
    assert [row["parameter"] for row in made.data["limits"]] == ["Cu"]


def test_a_practical_floor_is_charged_like_any_prediction() -> None:
    floored = {"limits": {"floors": {"Zn": {"hydroxide": 3.0}}}}
    made = assess(small_site(EXACT, charged(10.0), floored), CAUSTIC, trim="none")
    assert made.cost[SURCHARGES] == pytest.approx(10.0 * 3.0 * KG_PER_MG_PER_L, rel=1e-9)


def test_the_dearest_end_is_charged() -> None:
    # gypsum held back leaves more sulfate in the water than gypsum formed
    site = small_site(SULFATE, own(COPPER, {"parameter": "SO4", "surcharge_per_kg": 1.0}))
    evaluator = Evaluator(site)
    index = evaluator.plant.index
    doses = np.zeros((1, len(evaluator.plant.names)))
    points = Points(doses, np.array([index["hydrated_lime"]]), np.array([9.5]), np.array([-1]))
    seen = evaluator.evaluate(points)
    sulfate = [
        float(part.burden["SO4"][k])
        for part in seen.judged
        if (k := seen.nominal_row(part.block, 0)) is not None
    ]
    assert max(sulfate) > 1.02 * min(sulfate)
    cost = float(seen.priced.by_cause[SURCHARGES][0])
    assert cost == pytest.approx(KG_PER_MG_PER_L * max(sulfate), rel=1e-12)


def moved(points: Points, axis: int, step: float) -> Points:
    doses, ph = points.doses.copy(), points.ph.copy()
    if axis < 0:
        ph += step
    else:
        doses[0, axis] += step
    return replace(points, doses=doses, ph=ph)


def test_the_step_model_prices_surcharges_as_the_costing_does_and_with_its_slopes() -> None:
    rates = own(
        COPPER, {"parameter": "Zn", "surcharge_per_kg": 30, "free_mg_per_l": 0.2},
        {"parameter": "hardness", "surcharge_per_kg": 2},
    )  # fmt: skip
    evaluator = Evaluator(small_site(rates))
    index, n = evaluator.plant.index, len(evaluator.plant.names)
    lime = index["hydrated_lime"]
    doses = np.zeros((1, n))
    doses[0, lime] = 120.0
    start = Points(doses, np.array([index["caustic_soda"]]), np.array([9.0]), np.array([-1]))
    seen = evaluator.evaluate(start, slopes=True)
    per = evaluator.pricing.kg_per_mg_per_l

    def cost(one: Evaluation) -> float:
        return float(one.priced.by_cause[SURCHARGES][0])

    exact = sum(
        per * s.rate_per_kg * s.slope(evaluator.judge, seen.judged[0], 0)
        for s in evaluator.judge.surcharges
    )
    for axis, step in ((-1, 1e-3), (lime, 1e-2)):
        up, down = (cost(evaluator.evaluate(moved(start, axis, s))) for s in (step, -step))
        assert exact[1 + axis] == pytest.approx((up - down) / (2.0 * step), rel=1e-3)
    bounds = Bounds(
        lambda *_: 7.5, lambda *_: 10.5, np.full(n, 1.0), np.full(n, 1e4)
    )  # fmt: skip
    model = build_step(evaluator, seen, 0, 0.1, bounds)
    rows = model.rows
    for i, one in enumerate(evaluator.judge.surcharges):
        row = rows[f"surcharge {i} at end 0 at end 0"]
        at_rest = {"set point": 9.0, "dose hydrated_lime": 120.0}
        left = sum(row.terms.get(key, 0.0) * value for key, value in at_rest.items())
        value = float(one.value(seen.judged[0])[0]) - one.free_mg_per_l
        assert row.rhs - left == pytest.approx(per * one.rate_per_kg * value, rel=1e-9)


RATES = (1.0, 30.0, 300.0)


@pytest.fixture(scope="module")
def plans() -> dict[float, Outcome]:
    return {rate: plan(small_site(charged(rate))) for rate in RATES}


def discharged(outcome: Outcome) -> float:
    (row,) = outcome.data["surcharges"]
    return float(row["charged_kg_per_year"])


def test_the_dearer_the_kilogram_the_more_is_dosed_and_the_less_leaves(
    plans: dict[float, Outcome],
) -> None:
    kg = [discharged(plans[rate]) for rate in RATES]
    assert kg[0] > 1.5 * kg[1] > 1.5 * kg[2]
    dosed = [sum(v for k, v in plans[rate].doses.items() if "@" not in k) for rate in RATES]
    assert dosed[0] < dosed[1] <= dosed[2] * (1 + 1e-6)


def test_cost_rises_with_the_rate_and_ever_less_steeply(plans: dict[float, Outcome]) -> None:
    cost = [plans[rate].cost["total"] for rate in RATES]
    slopes = [
        (b - a) / (r - q) for a, b, q, r in zip(cost, cost[1:], RATES, RATES[1:], strict=False)
    ]
    assert slopes[0] > 0.0
    assert slopes[0] >= slopes[1] > 0.0
    # no plan beats paying a higher rate on what the plan of a lower rate lets through
    for (q, first), (r, second) in zip(list(plans.items()), list(plans.items())[1:], strict=False):
        assert second.cost["total"] <= first.cost["total"] + (r - q) * discharged(first) + 1e-6


def test_paying_beats_precipitating_further_where_the_kilogram_is_cheap() -> None:
    capped = plan(small_site(CAPPED))
    paid = plan(small_site(charged(1.0)))
    assert paid.cost["total"] < capped.cost["total"]
    assert paid.data["surcharges"][0]["mean_mg_per_l"] > 2.0
    both = plan(small_site(charged(1.0, daily_mg_per_l=2.0)))
    assert both.cost["total"] == pytest.approx(
        capped.cost["total"] + both.cost[SURCHARGES], rel=2e-3
    )
    assert row_of(both, "Zn")["meets"]


def test_a_surcharge_is_printed_explained_and_never_raises_the_bound() -> None:
    site = small_site(charged(30.0, 0.1, source="sewer tariff (invented)"))
    found = plan(site)
    text = " ".join(plan_text(found.to_dict()).split())
    assert "Surcharges by the kilogram" in text
    assert "sewer tariff (invented)" in text
    rows = explain_plan(site).to_dict()["marginal_costs"]
    (row,) = [r for r in rows if r["kind"] == "surcharge"]
    assert row["first_order_per_year"] == pytest.approx(0.1 * found.cost[SURCHARGES], rel=1e-2)
    assert 0.0 < row["resolved_per_year"] <= row["first_order_per_year"] * 1.01
    bound = prove(Evaluator(site), found.cost["total"], seconds=4.0)
    assert 0.0 < bound.lower_per_year <= found.cost["total"]


def test_a_peak_analysis_is_said_to_overstate_the_year() -> None:
    notes = small_site(charged(5.0)).notes
    assert any("as if every day were the peak" in note for note in notes)
    average = {"feed": {"stands_for": "average"}}
    assert not any("surcharges" in note for note in small_site(charged(5.0), average).notes)
