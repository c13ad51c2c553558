"""Outcomes are told apart, and every answer is checked before anyone sees it."""

from __future__ import annotations

import itertools
import math
import random
from collections.abc import Callable
from dataclasses import dataclass

import pytest

from optimiser.backend import Claim, RawOutcome, SolveRequest
from optimiser.errors import SolverFault
from optimiser.linear_model import Expression, Model, Sense
from optimiser.pulp_backends import HighsBackend
from optimiser.solver import SOLVERS, Solver, Termination, open_solver
from tests.optimiser.solver_models import blend, knapsacks, market_split, random_mixed_model


@pytest.fixture(params=SOLVERS)
def name(request: pytest.FixtureRequest) -> str:
    return str(request.param)


# --- outcomes ----------------------------------------------------------------------------------


def test_a_linear_model_comes_out_with_cost_bound_and_version(name: str) -> None:
    report = open_solver(name, seed=7).solve(blend())
    assert report.termination is Termination.OPTIMAL
    assert report.objective == pytest.approx(100.0 + 2.0 * 5.0 + 5.0 * 7.0, rel=1e-9)
    assert report.bound == pytest.approx(report.objective, rel=1e-9)
    assert report.gap == pytest.approx(0.0, abs=1e-9)
    assert report.values == pytest.approx({"cheap": 5.0, "dear": 7.0})
    assert (report.solver, report.seed) == (name, 7)
    assert report.version.split()[0].lower() == name
    assert report.version.split()[1][0].isdigit()
    assert 0.0 < report.seconds < 60.0


def test_infeasible_is_told(name: str) -> None:
    model = blend()
    model.add_row("little", {"cheap": 1.0, "dear": 1.0}, Sense.AT_MOST, 3.0)
    report = open_solver(name).solve(model)
    assert report.termination is Termination.INFEASIBLE
    assert not report.termination.has_solution
    assert report.values == {}
    assert math.isnan(report.objective)
    assert report.bound is None
    assert report.gap is None


def test_infeasible_in_whole_numbers_only_is_told(name: str) -> None:
    model = Model("odd")
    model.add_variable("a", high=10.0, integer=True)
    model.add_variable("b", high=10.0, integer=True)
    model.add_row("odd", {"a": 2.0, "b": -2.0}, Sense.EQUAL, 1.0)
    model.add_cost("c", Expression({"a": 1.0, "b": 1.0}))
    assert open_solver(name).solve(model).termination is Termination.INFEASIBLE
    assert open_solver(name).solve(model.relaxed()).termination is Termination.OPTIMAL


@pytest.mark.parametrize("integer", [False, True])
@pytest.mark.parametrize("contradiction", [False, True])
def test_unbounded_is_told_from_infeasible(
    name: str, *, integer: bool, contradiction: bool
) -> None:
    model = Model("open end")
    model.add_variable("a", integer=integer)
    model.add_variable("b")
    model.add_variable("z", high=1.0)
    model.add_row("r", {"a": 1.0, "b": -2.0}, Sense.AT_LEAST, 1.5)
    if contradiction:
        model.add_row("never", {"z": 1.0}, Sense.AT_LEAST, 2.0)
    model.add_cost("c", Expression({"a": -1.0, "b": 1.0}))
    expected = Termination.INFEASIBLE if contradiction else Termination.UNBOUNDED
    assert open_solver(name).solve(model).termination is expected


def test_a_time_limit_without_a_solution_is_told(name: str) -> None:
    report = open_solver(name, time_limit_s=0.3).solve(market_split())
    assert report.termination is Termination.TIME_LIMIT_WITHOUT_SOLUTION
    assert report.values == {}


def test_a_time_limit_with_a_solution_keeps_it_and_its_gap(name: str) -> None:
    model = knapsacks()
    report = open_solver(name, time_limit_s=0.5).solve(model)
    assert report.termination is Termination.TIME_LIMIT_WITH_SOLUTION
    assert model.violations(report.values) == []
    assert report.objective == model.cost(report.values)["total"]
    assert report.bound is not None
    assert report.bound < report.objective
    assert report.gap is not None
    assert 0.0 < report.gap < 0.2


