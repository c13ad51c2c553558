"""A model takes sound numbers only, tells what a solution misses, and reads as algebra."""

from __future__ import annotations

import math

import pytest

from optimiser.errors import ModelError
from optimiser.linear_model import FEASIBILITY_TOLERANCE, Expression, Model, Sense


def small_model() -> Model:
    model = Model("small")
    model.add_variable("x", high=4.0)
    model.add_variable("n", low=-2.0, high=3.0, integer=True)
    model.add_row("floor", {"x": 2.0, "n": -1.0}, Sense.AT_LEAST, 1.0)
    model.add_row("even", {"x": 1.0, "n": 1.0}, Sense.EQUAL, 2.0)
    model.add_cost("goods", Expression({"x": 3.0}, 5.0))
    model.add_cost("freight", Expression({"x": 0.5, "n": 1.0}))
    return model


@pytest.mark.parametrize("number", [math.nan, math.inf, -math.inf])
def test_numbers_that_are_none_are_refused_wherever_they_come(number: float) -> None:
    model = small_model()
    with pytest.raises(ModelError, match="row 'r': 'x' comes with"):
        model.add_row("r", {"x": number}, Sense.AT_MOST, 1.0)
    with pytest.raises(ModelError, match="row 'r': 'constant' comes with"):
        model.add_row("r", {"x": 1.0}, Sense.AT_MOST, number)
    with pytest.raises(ModelError, match="cost 'c': 'x' comes with"):
        model.add_cost("c", Expression({"x": number}))
    with pytest.raises(ModelError, match="cost 'c': 'constant' comes with"):
        model.add_cost("c", Expression({}, number))
    assert list(model.rows) == ["floor", "even"]
    assert list(model.costs) == ["goods", "freight"]


@pytest.mark.parametrize(
    ("low", "high"), [(1.0, 0.0), (math.nan, 1.0), (0.0, math.nan), (math.inf, math.inf)]
)
def test_a_range_that_is_none_is_refused(low: float, high: float) -> None:
    with pytest.raises(ModelError, match="variable 'y' from"):
        small_model().add_variable("y", low=low, high=high)


def test_keys_are_used_once_and_known() -> None:
    model = small_model()
    with pytest.raises(ModelError, match="variable 'x' is there already"):
        model.add_variable("x")
    with pytest.raises(ModelError, match="row 'floor' is there already"):
        model.add_row("floor", {"x": 1.0}, Sense.AT_MOST, 1.0)
    with pytest.raises(ModelError, match="row 'r': no variable y, z"):
        model.add_row("r", {"z": 1.0, "y": 2.0}, Sense.AT_MOST, 1.0)
    with pytest.raises(ModelError, match="total is the sum"):
        model.add_cost("total", Expression({"x": 1.0}))


def test_costs_are_kept_apart_by_cause() -> None:
    model = small_model()
    values = {"x": 1.5, "n": 2.0}
    assert model.cost(values) == {"goods": 9.5, "freight": 2.75, "total": 12.25}
    assert model.objective.value(values) == 12.25
    model.add_cost("goods", Expression({"n": 10.0}, 1.0))
    assert model.cost(values)["goods"] == 30.5


def test_expressions_add_and_scale() -> None:
    left = Expression({"x": 1.0, "y": 2.0}, 3.0)
    both = left.plus(Expression({"y": -2.0, "z": 4.0}, 1.0)).times(-0.5)
    values = {"x": 5.0, "y": 7.0, "z": 11.0}
    assert both.value(values) == -0.5 * (5.0 + 3.0 + 44.0 + 1.0)


def test_a_sound_solution_has_no_violations() -> None:
    assert small_model().violations({"x": 1.0, "n": 1.0}) == []


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ({"x": 5.0, "n": -3.0}, "x = 5 lies outside 0 to 4"),
        ({"x": 1.5, "n": 0.5}, "n = 0.5 is no whole number"),
        ({"x": 0.0, "n": 2.0}, "floor: -2 >= 1 does not hold"),
        ({"x": 1.0, "n": 0.0}, "even: 1 = 2 does not hold"),
        ({"x": math.nan, "n": 1.0}, "x = nan lies outside 0 to 4"),
        ({"n": 1.0}, "x = nan lies outside 0 to 4"),
    ],
)
def test_what_a_solution_misses_is_named(values: dict[str, float], said: str) -> None:
    assert said in small_model().violations(values)


@pytest.mark.parametrize("scale", [1e-6, 1.0, 1e6])
def test_rows_are_held_to_the_tolerance_of_their_own_scale(scale: float) -> None:
    model = Model("scaled")
    model.add_variable("x")
    model.add_row("r", {"x": scale}, Sense.AT_LEAST, 7.0 * scale)
    assert model.violations({"x": 7.0 * (1.0 - 0.9 * FEASIBILITY_TOLERANCE)}) == []
    assert len(model.violations({"x": 7.0 * (1.0 - 1.1 * FEASIBILITY_TOLERANCE)})) == 1


def test_the_worst_violation_comes_first() -> None:
    model = Model("two")
    model.add_variable("x")
    model.add_row("near", {"x": 1.0}, Sense.AT_LEAST, 1.01)
    model.add_row("far", {"x": 1.0}, Sense.AT_LEAST, 50.0)
    assert [said.split(":")[0] for said in model.violations({"x": 1.0})] == ["far", "near"]


def test_the_highest_value_follows_from_the_ranges() -> None:
    model = small_model()
    assert model.highest(Expression({"x": 2.0, "n": -1.0}, 1.0)) == 2 * 4 + 2 + 1
    model.add_variable("free", low=-math.inf)
    assert model.highest(Expression({"free": -1.0})) == math.inf
    assert model.highest(Expression({"free": 0.0}, 3.0)) == 3.0


def test_fixing_and_relaxing_leave_the_model_itself_alone() -> None:
    model = small_model()
    fixed = model.with_integers_fixed({"x": 0.3, "n": 0.9999999})
    assert (fixed.variables["n"].low, fixed.variables["n"].high) == (1.0, 1.0)
    assert fixed.integers == ()
    assert model.relaxed().integers == ()
    assert model.without_costs().cost({}) == {"total": 0.0}
    assert model.integers == ("n",)
    assert (model.variables["n"].low, model.variables["n"].high) == (-2.0, 3.0)
    assert list(model.costs) == ["goods", "freight"]
    model.relaxed().add_variable("another")
    assert "another" not in model.variables


def test_a_model_reads_as_algebra() -> None:
    assert small_model().to_text() == (
        "model small\n"
        "\n"
        "minimise\n"
        "  goods: 3 x + 5\n"
        "  freight: 0.5 x + n\n"
        "\n"
        "subject to\n"
        "  floor: 2 x - n >= 1\n"
        "  even: x + n = 2\n"
        "\n"
        "where\n"
        "  x: number, 0 to 4\n"
        "  n: whole number, -2 to 3\n"
    )
