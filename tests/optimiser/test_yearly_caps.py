"""Caps on figures of the year hold in plans, and their slopes are those of the evaluation."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

import optimiser
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.outcome import Plan
from optimiser.points import Points
from optimiser.site import Site
from tests.optimiser.small_sites import SULFATE, small_site


@cache
def free() -> tuple[Site, Plan]:
    """A water in which lime makes gypsum, without a cap."""
    site = small_site(SULFATE)
    return site, optimiser.plan(site)


def with_sludge_cap(site: Site, most_wet_t_per_year: float) -> Site:
    return replace(site, disposal=replace(site.disposal, most_wet_t_per_year=most_wet_t_per_year))


def test_a_plan_keeps_its_yearly_sludge_under_the_cap_and_pays_for_it() -> None:
    site, cheapest = free()
    most = 0.7 * cheapest.sludge["wet_t_per_year"]
    plan = optimiser.plan(with_sludge_cap(site, most))
    assert plan.sludge["wet_t_per_year"] <= most * (1.0 + 1e-9)
    assert plan.cost["total"] > cheapest.cost["total"] * 1.001


def test_doses_that_make_more_sludge_than_the_cap_break_a_rule_by_name() -> None:
    site, cheapest = free()
    most = round(0.9 * cheapest.sludge["wet_t_per_year"], 1)
    found = optimiser.assess(with_sludge_cap(site, most), cheapest.doses)
    assert not found.compliant
    assert found.data["rules_missed"] == [f"sludge of the year, at most {most:g} t wet"]


def test_a_cap_that_nothing_can_keep_is_named_where_there_is_no_plan() -> None:
    site, cheapest = free()
    least = 0.05 * cheapest.sludge["wet_t_per_year"]
    with pytest.raises(optimiser.NoPlan, match="sludge of the year, at most"):
        optimiser.plan(with_sludge_cap(site, least))


def test_a_plan_keeps_the_mean_of_a_burden_under_its_cap() -> None:
    # calcium weighs less per charge than sodium, but here lime costs more
    site = small_site({"treatment": {"equipment_cost_per_year": {"hydrated_lime": 9000}}})
    cheapest = optimiser.plan(site)
    assert list(cheapest.doses) == ["caustic_soda"]
    most = 0.99 * cheapest.data["burden"]["TDS"]["effluent_mg_per_l"]
    plan = optimiser.plan(replace(site, mean_caps_mg_per_l={"TDS": most}))
    assert plan.data["burden"]["TDS"]["effluent_mg_per_l"] <= most * (1.0 + 1e-9)
    assert list(plan.doses) == ["hydrated_lime"]


def moved(start: Points, axis: int, by: float) -> Points:
    """A point with its set point (axis -1) or a paced dose moved."""
    if axis < 0:
        return replace(start, ph=start.ph + by)
    doses = start.doses.copy()
    doses[0, axis] += by
    return replace(start, doses=doses)


@pytest.mark.parametrize("label", ["sludge", "mean TDS", "mean hardness"])
def test_slopes_of_caps_are_those_of_the_evaluation(label: str) -> None:
    site = replace(with_sludge_cap(free()[0], 5.0), mean_caps_mg_per_l={"TDS": 900, "hardness": 9})
    evaluator = Evaluator(site)
    index = evaluator.plant.index
    doses = np.zeros((1, len(evaluator.plant.names)))
    doses[0, index["hydrated_lime"]] = 120.0
    start = Points(doses, np.array([index["caustic_soda"]]), np.array([9.3]), np.array([-1]))

    def ratio(seen: Evaluation) -> tuple[float, np.ndarray]:
        rule = next(rule for rule in seen.rules if rule.label.startswith(label))
        return float(rule.ratio[0]), rule.slope[0] if rule.slope.size else np.zeros(0)

    exact = ratio(evaluator.evaluate(start, slopes=True))[1]
    for axis, step in ((-1, 1e-3), (index["hydrated_lime"], 1e-2)):
        up = ratio(evaluator.evaluate(moved(start, axis, step)))[0]
        down = ratio(evaluator.evaluate(moved(start, axis, -step)))[0]
        assert exact[1 + axis] == pytest.approx((up - down) / (2.0 * step), rel=1e-4, abs=1e-9)
    assert abs(exact[1 + index["hydrated_lime"]]) > 1e-6