def test_a_linear_model_stopped_half_way_gives_no_solution() -> None:
    rng = random.Random(1)
    model = Model("long")
    keys = [model.add_variable(f"x{i}") for i in range(300)]
    for j in range(300):
        terms = {key: rng.random() for key in keys}
        model.add_row(f"r{j}", terms, Sense.AT_LEAST, 1.0)
    model.add_cost("c", Expression({key: rng.random() for key in keys}))
    report = open_solver("highs", time_limit_s=1e-3).solve(model)
    assert report.termination is Termination.TIME_LIMIT_WITHOUT_SOLUTION


def test_models_without_variables_rows_or_costs_are_no_special_case(name: str) -> None:
    solver = open_solver(name)
    empty = Model("empty")
    empty.add_cost("fixed", Expression({}, 3.0))
    assert solver.solve(empty).objective == 3.0
    empty.add_row("never", {}, Sense.AT_LEAST, 1.0)
    assert solver.solve(empty).termination is Termination.INFEASIBLE
    alone = Model("alone")
    alone.add_variable("a", low=1.0, high=2.0)
    alone.add_variable("idle", low=4.0, high=5.0)
    alone.add_cost("c", Expression({"a": -1.0}))
    report = solver.solve(alone)
    assert report.values["a"] == 2.0
    assert 4.0 <= report.values["idle"] <= 5.0
    free = Model("free")
    free.add_variable("a", low=-math.inf, high=-1.5, integer=True)
    assert solver.solve(free).values["a"] <= -2.0


def test_names_that_look_alike_stay_apart(name: str) -> None:
    model = Model("names with blanks")
    keys = ["a-b", "a_b", "a b", "a[b", "x000001", "bought ü"]
    for weight, key in enumerate(keys, start=1):
        model.add_variable(key)
        model.add_row(f"row {key}", {key: 1.0}, Sense.AT_LEAST, float(weight))
    model.add_cost("c", Expression(dict.fromkeys(keys, 1.0)))
    report = open_solver(name).solve(model)
    assert report.values == pytest.approx({key: w for w, key in enumerate(keys, start=1)})


@pytest.mark.parametrize("seed", range(8))
def test_both_solvers_and_enumeration_agree(seed: int) -> None:
    model = random_mixed_model(seed)
    found = {name: open_solver(name).solve(model) for name in SOLVERS}
    ranges = [range(int(model.variables[key].high) + 1) for key in model.integers]
    least = math.inf
    for choice in itertools.product(*ranges):
        values = dict(zip(model.integers, map(float, choice), strict=True))
        rest = {**found["highs"].values, **values}
        linear = open_solver("highs").solve(model.with_integers_fixed(rest))
        if linear.termination.has_solution:
            least = min(least, linear.objective)
    for report in found.values():
        assert report.termination is Termination.OPTIMAL
        assert report.objective == pytest.approx(least, rel=3e-6)


def test_small_coefficients_are_not_lost_in_tolerances(name: str) -> None:
    model = Model("traces")
    model.add_variable("x", high=100.0)
    model.add_row("trace", {"x": 1e-9}, Sense.AT_LEAST, 5e-9)
    model.add_cost("c", Expression({"x": 1e-9}))
    report = open_solver(name).solve(model)
    assert report.values["x"] == pytest.approx(5.0, rel=1e-6)
    assert report.objective == pytest.approx(5e-9, rel=1e-6)
    assert report.marginal_values["trace"] == pytest.approx(1.0, rel=1e-6)


# --- marginal values ---------------------------------------------------------------------------


@pytest.mark.parametrize("scale", [1.0, 1e-4])
def test_marginal_values_are_the_slopes_of_the_least_cost(name: str, scale: float) -> None:
    solver = open_solver(name)
    report = solver.solve(blend(scale=scale))
    step = 1e-3
    by_need = (
        solver.solve(blend(12.0 + step, scale=scale)).objective
        - solver.solve(blend(12.0 - step, scale=scale)).objective
    ) / (2.0 * step * scale)
    by_room = (
        solver.solve(blend(room=5.0 + step, scale=scale)).objective
        - solver.solve(blend(room=5.0 - step, scale=scale)).objective
    ) / (2.0 * step)
    assert by_need == pytest.approx(5.0 / scale, rel=1e-4)
    assert report.marginal_values["need"] == pytest.approx(by_need, rel=1e-4)
    assert report.marginal_values["room"] == pytest.approx(by_room, rel=1e-4)


