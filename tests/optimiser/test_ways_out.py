"""Where there is no plan: what limits would have to be, and what else would open one."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from functools import cache
from itertools import count
from typing import Any

import pytest

from optimiser import NoPlan, assess, plan
from optimiser.render_no_plan import no_plan_data, no_plan_text
from optimiser.site import Site
from optimiser.wider_site import with_reagents, with_separator
from tests.optimiser.small_sites import SULFIDE, Tree, own, small_site
from tests.optimiser.test_no_plan import CAUSTIC_ONLY, CLEAR

ZINC_TOO_LOW = (CAUSTIC_ONLY, CLEAR, own({"parameter": "Zn", "daily_mg_per_l": 0.3}))
SALT_AND_ZINC = (
    CAUSTIC_ONLY,
    own(
        {"parameter": "Zn", "daily_mg_per_l": 2.0}, {"parameter": "TDS", "daily_mg_per_l": 420.0}
    ),
)  # fmt: skip
COARSE = (
    {"treatment": {"separator": {
        "name": "old clarifier", "tss_mg_per_l": 20, "capture_fraction": 0.5,
    }}},
    own({"parameter": "Cu", "daily_mg_per_l": 1.0}),
)  # fmt: skip
NO_SULFIDE: Tree = {
    "treatment": {
        "reagents": ["caustic_soda"], "least_doses_mg_per_l": None,
        "equipment_cost_per_year": {"sodium_hydrosulfide": None},
    }
}  # fmt: skip
LOW_CEILING: Tree = {"treatment": {"dose_ceilings_mg_per_l": {"caustic_soda": 50}}}


@cache
def refused(name: str) -> tuple[Site, NoPlan]:
    """One of the sites above and why it has no plan."""
    site = small_site(*{
        "zinc": ZINC_TOO_LOW, "salt": SALT_AND_ZINC, "coarse": COARSE,
        "sulfide": (SULFIDE, NO_SULFIDE), "ceiling": (CAUSTIC_ONLY, LOW_CEILING),
    }[name])  # fmt: skip
    with pytest.raises(NoPlan) as caught:
        plan(site)
    return site, caught.value


def alone(error: NoPlan, parameter: str) -> dict[str, Any]:
    """The loosening of one parameter alone."""
    return dict(next(r for r in error.relaxations if r["parameters"] == [parameter] and r["alone"]))


def opener(error: NoPlan, what: str) -> dict[str, Any]:
    """The try whose text holds these words."""
    return dict(next(row for row in error.openers if what in row["what"]))


def with_daily(site: Site, parameter: str, value: float) -> Site:
    """The site with one daily limit at another value."""
    limits = tuple(
        replace(limit, daily_mg_per_l=value) if limit.label == parameter else limit
        for limit in site.limits
    )
    return replace(site, limits=limits)


# -- limits ---------------------------------------------------------------------------------------


def test_a_plan_opens_at_the_relaxed_limit_and_not_just_below_it() -> None:
    site, error = refused("zinc")
    row = alone(error, "Zn")
    (limit,) = row["limits"]
    assert limit["limit"] == 0.3
    assert limit["least"] <= limit["written"] <= 1.02 * limit["least"]
    opened = plan(with_daily(site, "Zn", limit["written"]))
    assert opened.compliant
    assert row["plan"]["total"] == pytest.approx(opened.cost["total"], rel=1e-3)
    assert plan(with_daily(site, "Zn", 1.0005 * limit["least"])).compliant
    with pytest.raises(NoPlan):
        plan(with_daily(site, "Zn", 0.999 * limit["least"]))


def test_each_of_two_limits_that_clash_is_loosened_alone() -> None:
    site, error = refused("salt")
    for parameter in ("Zn", "TDS"):
        row = alone(error, parameter)
        assert row["opens"]
        (limit,) = row["limits"]
        assert limit["parameter"] == parameter
        again = assess(with_daily(site, parameter, limit["written"]), row["plan"]["doses"])
        assert again.compliant
        assert again.cost["total"] == pytest.approx(row["plan"]["total"], rel=1e-6)
        with pytest.raises(NoPlan):
            plan(with_daily(site, parameter, 0.998 * limit["least"]))


def test_a_limit_that_cannot_open_a_plan_alone_is_loosened_together_with_the_other() -> None:
    limits = own(
        {"parameter": "Zn", "daily_mg_per_l": 0.2}, {"parameter": "TDS", "daily_mg_per_l": 290.0}
    )
    site = small_site(CAUSTIC_ONLY, limits)
    with pytest.raises(NoPlan) as caught:
        plan(site)
    assert not alone(caught.value, "Zn")["opens"]
    assert not alone(caught.value, "TDS")["opens"]
    (joint,) = [row for row in caught.value.relaxations if not row["alone"]]
    assert joint["opens"]
    loosened = site
    for limit in joint["limits"]:
        assert limit["least"] == pytest.approx(joint["factor"] * limit["limit"])
        loosened = with_daily(loosened, limit["parameter"], limit["written"])
    assert plan(loosened).compliant
    tight = site
    for limit in joint["limits"]:
        tight = with_daily(tight, limit["parameter"], 0.99 * limit["least"])
    with pytest.raises(NoPlan):
        plan(tight)


def test_a_rule_in_the_way_is_not_blamed_on_the_limits() -> None:
    _, error = refused("ceiling")
    assert error.relaxations
    assert not any(row["opens"] for row in error.relaxations)
    assert opener(error, "above the ceiling of caustic soda")["opens"]


# -- what is not allowed --------------------------------------------------------------------------


def test_the_missing_sulfide_source_is_named_with_a_recipe_that_complies() -> None:
    site, error = refused("sulfide")
    row = opener(error, "sodium hydrosulfide")
    assert row["opens"]
    assert "sodium_hydrosulfide" in row["plan"]["reagents"]
    wider = with_reagents(site, ["sodium_hydrosulfide"])
    assert plan(wider).cost["total"] == pytest.approx(row["plan"]["total"], rel=5e-3)
    assert not opener(error, "sodium chloride")["opens"]


def test_a_reagent_that_nobody_sells_has_no_cost_but_a_note() -> None:
    _, error = refused("sulfide")
    row = opener(error, "sodium sulfide")
    assert all(offer.reagent != "sodium_sulfide" for offer in refused("sulfide")[0].offers)
    assert "cost unknown" in row["note"]
    if row["opens"]:
        assert row["plan"]["total"] is None


def test_a_filter_is_named_with_the_solids_that_it_may_let_pass() -> None:
    site, error = refused("coarse")
    row = next(r for r in error.openers if r["kind"] == "separator")
    assert row["opens"]
    tss = row["tss_mg_per_l"]
    assert tss < 20.0
    assert plan(with_separator(site, tss)).compliant
    with pytest.raises(NoPlan):
        plan(with_separator(site, 1.1 * tss))


def test_a_filter_is_not_named_where_what_is_dissolved_is_too_much() -> None:
    row = next(r for r in refused("ceiling")[1].openers if r["kind"] == "separator")
    assert not row["opens"]


def test_what_opens_a_plan_stands_before_what_does_not_and_the_cheapest_first() -> None:
    _, error = refused("ceiling")
    opens = [row["opens"] for row in error.openers]
    assert opens == sorted(opens, reverse=True)
    totals = [row["plan"]["total"] for row in error.openers if row["opens"]]
    known = [total for total in totals if total is not None]
    assert len(known) >= 2
    assert totals[: len(known)] == sorted(known)


# -- faces ----------------------------------------------------------------------------------------


def test_the_ways_out_are_plain_data_and_text_within_the_width() -> None:
    site, error = refused("ceiling")
    data = json.loads(json.dumps(no_plan_data(site.name, error, "EUR"), allow_nan=False))
    text = no_plan_text(data)
    assert max(map(len, text.splitlines())) <= 100
    assert "Zn alone: no value of it opens a plan" in text
    assert "hydrated lime allowed: hydrated lime" in text


def test_what_the_time_limit_left_untried_is_not_said_to_have_been_tried() -> None:
    site = refused("ceiling")[0]
    with pytest.raises(NoPlan) as caught:
        plan(site)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("optimiser.openers.time.perf_counter", _leaping())
        data = no_plan_data(site.name, caught.value, "EUR")
    row = next(r for r in data["openers"] if r["what"] == "hydrated lime")
    assert not row["opens"]
    assert "the time limit came first: " in no_plan_text(data)


def _leaping() -> Callable[[], float]:
    """A clock that is an hour later each time it is read."""
    hours = count()
    return lambda: 3600.0 * next(hours)
