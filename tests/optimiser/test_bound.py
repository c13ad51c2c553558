"""Lower bounds: below every plan, close where proven, and worthless claims are not made."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from optimiser.bound import PROVEN_GAP, Bound
from optimiser.bound_intervals import Water, propagate, screening_range
from optimiser.bound_model import Relaxation
from optimiser.bound_roots import all_recipes, roots
from optimiser.bound_tighten import Ends
from optimiser.bound_tree import prove
from optimiser.evaluation import Evaluator
from optimiser.linear_model import Expression, Model, Sense
from optimiser.planning import find, plan
from optimiser.render_proof import proof_lines
from optimiser.site import Site
from tests.optimiser.small_sites import ALKALINE, SILVER, SULFATE, feed_totals, settled, small_site


@pytest.mark.parametrize("changes", [(), (SULFATE,), (ALKALINE,), (SILVER,)])
def test_bounds_stay_below_the_plan_and_prove_it(changes: tuple[dict[str, object], ...]) -> None:
    evaluator, findings = find(small_site(*changes))
    best = findings.feasible[0][1].total
    bound = prove(evaluator, best, seconds=120.0)
    assert bound.proven
    assert best * (1.0 - PROVEN_GAP) <= bound.lower_per_year <= best


def test_a_plan_asked_to_be_proven_says_so_and_without_asking_is_searched() -> None:
    site = small_site(ALKALINE)
    proof = plan(site, prove_s=60.0).proof
    assert proof["kind"] == "proven"
    assert 0.0 <= proof["gap"] <= PROVEN_GAP
    assert proof["bound_cells_open"] == 0
    plain = plan(site).proof
    assert plain["kind"] == "searched"
    assert "gap" not in plain


def test_a_dear_plan_is_not_proven() -> None:
    """Against a plan at one and a half times the least cost no bound comes near."""
    evaluator, findings = find(small_site(ALKALINE))
    best = findings.feasible[0][1].total
    bound = prove(evaluator, 1.5 * best, seconds=2.0)
    assert bound.lower_per_year <= best
    assert not bound.proven
    assert "gap" not in bound.to_dict()


def test_no_time_still_gives_a_valid_bound() -> None:
    evaluator, findings = find(small_site(ALKALINE))
    best = findings.feasible[0][1].total
    bound = prove(evaluator, best, seconds=1e-9)
    assert 0.0 < bound.lower_per_year < best
    assert bound.open_cells > 0
    assert "kind" not in bound.to_dict()


def test_a_salty_site_has_no_bound_and_says_why() -> None:
    site = small_site({"activity": "sit"}, ALKALINE)
    bound = prove(Evaluator(site), 1000.0, seconds=5.0)
    assert not bound.proven
    assert "activity model" in bound.to_dict()["not_bounded_because"]


def test_the_proof_is_told_with_its_gap_only_where_it_is_one() -> None:
    weak = Bound(lower_per_year=900.0, plan_per_year=1000.0, recipes=3, cells=4, open_cells=1)
    near = Bound(lower_per_year=995.0, plan_per_year=1000.0, recipes=3, cells=4)
    shared = {
        "kind": "searched", "recipes_examined": 3, "cells_examined": 1, "states_examined": 1,
        "smallest_step_percent": 1.0, "seconds": {},
        "certificate": {"mass_balance": 0, "supersaturation": 0, "presence": 0, "charge": 0},
    }  # fmt: skip
    for bound, said in ((weak, "No plan that the site allows"), (near, "Proven: no plan")):
        data = {"site": {"currency": "EUR"}, "proof": shared | bound.to_dict()}
        text = " ".join(proof_lines(data))
        assert said in text
        assert ("gap, " in text) == bound.proven


def test_roots_leave_out_only_what_costs_more_than_the_plan() -> None:
    relaxation = Relaxation(Evaluator(small_site()))
    recipe = next(r for r in all_recipes(relaxation) if len(r.paced) == 1)
    cell = roots(relaxation, recipe, 5000.0)[0]
    r = recipe.paced[0]
    fixed = relaxation.fixed_cost(recipe)
    assert fixed + relaxation.money.least(r, float(cell.dose_high[r]) * 1.01) > 5000.0 - (
        relaxation.money.least(recipe.controller or 0, float(cell.dose_low[recipe.controller or 0]))
    ) * (1.0 + 1e-6)
    assert roots(relaxation, recipe, 0.5 * fixed) == []


def test_intervals_hold_the_equilibrium_they_are_drawn_around() -> None:
    site = small_site(SULFATE)
    state = settled(site, {"caustic_soda": 900.0}, ph=9.1)
    totals = feed_totals(site)
    doses = np.array([0.0, 1.0]) * (state.totals[0] - totals)[:, None]
    ln10 = np.log(10.0)
    water = Water(
        site.system, totals + doses.min(axis=1), totals + doses.max(axis=1), -9.3 * ln10,
        -8.9 * ln10, np.full(totals.size, np.inf),
    )  # fmt: skip
    ranges = propagate(water)
    seen = state.log_activity[0]
    present = ranges.present
    assert not ranges.empty
    assert (ranges.l_low[present] <= seen[present] + 1e-9).all()
    assert (ranges.l_high[present] >= seen[present] - 1e-9).all()
    assert ranges.strength_low <= state.ionic_strength[0] <= ranges.strength_high
    assert ranges.protons_low <= state.totals[0, site.system.index["H+"]] <= ranges.protons_high
    assert (ranges.solid_high >= state.solids_mol_per_l[0]).all()
    # narrow enough to mean something: calcium and sodium within a factor of three
    for name in ("Na+", "Ca+2"):
        c = site.system.index[name]
        assert ranges.l_high[c] - ranges.l_low[c] < 1.2


def test_a_cell_that_no_water_fits_is_empty() -> None:
    site = small_site()
    totals = feed_totals(site)
    ceiling = np.full(totals.size, np.inf)
    ceiling[site.system.index["Zn+2"]] = 1e-9  # far below what zinc hydroxide leaves at pH 8
    water = Water(site.system, totals, totals, -8.1 * np.log(10), -8.0 * np.log(10), ceiling)
    assert propagate(water).empty


def test_screening_keeps_its_maximum_inside_an_interval(small: Site) -> None:
    model = small.system.activity_model
    low, high = screening_range(model, 0.01, 0.6)
    inside, _ = model.screening(np.linspace(0.01, 0.6, 500))
    assert low <= inside.min() + 1e-12
    assert high >= inside.max()


def test_ends_are_proven_even_from_wrong_prices() -> None:
    model = Model("two")
    x, y = model.add_variable("x", high=4.0), model.add_variable("y", high=4.0)
    model.add_row("sum", {x: 1.0, y: 1.0}, Sense.AT_LEAST, 5.0)
    model.add_cost("goods", Expression({x: 1.0, y: 3.0}))
    ends = Ends(model, 8.0)
    # x + 3 y <= 8 and x + y >= 5: y <= 1.5, x >= 3.5
    assert ends.ends("x") == pytest.approx((3.5, 4.0))
    assert ends.ends("y") == pytest.approx((1.0, 1.5))
    cost = np.array([1.0, 0.0])
    for prices in np.random.default_rng(3).normal(size=(200, 2)):
        assert ends.proven(cost, prices) <= 3.5 + 1e-12


@pytest.fixture
def small() -> Site:
    return replace(small_site(), name="small")