def test_marginal_values_of_random_models_match_finite_differences(name: str) -> None:
    """Away from kinks, which are met by comparing the slopes on both sides first."""
    solver = open_solver(name)
    compared = 0
    for seed in range(4):
        model = random_mixed_model(seed).relaxed()
        base = solver.solve(model)
        for key, row in list(model.rows.items()):
            slopes = []
            for step in (-1e-3, 1e-3):
                moved = random_mixed_model(seed).relaxed()
                del moved.rows[key]
                moved.add_row(key, row.terms, row.sense, row.rhs + step)
                slopes.append((solver.solve(moved).objective - base.objective) / step)
            if slopes[0] == pytest.approx(slopes[1], abs=1e-3):
                compared += 1
                assert base.marginal_values[key] == pytest.approx(slopes[0], abs=2e-3)
    assert compared >= 12


def test_reduced_costs_are_what_forcing_a_variable_costs(name: str) -> None:
    report = open_solver(name).solve(blend(need=4.0))
    assert report.values["dear"] == 0.0
    assert report.reduced_costs["dear"] == pytest.approx(3.0)
    assert report.reduced_costs["cheap"] == pytest.approx(0.0, abs=1e-9)


def test_a_mixed_integer_model_gets_marginal_values_from_its_fixed_model(name: str) -> None:
    model = Model("least order")
    model.add_variable("bought", high=50.0)
    model.add_variable("used", high=1.0, integer=True)
    model.add_row("need", {"bought": 1.0}, Sense.AT_LEAST, 7.0)
    model.add_row("link", {"bought": 1.0, "used": -50.0}, Sense.AT_MOST, 0.0)
    model.add_cost("goods", Expression({"bought": 3.0, "used": 40.0}))
    solver = open_solver(name)
    report = solver.solve(model)
    assert report.objective == pytest.approx(61.0)
    assert report.marginal_values == {}
    assert report.reduced_costs == {}
    fixed = solver.solve_with_integers_fixed(model, report.values)
    assert fixed.objective == pytest.approx(61.0)
    assert fixed.marginal_values["need"] == pytest.approx(3.0)


# --- answers that do not hold ------------------------------------------------------------------


@dataclass(frozen=True)
class Fake:
    """A backend that says what it is told to."""

    answer: Callable[[Model], RawOutcome]
    name: str = "fake"

    def run(self, model: Model, request: SolveRequest) -> RawOutcome:
        del request
        return self.answer(model)


def fake(
    values: dict[str, float], claim: Claim = Claim.OPTIMAL, *,
    bound: float | None = None, prices: dict[str, float] | None = None,
) -> Solver:  # fmt: skip
    outcome = RawOutcome(
        claim=claim, version="fake 1", values=values, bound=bound, marginal_values=prices
    )
    return Solver(Fake(lambda _: outcome))


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ({"cheap": 0.0, "dear": 0.0}, "need: 0 >= 12 does not hold"),
        ({"cheap": 6.0, "dear": 6.0}, "room: 6 <= 5 does not hold"),
        ({"cheap": -1.0, "dear": 13.0}, "cheap = -1 lies outside 0 to inf"),
        ({"cheap": math.nan, "dear": 12.0}, "cheap = nan lies outside 0 to inf"),
        ({"cheap": math.inf, "dear": 12.0}, "room: inf <= 5 does not hold"),
        ({"dear": 12.0}, "cheap = nan lies outside 0 to inf"),
        ({}, "dear = nan lies outside 0 to inf"),
        ({"cheap": 5.0, "dear": 6.99}, "need: 11.99 >= 12 does not hold"),
    ],
)
def test_a_solution_that_does_not_hold_is_a_fault(values: dict[str, float], said: str) -> None:
    with pytest.raises(SolverFault) as caught:
        fake(values).solve(blend())
    assert str(caught.value).startswith(
        "fake on model 'blend': returned a solution that does not hold\n    "
    )
    assert said in str(caught.value)
    assert caught.value.exit_code == 1


