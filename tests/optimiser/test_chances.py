"""Draws of what is not known for sure, and the chance that a plan holds under them."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from catalogs.constant_ranges import constant_spreads
from optimiser import load_site, plan, plan_with_confidence
from optimiser.chances import chances_of, estimate, without_margin
from optimiser.draws import draw_sites
from optimiser.evaluation import Evaluator
from optimiser.planning import find
from optimiser.site import Uncertainty

SILVER = Path(__file__).parents[2] / "catalogs" / "sites" / "silver_rinse" / "site.yaml"
EXACT = Uncertainty(analysis_percent=0.0, ph=0.0, carried_solids_percent=0.0)


@pytest.fixture(scope="module")
def silver():
    site = load_site(SILVER)
    return replace(site, treatment=replace(site.treatment, most_reagents=2))


@pytest.fixture(scope="module")
def found(silver):
    return find(silver)


def test_a_solid_and_a_complex_of_one_metal_and_review_share_their_shift(silver):
    group = {s.name: s.group for s in constant_spreads(silver.system)}
    assert group["Ag2O(s)"] == group["Ag(OH)2-"] == group["AgOH(aq)"]
    assert group["AgCl(s)"] != group["AgCl2-"]
    draw = next(iter(draw_sites(silver, 1, 3)))
    moved = {s.name: s.log10_k for s in (*draw.site.system.species, *draw.site.system.solids)}
    known = {s.name: s.log10_k for s in (*silver.system.species, *silver.system.solids)}
    signs = {np.sign(moved[n] - known[n]) for n in ("Ag2O(s)", "Ag(OH)2-", "AgOH(aq)")}
    assert len(signs) == 1


def test_constants_stay_within_their_published_range_in_nine_draws_of_ten(silver):
    spread = next(s for s in constant_spreads(silver.system) if s.name == "Ag2O(s)")
    known = next(s.log10_k for s in silver.system.solids if s.name == "Ag2O(s)")
    drawn = np.array(
        [
            next(s.log10_k for s in d.site.system.solids if s.name == "Ag2O(s)")
            for d in draw_sites(silver, 2000, 5)
        ]
    )
    low, high = known - 1.645 * spread.down_log10, known + 1.645 * spread.up_log10
    share = np.mean((low <= drawn) & (drawn <= high))
    assert share == pytest.approx(0.90, abs=4.0 * np.sqrt(0.9 * 0.1 / 2000))


def test_analysis_errors_have_the_stated_spread(silver):
    site = replace(silver, uncertainty=replace(EXACT, analysis_percent=10.0))
    silver_mg = site.analysis.measurements["Ag"].dissolved_mg_per_l
    factors = (
        np.array(
            [
                d.site.analysis.measurements["Ag"].dissolved_mg_per_l
                for d in draw_sites(site, 2000, 7)
            ]
        )
        / silver_mg
    )
    # lognormal with a relative standard deviation of 10 %: ln factor has sqrt(ln(1 + 0.1^2))
    assert np.std(np.log(factors)) == pytest.approx(np.sqrt(np.log(1.01)), rel=0.07)
    assert np.median(factors) == pytest.approx(1.0, abs=0.01)


def test_what_is_exact_and_touches_no_constant_stays(silver, found):
    _, findings = found
    evaluator = Evaluator(replace(silver, uncertainty=EXACT))
    chances = chances_of(evaluator, findings.feasible[0][1].place, draws=3, seed=1)
    # constants still move; what no constant touches stays: chloride
    column = chances.labels.index("Cl, daily")
    assert chances.ratio[:, column] == pytest.approx(chances.nominal[column], abs=2e-3)


def test_the_same_seed_gives_the_same_chances(silver, found):
    evaluator, findings = found
    place = findings.feasible[0][1].place
    first = chances_of(evaluator, place, draws=6, seed=2)
    again = chances_of(evaluator, place, draws=6, seed=2)
    other = chances_of(evaluator, place, draws=6, seed=3)
    assert first.to_dict() == again.to_dict()
    assert not np.array_equal(first.ratio, other.ratio)


def test_a_limit_at_the_plan_s_own_value_is_met_in_about_half_of_the_draws(silver, found):
    """The median of the draws of a value that nothing pushes one way is near the plan's own."""
    evaluator, findings = found
    chances = chances_of(evaluator, findings.feasible[0][1].place, draws=40, seed=4)
    column = chances.labels.index("Cu, daily")
    below = np.mean(chances.ratio[:, column] <= chances.nominal[column])
    assert 0.2 <= below <= 0.8


def test_score_interval_of_wilson():
    # for 0 of n it ends at z2 / (n + z2): Brown, Cai & DasGupta 2001, Statistical Science 16, 101
    share, low, high = estimate(0, 10)
    assert (share, low) == (0.0, 0.0)
    assert high == pytest.approx(1.645**2 / (10 + 1.645**2))


def test_confidence_tightens_targets_and_costs_money(silver):
    sure = plan_with_confidence(replace(silver, design_margin=1.0), 0.9, draws=40, seed=1)
    assert sure.base_chances.probability[0] < 0.9, "a plan at its limit holds in half of the draws"
    assert sure.chances.seed == 2, "the chance reported is that of fresh draws"
    assert sure.reached == (sure.chances.probability[0] >= 0.9)
    assert sure.plan.cost["total"] >= sure.base_total * (1.0 - 1e-6)
    assert sure.chances.probability[0] > sure.base_chances.probability[0]


def test_where_the_plan_is_sure_enough_it_is_the_plan_with_the_same_runners_up(silver):
    sure = plan_with_confidence(silver, 0.5, draws=10, seed=1)
    assert sure.reached
    made = plan(silver)
    assert sure.plan.cost == made.cost
    assert sure.base_total == pytest.approx(made.cost["total"], rel=1e-9)
    assert sure.plan.data["runners_up"] == made.data["runners_up"] != []


def test_limits_are_judged_without_margin(silver):
    bare = without_margin(silver)
    assert bare.design_margin == 1.0
    assert all(limit.design_margin is None for limit in bare.limits)
