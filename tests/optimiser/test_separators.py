"""Which separator pays: a filter, sulfide behind a clarifier, or more polymer."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from optimiser import NoPlan, assess, load_site, plan
from optimiser.bound import Bound, joined
from optimiser.planning import find
from optimiser.render import plan_text

DEMO = Path(__file__).parents[2] / "catalogs" / "sites" / "filter_choice" / "site.yaml"


@pytest.fixture(scope="module")
def site():
    whole = load_site(DEMO)
    clarifier, _, sand = whole.treatment.separator_options
    treatment = replace(whole.treatment, separator_options=(clarifier, sand), most_reagents=2)
    return replace(whole, treatment=treatment)


@pytest.fixture(scope="module")
def found(site):
    return plan(site)


def _with_costs(site, *costs):
    options = tuple(
        replace(option, cost_per_year=cost)
        for option, cost in zip(site.treatment.separator_options, costs, strict=True)
    )
    treatment = replace(site.treatment, separator=options[0], separator_options=options)
    return replace(site, treatment=treatment)


def test_the_filter_beats_sulfide_at_its_demo(found):
    rows = {row["separator"]: row for row in found.data["separators"]}
    assert rows["clarifier"]["reagents"] == ["caustic_soda", "sodium_hydrosulfide"]
    assert rows["clarifier and sand filter"]["reagents"] == ["caustic_soda"]
    best = rows["clarifier and sand filter"]["total"]
    assert found.cost["total"] == pytest.approx(best, rel=1e-9)
    assert "clarifier and sand filter" in plan_text(found.to_dict())


def test_the_choice_turns_where_the_filter_costs_as_much_more_as_the_plans_differ(site, found):
    rows = {row["separator"]: row for row in found.data["separators"]}
    clarifier, sand = site.treatment.separator_options
    spare = rows["clarifier"]["total"] - rows["clarifier and sand filter"]["total"]
    assert spare > 0.0
    for more, wanted in ((0.98 * spare, sand.name), (1.02 * spare, clarifier.name)):
        dearer = _with_costs(site, clarifier.cost_per_year, sand.cost_per_year + more)
        evaluator, _ = find(dearer)
        assert evaluator.site.treatment.separator.name == wanted


def test_assess_takes_the_separator_that_complies(site, found):
    again = assess(site, found.doses)
    assert again.compliant
    assert again.cost["total"] == pytest.approx(found.cost["total"], rel=1e-9)


def test_without_a_separator_that_opens_a_plan_there_is_none(site):
    limits = tuple(
        replace(limit, daily_mg_per_l=0.02, monthly_mg_per_l=0.01)
        if limit.parameter == "Zn"
        else limit
        for limit in site.limits
    )
    with pytest.raises(NoPlan):
        find(replace(site, limits=limits))


def test_the_least_bound_of_all_separators_counts():
    first = Bound(lower_per_year=90.0, plan_per_year=100.0, recipes=2, cells=3, closed={"cost": 3})
    second = Bound(lower_per_year=95.0, plan_per_year=100.0, recipes=2, cells=4, closed={"cost": 4})
    both = joined([first, second])
    assert (both.lower_per_year, both.cells, both.closed) == (90.0, 7, {"cost": 7})
    unbounded = Bound(lower_per_year=0.0, plan_per_year=100.0, reason="no interval")
    assert joined([first, unbounded]).reason == "no interval"
