"""Published linear and mixed-integer models come out at their published optima, on both solvers."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest
import yaml

from optimiser.linear_model import Expression, Model, Sense
from optimiser.solver import SOLVERS, Solver, SolveReport, Termination, open_solver

DATA: dict[str, Any] = yaml.safe_load(
    (Path(__file__).parents[1] / "reference" / "published_models.yaml").read_text("utf-8")
)


@pytest.fixture(params=SOLVERS)
def solver(request: pytest.FixtureRequest) -> Solver:
    return open_solver(request.param)


def solved(solver: Solver, model: Model) -> SolveReport:
    report = solver.solve(model)
    assert report.termination is Termination.OPTIMAL
    assert report.bound is not None
    assert report.bound == pytest.approx(report.objective, rel=2e-6)
    return report


def minimal_cost_model(name: str, price: dict[str, float], **limits: Any) -> Model:
    model = Model(name)
    for key in price:
        low, high = limits.get(key, (0.0, math.inf))
        model.add_variable(key, low=low, high=high)
    model.add_cost("goods", Expression(price))
    return model


def test_the_diet_with_limits_h08(solver: Solver) -> None:
    case = DATA["H08"]
    limits = case["limits"]
    model = minimal_cost_model(
        "H08", case["cost"], fish=(limits["fish_min"], math.inf), milk=(0.0, limits["milk_max"])
    )
    model.add_row("calories", case["calories"], Sense.AT_LEAST, limits["calories_min"])
    model.add_row("protein", case["protein"], Sense.AT_MOST, limits["protein_max"])
    model.add_row("fat", case["fat"], Sense.AT_LEAST, limits["fat_min"])
    model.add_row("starch", case["carbohydrate"], Sense.AT_LEAST, limits["carbohydrate_min"])
    report = solved(solver, model)
    assert report.objective == pytest.approx(case["total_cost"], rel=case["relative"])
    for food in case["cost"]:
        expected = case["amounts"].get(food, 0.0)
        assert report.values[food] == pytest.approx(expected, abs=case["amounts_absolute"])


@pytest.mark.parametrize("kind", ["linear", "whole"])
def test_the_diet_in_servings_h09(solver: Solver, kind: str) -> None:
    case = DATA["H09"]
    model = Model("H09")
    for food, row in case["foods"].items():
        model.add_variable(food, high=row[4], integer=True)
    for column, nutrient in enumerate(case["columns"][:3]):
        terms = {food: row[column] for food, row in case["foods"].items()}
        model.add_row(nutrient, terms, Sense.AT_LEAST, case["minimum"][nutrient])
    model.add_cost("price", Expression({food: row[3] for food, row in case["foods"].items()}))
    report = solved(solver, model if kind == "whole" else model.relaxed())
    assert report.objective == pytest.approx(case[kind], rel=case["relative"])
    for food in case["foods"]:
        expected = case[f"{kind}_servings"].get(food, 0.0)
        assert report.values[food] == pytest.approx(expected, abs=1e-6)


def blend_h10(ingredients: list[str], *, chicken_whole: bool = False) -> Model:
    case = DATA["H10"]
    needs = case["per_100_g"]
    model = Model("H10")
    for name in ingredients:
        model.add_variable(name, high=100.0, integer=chicken_whole and name == "chicken")
    model.add_row("sum", dict.fromkeys(ingredients, 1.0), Sense.EQUAL, needs["sum"])
    for nutrient, sense in [
        ("protein_min", Sense.AT_LEAST), ("fat_min", Sense.AT_LEAST),
        ("fibre_max", Sense.AT_MOST), ("salt_max", Sense.AT_MOST),
    ]:  # fmt: skip
        content = case[nutrient.partition("_")[0]]
        terms = {name: content[name] for name in ingredients}
        model.add_row(nutrient, terms, sense, needs[nutrient])
    model.add_cost("price", Expression({name: case["price"][name] for name in ingredients}))
    return model


def test_the_blends_h10(solver: Solver) -> None:
    case = DATA["H10"]
    two = ["chicken", "beef"]
    rel = case["relative"]
    linear = solved(solver, blend_h10(two))
    assert linear.objective == pytest.approx(case["two_ingredients"], rel=rel)
    whole = solved(solver, blend_h10(two, chicken_whole=True))
    assert whole.objective == pytest.approx(case["two_ingredients_chicken_whole"], rel=rel)
    six = solved(solver, blend_h10(list(case["price"])))
    assert six.objective == pytest.approx(case["six_ingredients"], rel=rel)
    for name in case["price"]:
        assert six.values[name] == pytest.approx(case["six_amounts"].get(name, 0.0), abs=1e-6)


def test_the_feed_mix_h11(solver: Solver) -> None:
    case = DATA["H11"]
    limits = case["limits"]
    model = minimal_cost_model("H11", case["price_cents_per_kg"])
    model.add_row("sum", dict.fromkeys(case["price_cents_per_kg"], 1.0), Sense.EQUAL, 1.0)
    model.add_row("calcium low", case["calcium"], Sense.AT_LEAST, limits["calcium"][0])
    model.add_row("calcium high", case["calcium"], Sense.AT_MOST, limits["calcium"][1])
    model.add_row("protein", case["protein"], Sense.AT_LEAST, limits["protein_min"])
    model.add_row("fibre", case["fibre"], Sense.AT_MOST, limits["fibre_max"])
    report = solved(solver, model)
    assert report.objective == pytest.approx(case["cost_cents_per_kg"], rel=case["relative"])
    for name, amount in case["amounts"].items():
        assert report.values[name] == pytest.approx(amount, abs=case["amounts_absolute"])


def test_the_refinery_h13(solver: Solver) -> None:
    case = DATA["H13"]
    crudes, products = case["crude_cost"], case["sale"]
    model = Model("H13")
    barrels = {(c, g): model.add_variable(f"barrels {c} {g}") for c in crudes for g in products}
    adverts = {g: model.add_variable(f"adverts {g}") for g in products}
    for g in products:
        made = {barrels[c, g]: 1.0 for c in crudes}
        pull = {**made, adverts[g]: -case["demand_per_advertising_unit"]}
        model.add_row(f"demand {g}", pull, Sense.EQUAL, case["demand"][g])
        octane = {barrels[c, g]: case["octane"][c] - case["octane_min"][g] for c in crudes}
        model.add_row(f"octane {g}", octane, Sense.AT_LEAST, 0.0)
        sulfur = {barrels[c, g]: case["sulfur"][c] - case["sulfur_max"][g] for c in crudes}
        model.add_row(f"sulfur {g}", sulfur, Sense.AT_MOST, 0.0)
        for c in crudes:
            margin = case["sale"][g] - case["process_cost"] - crudes[c]
            model.add_cost("margin", Expression({barrels[c, g]: -margin}))
        model.add_cost("adverts", Expression({adverts[g]: 1.0}))
    for c in crudes:
        used = {barrels[c, g]: 1.0 for g in products}
        model.add_row(f"crude {c}", used, Sense.AT_MOST, case["crude_max"])
    model.add_row("capacity", dict.fromkeys(barrels.values(), 1.0), Sense.AT_MOST, case["capacity"])
    report = solved(solver, model)
    assert -report.objective == pytest.approx(case["profit"], rel=case["relative"])
    assert -report.objective != pytest.approx(case["profit_printed"], rel=case["relative"])
    assert report.values[adverts["g2"]] == pytest.approx(case["advertising_g2"], rel=1e-6)
    made_in_all = sum(report.values[key] for key in barrels.values())
    assert made_in_all == pytest.approx(case["production"], rel=1e-6)
    assert model.cost(report.values)["adverts"] == pytest.approx(750.0, rel=1e-6)


def test_the_sites_to_open_h14(solver: Solver) -> None:
    case = DATA["H14"]
    model = Model("H14")
    for site in case["sites"]:
        model.add_variable(f"open {site}", high=1.0, integer=True)
        model.add_cost("opening", Expression({f"open {site}": case["open_cost"]}))
    for region, costs in case["assign"].items():
        keys = [model.add_variable(f"{region} to {site}", high=1.0) for site in case["sites"]]
        model.add_row(f"serve {region}", dict.fromkeys(keys, 1.0), Sense.EQUAL, 1.0)
        model.add_cost("assignment", Expression(dict(zip(keys, costs, strict=True))))
        for key, site in zip(keys, case["sites"], strict=True):
            model.add_row(f"link {key}", {key: 1.0, f"open {site}": -1.0}, Sense.AT_MOST, 0.0)
    report = solved(solver, model)
    assert report.objective == pytest.approx(case["total"], rel=case["relative"])
    opened = [site for site in case["sites"] if report.values[f"open {site}"] == 1.0]
    assert opened == case["open"]


def test_the_transport_h16(solver: Solver) -> None:
    case = DATA["H16"]
    model = Model("H16")
    plants, markets = range(len(case["capacity"])), range(len(case["demand"]))
    way = {(i, j): model.add_variable(f"from {i} to {j}") for i in plants for j in markets}
    for i in plants:
        terms = {way[i, j]: 1.0 for j in markets}
        model.add_row(f"capacity {i}", terms, Sense.AT_MOST, case["capacity"][i])
    for j in markets:
        terms = {way[i, j]: 1.0 for i in plants}
        model.add_row(f"demand {j}", terms, Sense.AT_LEAST, case["demand"][j])
    freight = {
        key: case["freight_per_1000_miles"] * case["distance_1000_miles"][i][j] / 1000.0
        for (i, j), key in way.items()
    }
    model.add_cost("freight", Expression(freight))
    report = solved(solver, model)
    assert report.objective == pytest.approx(case["total_thousand"], rel=case["relative"])


def test_the_vitamins_h17(solver: Solver) -> None:
    case = DATA["H17"]
    foods = case["foods"]
    model = Model("H17")
    for food in foods:
        model.add_variable(food, high=case["most_packages"])
    for column, vitamin in enumerate(case["columns"][1:], start=1):
        terms = {food: row[column] for food, row in foods.items()}
        model.add_row(f"{vitamin} low", terms, Sense.AT_LEAST, case["minimum"])
        model.add_row(f"{vitamin} high", terms, Sense.AT_MOST, case["maximum"])
    model.add_cost("price", Expression({food: row[0] for food, row in foods.items()}))
    report = solved(solver, model)
    assert report.objective == pytest.approx(case["total"], rel=case["relative"])
    for food in foods:
        expected = case["packages"].get(food, 0.0)
        assert report.values[food] == pytest.approx(expected, abs=case["packages_absolute"])
