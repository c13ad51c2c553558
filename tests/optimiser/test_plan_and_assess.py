"""Plans and assessments agree, scale with prices, answer to limits and are certified."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator
from dataclasses import replace
from functools import cache
from itertools import pairwise
from typing import Any

import pytest

from optimiser import NoPlan, assess, plan
from optimiser.outcome import Outcome, Plan
from optimiser.site import Site
from tests.optimiser.small_sites import (
    ALKALINE,
    CARBONATE,
    OFFERS,
    SILVER,
    SULFATE,
    SULFIDE,
    Tree,
    row_of,
    small_site,
)

AVERAGE: Tree = {
    "feed": {"stands_for": "average"},
    "limits": {"own": [
        {"parameter": "Cu", "daily_mg_per_l": 3.0, "monthly_mg_per_l": 1.8, "source": "invented"},
        {"parameter": "Zn", "daily_mg_per_l": 5.0, "monthly_mg_per_l": 3.0, "source": "invented"},
    ]},
}  # fmt: skip
BUSY: Tree = {
    "burden_charges_per_kg": {"TDS": 0.02, "Cl": 0.05},
    "treatment": {"polymer_g_per_kg_solids": 3, "polymer_price_per_kg": 4},
    "disposal": {"rules": [
        {"sludge_class": "hazardous", "metals": ["Cu"], "above_mg_per_kg_dry": 1000,
         "tariff_per_wet_t": 240, "pickup_fee": 150, "tonnes_per_pickup": 6, "yearly_fee": 350},
        {"sludge_class": "ordinary", "tariff_per_wet_t": 130},
    ]},
}  # fmt: skip
KINDS: dict[str, tuple[Tree, ...]] = {
    "plain": (BUSY,),
    "average": (AVERAGE,),
    "gypsum": (SULFATE,),
    "sulfide": (SULFIDE,),
    "carbonate": (CARBONATE,),
    "alkaline": (ALKALINE,),
    "silver": (SILVER,),
}


@cache
def site_of(kind: str) -> Site:
    return small_site(*KINDS[kind])


@cache
def plan_of(kind: str) -> Plan:
    return plan(site_of(kind))


def numbers(data: object, place: str = "") -> Iterator[tuple[str, float]]:
    """Every number of nested data with its place."""
    if isinstance(data, dict):
        for key, value in data.items():
            assert isinstance(key, str)
            yield from numbers(value, f"{place}.{key}")
    elif isinstance(data, list):
        for position, value in enumerate(data):
            yield from numbers(value, f"{place}[{position}]")
    elif isinstance(data, float | int) and not isinstance(data, bool):
        yield place, float(data)


def same_residuals(first: Outcome, second: Outcome, rel: float) -> None:
    for one, two in zip(first.data["limits"], second.data["limits"], strict=True):
        for key in ("residual", "carry_over", "predicted"):
            assert two[key] == pytest.approx(one[key], rel=rel, abs=1e-15), (one["parameter"], key)


# -- the same answer twice ------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_a_plan_assessed_again_gives_its_cost_and_residuals(kind: str) -> None:
    made = plan_of(kind)
    again = assess(site_of(kind), made.doses)
    assert made.compliant
    assert again.compliant
    assert dict(again.doses) == pytest.approx(dict(made.doses), rel=1e-6)
    assert dict(again.cost) == pytest.approx(dict(made.cost), rel=1e-6)
    same_residuals(made, again, 1e-6)


@pytest.mark.parametrize("kind", KINDS)
def test_a_plan_read_back_from_json_gives_its_cost(kind: str) -> None:
    made = plan_of(kind)
    doses = json.loads(json.dumps(made.to_dict(), allow_nan=False))["doses"]
    again = assess(site_of(kind), doses)
    assert again.cost["total"] == pytest.approx(made.cost["total"], rel=1e-6)


@pytest.mark.parametrize("kind", KINDS)
def test_runners_up_comply_at_the_cost_that_is_shown_and_none_is_cheaper(kind: str) -> None:
    made = plan_of(kind)
    for row in made.runners_up:
        assert row["total"] >= made.cost["total"] * (1.0 - 1e-9)
        assert set(row["reagents"]) == {key for key in row["doses"] if "@" not in key}
        again = assess(site_of(kind), row["doses"])
        assert again.cost["total"] == pytest.approx(row["total"], rel=2e-3)


@pytest.mark.parametrize("kind", KINDS)
def test_planning_twice_gives_the_same_plan(kind: str) -> None:
    again = plan(small_site(*KINDS[kind]))
    assert dict(again.doses) == dict(plan_of(kind).doses)
    assert again.cost["total"] == plan_of(kind).cost["total"]


# -- least cost -----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_no_compliant_doses_around_the_plan_are_cheaper(kind: str) -> None:
    made, site = plan_of(kind), site_of(kind)
    tank = {key: dose for key, dose in made.doses.items() if "@" not in key}
    found = 0
    for key, dose in tank.items():
        for factor in (0.9, 0.97, 0.99, 1.0005, 1.01, 1.03, 1.1):
            other = assess(site, {**tank, key: factor * dose})
            if other.compliant:
                found += 1
                assert other.cost["total"] >= made.cost["total"] * (1.0 - 1e-4)
    assert found > 0


def test_a_plan_is_no_dearer_than_a_grid_of_single_alkali_doses() -> None:
    site, made = site_of("plain"), plan_of("plain")
    feasible = 0
    for name, doses in (
        ("caustic_soda", range(200, 320, 6)), ("hydrated_lime", range(210, 330, 6)),
    ):  # fmt: skip
        for dose in doses:
            seen = assess(site, {name: float(dose)})
            if seen.compliant:
                feasible += 1
                assert made.cost["total"] <= seen.cost["total"] * (1.0 + 1e-6)
    assert feasible >= 10


# -- prices ---------------------------------------------------------------------------------------


def dearer(tree: Tree, factor: float) -> Tree:
    """The site with every price, tariff, fee, charge and yearly cost multiplied."""
    costs = {"caustic_soda": 500, "hydrated_lime": 900, "hydrochloric_acid": 300}
    rules = [
        {
            key: value * factor
            if key in ("tariff_per_wet_t", "pickup_fee", "yearly_fee")
            else value
            for key, value in rule.items()
        }
        for rule in tree["disposal"]["rules"]
    ]
    return {
        "treatment": {
            "equipment_cost_per_year": {key: value * factor for key, value in costs.items()},
            "separator": {"cost_per_year": 400 * factor},
            "polymer_price_per_kg": tree["treatment"]["polymer_price_per_kg"] * factor,
        },
        "disposal": {"rules": rules},
        "burden_charges_per_kg": {
            key: value * factor for key, value in tree["burden_charges_per_kg"].items()
        },
    }


def tripled_offers() -> tuple[tuple[Any, ...], ...]:
    return tuple((*row[:4], 3 * row[4], row[5], 3 * row[6], row[7]) for row in OFFERS)


def test_tripling_every_price_triples_the_cost_of_given_doses() -> None:
    doses = {"caustic_soda": 300.0}
    base = assess(small_site(BUSY), doses)
    triple = assess(small_site(BUSY, dearer(BUSY, 3), offers=tripled_offers()), doses)
    for cause, value in base.cost.items():
        assert triple.cost[cause] == pytest.approx(3.0 * value, rel=1e-12)
    assert set(base.cost) >= {
        "caustic_soda", "hydrochloric_acid", "freight", "disposal", "disposal fees", "polymer",
        "equipment", "separator", "burden charges",
    }  # fmt: skip


def test_tripling_every_price_triples_the_plans_cost_and_keeps_its_doses() -> None:
    base = plan_of("plain")
    triple = plan(small_site(BUSY, dearer(BUSY, 3), offers=tripled_offers()))
    assert triple.cost["total"] == pytest.approx(3.0 * base.cost["total"], rel=1e-9)
    assert dict(triple.doses) == pytest.approx(dict(base.doses), rel=1e-9)


# -- limits ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("kind", "metal", "steps"),
    [
        ("plain", "Zn", (4.0, 1.6, 1.0)),
        ("carbonate", "Zn", (3.0, 1.5)),
        ("sulfide", "Cd", (0.5, 0.05)),
    ],
)
def test_tightening_a_limit_never_lowers_the_cost(
    kind: str, metal: str, steps: tuple[float, ...]
) -> None:
    site = site_of(kind)
    costs = []
    for value in steps:
        limits = tuple(
            replace(limit, daily_mg_per_l=value) if limit.parameter == metal else limit
            for limit in site.limits
        )
        try:
            costs.append(plan(replace(site, limits=limits)).cost["total"])
        except NoPlan:
            costs.append(math.inf)
    assert math.isfinite(costs[0])
    assert all(b >= a * (1.0 - 1e-3) for a, b in pairwise(costs)), costs
    assert costs[-1] > costs[0] * 1.001


def test_more_reagents_allowed_never_cost_more() -> None:
    one = plan(small_site(SULFATE, {"treatment": {"most_reagents": 1}}))
    assert len(one.doses) == 1
    assert plan_of("gypsum").cost["total"] <= one.cost["total"] * (1.0 + 1e-3)


# -- certificate ----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_every_state_of_a_plan_is_certified(kind: str) -> None:
    certificate = plan_of(kind).proof["certificate"]
    assert certificate["states"] >= 3
    assert certificate["mass_balance"] <= 1e-9
    assert certificate["presence"] <= 1e-8
    assert certificate["supersaturation"] <= 1e-8
    assert plan_of(kind).proof["kind"] == "searched"
    assert "gap" not in plan_of(kind).proof


# -- plain data -----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_plans_and_assessments_are_plain_finite_data(kind: str) -> None:
    other = {key: 1.5 * dose for key, dose in plan_of(kind).doses.items() if "@" not in key}
    for outcome in (plan_of(kind), assess(site_of(kind), other)):
        data = outcome.to_dict()
        assert json.loads(json.dumps(data, allow_nan=False)) == data
        for place, value in numbers(data):
            assert math.isfinite(value), place
        assert {
            "site", "doses", "purchases", "cost", "limits", "water", "burden", "sludge", "cautions",
            "proof", "runners_up", "versions",
        } <= set(data)  # fmt: skip


def test_water_that_is_not_dosed_at_all_is_assessed_as_it_is() -> None:
    result = assess(site_of("plain"), {})
    assert not result.compliant
    assert dict(result.doses) == {}
    assert row_of(result, "Cu")["predicted"] == pytest.approx(58.0, rel=1e-6)
    json.dumps(result.to_dict(), allow_nan=False)


# -- what the site rules --------------------------------------------------------------------------


def test_required_reagents_are_in_the_plan() -> None:
    assert list(plan_of("plain").doses) == ["hydrated_lime"]
    made = plan(small_site(BUSY, {"treatment": {"required": ["caustic_soda"]}}))
    assert "caustic_soda" in made.doses
    assert made.cost["total"] > plan_of("plain").cost["total"]


def test_dose_ceilings_bind() -> None:
    ceiling: Tree = {"treatment": {"dose_ceilings_mg_per_l": {"hydrated_lime": 150}}}
    made = plan(small_site(BUSY, ceiling))
    assert made.doses.get("hydrated_lime", 0.0) <= 150.0 * (1.0 + 1e-9)
    assert "caustic_soda" in made.doses


def test_least_real_doses_bind() -> None:
    made = plan_of("gypsum")
    assert set(made.doses) == {"caustic_soda", "hydrated_lime"}
    least = 1.3 * made.doses["caustic_soda"]
    raised = plan(
        small_site(SULFATE, {"treatment": {"least_doses_mg_per_l": {"caustic_soda": least}}})
    )
    assert raised.doses.get("caustic_soda", least) >= least * (1.0 - 1e-6)
    assert raised.cost["total"] >= made.cost["total"]


def test_the_set_point_stays_in_the_sites_window() -> None:
    made = plan(small_site(BUSY, {"treatment": {"ph_set_point": {"low": 9.1, "high": 9.2}}}))
    assert 9.1 - 1e-9 <= made.set_points[0]["ph_set_point"] <= 9.2 + 1e-9


@pytest.mark.parametrize("kind", KINDS)
def test_the_discharge_stays_in_the_ph_window_at_every_state(kind: str) -> None:
    ph = plan_of(kind).data["ph"]
    assert ph["low"] - 1e-6 <= ph["lowest"] <= ph["highest"] <= ph["high"] + 1e-6
    assert ph["meets"]


# -- assess: what it is given ---------------------------------------------------------------------


@pytest.mark.parametrize(
    ("doses", "said"),
    [
        ({"caustic": 100.0}, "unknown reagent 'caustic'"),
        ({"caustic_soda@tank2": 100.0}, "unknown stage"),
        ({"caustic_soda": -1.0}, "dose of caustic_soda is -1.0"),
        ({"caustic_soda": math.nan}, "dose of caustic_soda is nan"),
        ({"caustic_soda": math.inf}, "dose of caustic_soda is inf"),
        ({"hydrochloric_acid@trim": 1.0, "sulfuric_acid@trim": 1.0}, "reagent"),
    ],
)
def test_doses_that_mean_nothing_are_refused(doses: dict[str, float], said: str) -> None:
    with pytest.raises(ValueError, match=said):
        assess(site_of("plain"), doses)


def test_an_unknown_trim_is_refused() -> None:
    with pytest.raises(ValueError, match="trim is 'some'"):
        assess(site_of("plain"), {"caustic_soda": 200.0}, trim="some")


def test_without_trim_the_water_leaves_as_it_is_and_misses_the_window() -> None:
    doses = {"caustic_soda": 300.0}
    bare, trimmed = (assess(site_of("plain"), doses, trim=t) for t in ("none", "auto"))
    assert not any("@trim" in key for key in bare.doses)
    assert bare.data["ph"]["highest"] > 10.0
    assert not bare.data["ph"]["meets"]
    assert not bare.compliant
    assert [row["stage"] for row in bare.set_points] == ["tank"]
    assert trimmed.data["ph"]["meets"]
    assert trimmed.doses["hydrochloric_acid@trim"] > 1.0
    assert trimmed.cost["total"] > bare.cost["total"]


def test_a_trim_dose_of_the_users_is_kept_and_judged() -> None:
    site = site_of("plain")
    auto = assess(site, {"caustic_soda": 300.0}).doses["hydrochloric_acid@trim"]
    little = assess(site, {"caustic_soda": 300.0, "hydrochloric_acid@trim": 0.5 * auto})
    assert little.doses["hydrochloric_acid@trim"] == pytest.approx(0.5 * auto)
    assert not little.data["ph"]["meets"]
    assert not little.compliant


def test_offers_given_replace_those_of_the_site() -> None:
    site = site_of("plain")
    dear = tuple(replace(offer, price=3.0 * offer.price) for offer in site.offers)
    base = assess(site, {"caustic_soda": 240.0})
    other = assess(site, {"caustic_soda": 240.0}, offers=dear)
    assert other.cost["caustic_soda"] == pytest.approx(3.0 * base.cost["caustic_soda"])
    assert other.cost["freight"] == pytest.approx(base.cost["freight"])
