"""Factors of jar tests in predictions, their slopes, draws and bounds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pytest

from chemistry.calibration import FactorFit
from optimiser import assess, plan
from optimiser.bound_tree import prove
from optimiser.chances import chances_of
from optimiser.draws import draw_sites
from optimiser.evaluation import Evaluation, Evaluator, Place
from optimiser.points import Points
from optimiser.render import assessment_text
from optimiser.site import Site, Uncertainty
from tests.optimiser.small_sites import Tree, own, row_of, small_site, with_factors

EXACT: Tree = {"treatment": {"ph_tolerance": 0, "dose_tolerance_fraction": 0}}
DOSES = {"caustic_soda": 240.0}
SURE = Uncertainty(analysis_percent=0.0, ph=0.0, carried_solids_percent=0.0)


def residual(site: Site, metal: str, doses: Mapping[str, float] = DOSES) -> float:
    return float(row_of(assess(site, doses, trim="none"), metal)["residual"])


@pytest.mark.parametrize("factor", [0.3, 1.7, 4.0])
def test_the_factor_multiplies_what_theory_leaves_dissolved(factor: float) -> None:
    site = small_site(EXACT)
    made = assess(with_factors(site, Cu=factor), DOSES, trim="none")
    row = row_of(made, "Cu")
    assert row["residual"] == pytest.approx(factor * residual(site, "Cu"), rel=1e-9)
    assert row["residual_by_theory"] == pytest.approx(residual(site, "Cu"), rel=1e-9)
    assert row_of(made, "Zn")["residual"] == pytest.approx(residual(site, "Zn"), rel=1e-12)
    assert row["carry_over"] == pytest.approx(
        row_of(assess(site, DOSES, trim="none"), "Cu")["carry_over"], rel=1e-9
    )


def test_a_sum_adds_metals_with_their_own_factors() -> None:
    copper, zinc = ({"parameter": m, "daily_mg_per_l": 5} for m in ("Cu", "Zn"))
    limits = own({**copper, "parameter": "sum", "of": ["Cu", "Zn"]}, copper, zinc)
    site = small_site(EXACT, limits)
    made = assess(with_factors(site, Cu=3.0, Zn=0.5), DOSES, trim="none")
    expected = 3.0 * residual(site, "Cu") + 0.5 * residual(site, "Zn")
    assert row_of(made, "Cu + Zn")["residual"] == pytest.approx(expected, rel=1e-9)


def test_no_factor_dissolves_more_than_is_in_the_tank() -> None:
    site = with_factors(small_site(EXACT), Cu=1e6)
    assert residual(site, "Cu") == pytest.approx(58.0, rel=1e-6)
    # nothing is dosed: copper stays as it came, whatever the factor
    untouched: Tree = {"limits": {"ph": {"low": 2.0, "high": 9.5}}}
    assert residual(with_factors(small_site(EXACT, untouched), Cu=4.0), "Cu", {}) == pytest.approx(
        58.0, rel=1e-6
    )


def test_a_factor_of_an_element_goes_to_the_states_that_are_limited() -> None:
    chrome: Tree = {
        "feed": {"analysis": {"Cr(III)": "20 mg/L", "Cr(VI)": "<0.02 mg/L"}},
        **own({"parameter": "Cr(III)", "daily_mg_per_l": 3},
              {"parameter": "Cr", "daily_mg_per_l": 3}),
    }  # fmt: skip
    site = small_site(EXACT, chrome)
    plain = {m: residual(site, m) for m in ("Cr", "Cr(III)")}
    made = with_factors(site, Cr=2.5)
    assert residual(made, "Cr(III)") == pytest.approx(2.5 * plain["Cr(III)"], rel=1e-9)
    by_state = with_factors(site, **{"Cr(III)": 2.5})
    assert residual(by_state, "Cr(III)") == pytest.approx(2.5 * plain["Cr(III)"], rel=1e-9)
    assert residual(by_state, "Cr") > 1.2 * plain["Cr"]


def test_what_theory_says_stands_beside_the_factored_value() -> None:
    site = small_site(EXACT)
    text = assessment_text(assess(with_factors(site, Cu=3.0), DOSES, trim="none").to_dict())
    assert "by theory alone they would be: Cu" in " ".join(text.split())
    assert "by theory alone" not in assessment_text(assess(site, DOSES, trim="none").to_dict())


def test_a_factor_moves_the_plan_and_its_cost() -> None:
    tight = own(
        {"parameter": "Cu", "daily_mg_per_l": 0.6}, {"parameter": "Zn", "daily_mg_per_l": 2}
    )
    site = small_site(tight)
    found = [plan(with_factors(site, Zn=f)).cost["total"] for f in (1.0, 3.0)]
    assert found[0] == pytest.approx(plan(site).cost["total"], rel=1e-9)
    assert found[1] > 1.001 * found[0]


def moved(points: Points, axis: int, step: float) -> Points:
    doses, ph = points.doses.copy(), points.ph.copy()
    if axis < 0:
        ph += step
    else:
        doses[0, axis] += step
    return replace(points, doses=doses, ph=ph)


@pytest.mark.parametrize("copper", [0.4, 3.0, 1e7])
def test_slopes_are_those_of_the_evaluation(copper: float) -> None:
    evaluator = Evaluator(with_factors(small_site(EXACT), Cu=copper, Zn=2.0))
    index = evaluator.plant.index
    doses = np.zeros((1, len(evaluator.plant.names)))
    doses[0, index["hydrated_lime"]] = 120.0
    start = Points(doses, np.array([index["caustic_soda"]]), np.array([9.3]), np.array([-1]))

    def ratios(seen: Evaluation) -> np.ndarray:
        return np.asarray(seen.judged[0].ratio[0])

    exact = evaluator.evaluate(start, slopes=True).judged[0].slope[0]
    for axis, step in ((-1, 1e-3), (index["hydrated_lime"], 1e-2)):
        up, down = (ratios(evaluator.evaluate(moved(start, axis, s))) for s in (step, -step))
        assert exact[:, 1 + axis] == pytest.approx((up - down) / (2 * step), rel=1e-4, abs=1e-8)
    assert np.abs(exact[:, 0]).max() > 0.5 or copper > 1e6


def test_drawn_factors_keep_to_their_interval_in_nine_draws_of_ten() -> None:
    site = with_factors(small_site(), Cu=(2.0, 1.0, 6.0))
    drawn = np.array([d.site.residual_factors["Cu"][0] for d in draw_sites(site, 1000, 3)])
    share = np.mean((drawn >= 1.0) & (drawn <= 6.0))
    assert share == pytest.approx(0.90, abs=4.0 * np.sqrt(0.9 * 0.1 / 1000))
    assert np.median(drawn) == pytest.approx(2.0, rel=0.06)
    assert np.mean(drawn < 1.0) == pytest.approx(0.05, abs=0.03)


def test_dose_factors_of_jar_tests_are_drawn_and_those_of_the_site_file_are_not() -> None:
    base = with_factors(small_site(), Cu=2.0)
    assert base.jar is not None
    lime = FactorFit(factor=1.3, low=1.1, high=1.6, scatter_ln=0.1, jars=5)
    jar = replace(base.jar, dose_factors={"hydrated_lime": lime})

    def factors(own_factor: float) -> set[float]:
        treatment = replace(base.treatment, dose_factors={"hydrated_lime": own_factor})
        site = replace(base, jar=jar, treatment=treatment)
        return {d.site.treatment.dose_factors["hydrated_lime"] for d in draw_sites(site, 20, 1)}

    assert len(factors(1.3)) == 20
    assert min(factors(1.3)) >= 1.0
    assert factors(1.15) == {1.15}


def test_a_site_without_jar_tests_draws_what_it_drew_before() -> None:
    site = small_site()
    with_jar = with_factors(site, Cu=2.0)
    first = next(iter(draw_sites(site, 1, 6)))
    again = next(iter(draw_sites(with_jar, 1, 6)))
    assert (first.constants, first.analysis) == (again.constants, again.analysis)
    assert (dict(first.jar), first.carried) == ({}, again.carried)


def test_a_wide_factor_widens_the_chances() -> None:
    tree = own({"parameter": "Cu", "daily_mg_per_l": 1.0}, {"parameter": "Zn", "daily_mg_per_l": 2})
    base = replace(small_site(EXACT, tree), uncertainty=SURE)
    ratios, numbers = [], np.zeros(0)
    for low, high in ((2.0, 2.0), (0.5, 8.0)):
        site = with_factors(base, Zn=(2.0, low, high))
        evaluator = Evaluator(site)
        index = evaluator.plant.index
        doses = np.zeros((1, len(evaluator.plant.names)))
        points = Points(doses, np.array([index["caustic_soda"]]), np.array([9.3]), np.array([-1]))
        place = Place(evaluator.evaluate(points), 0)
        found = chances_of(evaluator, place, draws=40, seed=2)
        column = found.labels.index("Zn, daily")
        ratios.append(found.ratio[:, column])
        numbers = found.numbers[:, found.number_names.index("jar tests: residual factor of Zn")]
        assert "90 %" in found.to_dict()["assumed"]["jar_tests"]
    # an interval of 0.5 to 8 about 2 at 90 %: ln 4 is 1.645 standard deviations
    added = ratios[1] - ratios[0]
    assert np.var(ratios[1]) > 1.5 * np.var(ratios[0])
    assert np.corrcoef(added, numbers)[0, 1] > 0.95
    assert np.polyfit(numbers, added, 1)[0] == pytest.approx(np.log(4.0) / 1.645, rel=0.15)


def test_weights_for_bounds_never_exceed_a_prediction_that_meets_the_target() -> None:
    evaluator = Evaluator(with_factors(small_site(EXACT), Cu=0.2, Zn=6.0))
    judge, plant = evaluator.judge, evaluator.plant
    copper, zinc = judge.metals.index("Cu"), judge.metals.index("Zn")
    low = judge.jar.least_weights([copper], plant.totals, 1.0)
    assert low.sum() == pytest.approx(0.2 * judge.weights[copper].sum())
    held_down = judge.jar.least_weights([zinc], plant.totals, 1.0)
    assert held_down.sum() == pytest.approx(6.0 * judge.weights[zinc].sum())
    loose = judge.jar.least_weights([zinc], plant.totals, 50.0)
    assert loose.sum() == pytest.approx(judge.weights[zinc].sum())


@pytest.mark.parametrize("copper", [0.2, 5.0])
def test_a_bound_lies_below_the_plan_with_factors(copper: float) -> None:
    tree = own({"parameter": "Cu", "daily_mg_per_l": 0.3}, {"parameter": "Zn", "daily_mg_per_l": 2})
    site = with_factors(small_site(EXACT, tree), Cu=copper)
    found = plan(site)
    bound = prove(Evaluator(site), found.cost["total"], seconds=8.0)
    assert 0.0 < bound.lower_per_year <= found.cost["total"] * (1.0 + 1e-9)