def test_a_fraction_where_a_whole_number_belongs_is_a_fault() -> None:
    model = blend()
    model.add_variable("open", high=1.0, integer=True)
    with pytest.raises(SolverFault, match=r"open = 0\.5 is no whole number"):
        fake({"cheap": 5.0, "dear": 7.0, "open": 0.5}).solve(model)


def test_a_dear_solution_sold_as_optimal_is_a_fault() -> None:
    dear = {"cheap": 0.0, "dear": 12.0}
    honest_prices = {"need": 5.0, "room": -3.0}
    with pytest.raises(SolverFault, match="calls 160 optimal, but only 145 is proven"):
        fake(dear, prices=honest_prices).solve(blend())
    with pytest.raises(SolverFault, match="calls 160 optimal, but only -inf is proven"):
        fake(dear, prices={"need": 5.0, "room": 3.0}).solve(blend())
    with pytest.raises(SolverFault, match="calls 160 optimal, but only 100 is proven"):
        fake(dear, prices={}).solve(blend())
    with pytest.raises(SolverFault, match="calls 160 optimal, but only 145 is proven"):
        fake(dear, bound=145.0).solve(blend())


def test_a_bound_above_the_cost_is_a_fault() -> None:
    good = {"cheap": 5.0, "dear": 7.0}
    with pytest.raises(SolverFault, match="proves 150 as the least cost of a solution that costs"):
        fake(good, bound=150.0).solve(blend())
    with pytest.raises(SolverFault, match="proves nan"):
        fake(good, bound=math.nan).solve(blend())


def test_an_open_end_of_a_bounded_model_is_not_believed_when_it_has_no_solution() -> None:
    with pytest.raises(SolverFault, match="does not hold"):
        Solver(
            Fake(
                lambda model: RawOutcome(
                    claim=Claim.UNBOUNDED if model.costs else Claim.OPTIMAL,
                    version="fake 1", values={"cheap": 9.0, "dear": 0.0},
                )
            )
        ).solve(blend())  # fmt: skip


def test_values_at_the_time_limit_that_do_not_hold_count_as_none() -> None:
    report = fake({"cheap": 0.0, "dear": 0.0}, Claim.STOPPED_WITH_VALUES).solve(blend())
    assert report.termination is Termination.TIME_LIMIT_WITHOUT_SOLUTION
    assert report.values == {}


def test_rounding_within_tolerance_is_settled_exactly() -> None:
    model = blend()
    model.add_variable("open", high=1.0, integer=True)
    close = {"cheap": 5.0000001, "dear": 6.9999999, "open": 0.9999999}
    report = fake(close, bound=145.0).solve(model)
    assert report.values["open"] == 1.0
    model.add_variable("low", low=2.0)
    assert fake({**close, "low": 1.9999999}).solve(model).values["low"] == 2.0


def leaking_model() -> Model:
    model = Model("leak")
    model.add_variable("x", high=1e5)
    model.add_variable("y", high=10.0)
    model.add_variable("open", high=1.0, integer=True)
    model.add_row("need", {"x": 1.0, "y": 1.0}, Sense.AT_LEAST, 0.5)
    model.add_row("link", {"x": 1.0, "open": -1e5}, Sense.AT_MOST, 0.0)
    model.add_cost("c", Expression({"x": 1.0, "y": 2.0, "open": 50.0}))
    return model


def half_true(values: dict[str, float]) -> Solver:
    """Say these values of a mixed-integer model, and solve linear ones properly."""

    def answer(asked: Model) -> RawOutcome:
        if asked.integers:
            return RawOutcome(claim=Claim.OPTIMAL, version="fake 1", values=values)
        return HighsBackend().run(asked, SolveRequest())

    return Solver(Fake(answer))


def test_what_leaks_through_a_nearly_closed_binary_is_taken_back() -> None:
    report = half_true({"x": 0.5, "y": 0.0, "open": 5e-6}).solve(leaking_model())
    assert report.values == pytest.approx({"x": 0.0, "y": 0.5, "open": 0.0})
    assert report.objective == pytest.approx(1.0)


def test_a_half_open_binary_is_not_taken_back() -> None:
    with pytest.raises(SolverFault, match=r"open = 0\.01 is no whole number"):
        half_true({"x": 0.5, "y": 0.0, "open": 0.01}).solve(leaking_model())
