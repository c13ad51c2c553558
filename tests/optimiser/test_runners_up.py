"""Runners-up: distinct recipes that comply, with what each costs more and why."""

from __future__ import annotations

import json
from collections.abc import Callable
from functools import cache

import pytest

from optimiser import assess, plan
from optimiser.cli_options import build_parser
from optimiser.outcome import Plan
from optimiser.render import plan_text
from optimiser.runners_up import _mineral
from optimiser.site import Site
from tests.optimiser.small_sites import SULFIDE, Tree, small_site

NEEDED: Tree = {
    "treatment": {
        "reagents": ["caustic_soda", "hydrated_lime", "sodium_hydrosulfide"],
        "equipment_cost_per_year": {"hydrated_lime": 900},
        "least_doses_mg_per_l": {"sodium_hydrosulfide": 18},
    }
}  # fmt: skip


@cache
def pair() -> tuple[Site, Plan]:
    """Two alkalis, each of which complies alone."""
    site = small_site()
    return site, plan(site)


@cache
def sulfide() -> tuple[Site, Plan]:
    """Sulfide that nothing complies without, at a least dose above what it takes."""
    site = small_site(SULFIDE, NEEDED)
    return site, plan(site)


@pytest.mark.parametrize("made", [pair, sulfide])
def test_every_runner_up_complies_at_its_cost_and_differs_by_the_sum_of_its_causes(
    made: Callable[[], tuple[Site, Plan]],
) -> None:
    site, found = made()
    assert found.runners_up
    for row in found.runners_up:
        again = assess(site, row["doses"])
        assert again.compliant
        assert again.cost["total"] == pytest.approx(row["total"], rel=1e-6)
        more = row["total"] - found.cost["total"]
        assert row["difference_per_year"] == pytest.approx(more, rel=1e-6)
        assert sum(row["difference_by_cause"].values()) == pytest.approx(more, rel=1e-6)
        sizes = [abs(value) for value in row["difference_by_cause"].values()]
        assert sizes == sorted(sizes, reverse=True)


def test_a_cause_is_what_both_bills_say_of_it() -> None:
    site, found = pair()
    (row,) = found.runners_up
    other = assess(site, row["doses"]).cost
    bill = found.cost
    for reagent in ("caustic_soda", "hydrated_lime"):
        more = other.get(reagent, 0.0) - bill.get(reagent, 0.0)
        assert row["difference_by_cause"][reagent] == pytest.approx(more, rel=1e-6)
    more = other["disposal"] - bill["disposal"]
    assert row["difference_by_cause"]["sludge"] == pytest.approx(more, rel=1e-6)


def test_a_recipe_with_a_dose_that_it_does_not_need_is_left_out_and_said_so() -> None:
    _, found = pair()
    assert [row["reagents"] for row in found.runners_up] == [["caustic_soda"]]
    (left,) = found.data["runners_up_left_out"]
    assert left == "hydrated lime with a token of caustic soda"


def test_a_reagent_at_its_least_dose_without_which_nothing_complies_counts() -> None:
    _, found = sulfide()
    (row,) = [r for r in found.runners_up if len(r["reagents"]) == 2]
    assert row["doses"]["sodium_hydrosulfide"] == pytest.approx(18.0)
    assert "least real dose of sodium hydrosulfide" in " ".join(row["binding"])


def test_the_limit_that_holds_a_recipe_is_named() -> None:
    site, found = pair()
    (row,) = found.runners_up
    rows = assess(site, row["doses"]).data["limits"]
    tight = min(rows, key=lambda limit: limit["margin_percent"])
    assert row["binding"][0] == f"{tight['parameter']} ({tight['averaging']})"


def test_as_many_are_told_as_were_asked_for() -> None:
    site, _ = pair()
    none = plan(site, runners_up=0)
    assert none.runners_up == []
    assert "Runners-up" not in plan_text(none.data)
    assert build_parser().parse_args(["plan", "x", "--runners-up", "2"]).runners_up == 2
    with pytest.raises(SystemExit):
        build_parser().parse_args(["plan", "x", "--runners-up", "-1"])


def test_the_text_says_what_a_runner_up_costs_more_and_why() -> None:
    data = json.loads(json.dumps(pair()[1].to_dict(), allow_nan=False))
    text = " ".join(plan_text(data).split())
    more = data["runners_up"][0]["difference_per_year"]
    assert f"- 2: EUR {more:,.0f} more: caustic soda +" in text
    assert "hydrated lime with a token of caustic soda." in text


def test_solids_go_by_their_names() -> None:
    assert _mineral("CaSO4.2H2O(s) (gypsum)") == "gypsum"
    assert _mineral("Cu(OH)2(s)") == "Cu(OH)2(s)"
