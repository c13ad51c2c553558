"""Trade-offs: cost never falls as a cap tightens, every point holds, and the ends are ends."""

from __future__ import annotations

import csv
import json
from dataclasses import replace
from functools import cache
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

import optimiser
from optimiser import cli
from optimiser.errors import TradeOffError
from optimiser.evaluation import Evaluator
from optimiser.points import Points
from optimiser.recipes import trim_for
from optimiser.render_trade_off import trade_off_text
from optimiser.site import PhWindow, Site
from optimiser.trade_axes import MARGIN
from optimiser.trade_curve import LEAST_SLACK, TradeOff, undominated
from tests.optimiser.small_sites import (
    COPPER_ZINC,
    OFFERS,
    SILVER,
    SULFATE,
    merged,
    price_book,
    small_site,
)

# calcium weighs less per charge than sodium, but lime costs more here
DEAR_LIME = {"treatment": {"equipment_cost_per_year": {"hydrated_lime": 9000}}}


@cache
def sulfate_site() -> Site:
    """Lime makes gypsum in this water, caustic soda does not."""
    return small_site(SULFATE)


@cache
def dear_lime_site() -> Site:
    return small_site(DEAR_LIME)


@cache
def curve(against: str) -> TradeOff:
    site = dear_lime_site() if against == "TDS" else sulfate_site()
    return optimiser.trade_off(site, against, points=3 if against == MARGIN else 5)


def test_cost_never_falls_as_less_sludge_is_allowed() -> None:
    points = curve("sludge").points
    wet = [point["sludge_wet_t_per_year"] for point in points]
    total = [point["total"] for point in points]
    assert len(points) >= 4
    assert wet == sorted(wet, reverse=True)
    assert total == sorted(total)
    assert total[-1] > 1.2 * total[0]
    assert all(point["sludge_wet_t_per_year"] <= point["cap"] * (1 + 1e-9) for point in points)


def test_cost_never_falls_as_the_margin_tightens() -> None:
    points = curve("margin").points
    margins = [point["design_margin"] for point in points]
    assert margins == sorted(margins, reverse=True)
    assert margins[0] == 1.0
    assert 0.8 in margins
    for looser, tighter in pairwise(points):
        assert tighter["total"] >= looser["total"] * (1.0 - 1e-9)


@pytest.mark.parametrize("against", ["TDS", "sludge", "margin", "ph"])
def test_doses_of_every_point_comply_and_cost_the_same_when_assessed(against: str) -> None:
    for point in curve(against).points:
        site = dear_lime_site() if against == "TDS" else sulfate_site()
        if against == "margin":
            site = replace(site, design_margin=point["design_margin"])
        found = optimiser.assess(site, point["doses"])
        assert found.compliant, point
        assert found.cost["total"] == pytest.approx(point["total"], rel=1e-6)
        assert found.sludge["wet_t_per_year"] == pytest.approx(
            point["sludge_wet_t_per_year"], rel=1e-6
        )
        tds = found.data["burden"]["TDS"]["effluent_mg_per_l"]
        assert tds == pytest.approx(point["tds_mg_per_l"], rel=1e-6)


@pytest.mark.parametrize("against", ["TDS", "sludge"])
def test_the_first_point_is_the_cheapest_plan(against: str) -> None:
    site = dear_lime_site() if against == "TDS" else sulfate_site()
    first = curve(against).points[0]
    assert first["is_plan"]
    assert first["total"] == pytest.approx(optimiser.plan(site).cost["total"], rel=1e-6)


def least_tds_on_a_grid(site: Site) -> float:
    """Least mean TDS of complying points, over set points and shares of lime beside caustic."""
    evaluator = Evaluator(site)
    caustic, lime = (evaluator.plant.index[n] for n in ("caustic_soda", "hydrated_lime"))
    cells = [(caustic, ph, dose) for ph in np.arange(7.5, 10.51, 0.1)
             for dose in (0.0, 20.0, 60.0, 120.0, 180.0, 215.0, 225.0)]  # fmt: skip
    cells += [(lime, ph, 0.0) for ph in np.arange(7.5, 10.51, 0.02)]
    doses = np.zeros((len(cells), len(evaluator.plant.names)))
    doses[:, lime] = [dose for _, _, dose in cells]
    ph = np.array([float(p) for _, p, _ in cells])
    points = Points(
        doses, np.array([controller for controller, _, _ in cells]), ph,
        np.array([trim_for(evaluator, p) for p in ph]),
    )  # fmt: skip
    seen = evaluator.evaluate(points)
    tds = np.zeros(len(cells))
    for part in seen.judged:
        nominal = seen.rows.nominal[part.block.rows]
        np.maximum.at(tds, seen.rows.point[part.block.rows[nominal]], part.burden["TDS"][nominal])
    assert seen.feasible.sum() >= 10
    return float(tds[seen.feasible].min())


def test_no_point_of_a_reference_grid_has_less_tds_than_the_tight_end() -> None:
    found = curve("TDS")
    grid = least_tds_on_a_grid(dear_lime_site())
    end = found.points[-1]["tds_mg_per_l"]
    assert end <= grid * (1.0 + 2.0 * LEAST_SLACK)
    assert end < 0.98 * found.points[0]["tds_mg_per_l"]
    assert found.data["least_reached"] <= end


def test_values_below_the_least_are_said_to_have_no_plan() -> None:
    least = curve("TDS").data["least_reached"]
    found = optimiser.trade_off(dear_lime_site(), "TDS", caps=[0.9 * least, 1.01 * least])
    assert found.data["without_plan"] == [0.9 * least]
    assert [point["cap"] for point in found.points] == [1.01 * least]
    text = trade_off_text(found.to_dict())
    assert f"No plan was found below TDS of the mean discharge {least:.4g} mg/L." in text
    assert f"No plan was found at TDS of the mean discharge {0.9 * least:.4g} mg/L." in text


def test_a_point_at_a_set_point_costs_what_a_plan_held_there_costs() -> None:
    points = curve("ph").points
    held = [point["ph_set_point"] for point in points]
    assert held == sorted(held)
    point = points[len(points) // 2]
    window = PhWindow(low=point["ph_set_point"], high=point["ph_set_point"])
    site = sulfate_site()
    plan = optimiser.plan(replace(site, treatment=replace(site.treatment, ph_set_point=window)))
    assert point["total"] == pytest.approx(plan.cost["total"], rel=1e-3)


def test_set_points_without_a_plan_are_listed() -> None:
    # zinc needs a pH near 9, and this window begins at 7.5
    found = curve("ph").data
    assert 7.5 in found["without_plan"]
    assert min(point["ph_set_point"] for point in found["points"]) > 8.0


def test_a_site_without_a_controller_has_no_plan_at_any_set_point() -> None:
    found = optimiser.trade_off(small_site(SILVER), "ph", points=2)
    assert found.points == []
    assert found.data["plan"]["value"] is None
    text = trade_off_text(json.loads(json.dumps(found.to_dict(), allow_nan=False)))
    assert "No plan was found at any of the values asked for." in text


def test_points_that_another_beats_are_left_out_and_of_equals_one_stays() -> None:
    points = [{"x": x, "total": t} for x, t in ((9, 1), (8, 2), (8, 3), (7, 5), (7, 5), (9, 4))]
    kept = undominated(points, "x")
    assert [(p["x"], p["total"]) for p in kept] == [(9, 1), (8, 2), (7, 5)]


def test_the_frame_has_a_row_for_each_point_and_a_column_for_each_dose() -> None:
    found = curve("sludge")
    frame = found.frame()
    assert list(frame["total"]) == [point["total"] for point in found.points]
    assert {"cap", "sludge_wet_t_per_year", "reagents", "dose hydrated_lime"} <= set(frame.columns)


@pytest.mark.parametrize(
    ("against", "points", "caps"),
    [("cost", 5, []), ("TDS", 1, []), ("TDS", 61, []), ("margin", 5, [1.2]), ("TDS", 5, [-1.0])],
)
def test_what_makes_no_curve_is_refused(against: str, points: int, caps: list[float]) -> None:
    with pytest.raises(TradeOffError):
        optimiser.trade_off(dear_lime_site(), against, points, caps=caps)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "site.yaml").write_text(json.dumps(merged(COPPER_ZINC, DEAR_LIME)))
    (tmp_path / "offers.csv").write_text(price_book(OFFERS))
    return tmp_path


def test_the_command_writes_text_data_table_and_chart(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    table, chart = folder / "points.csv", folder / "tds.svg"
    words = ["tradeoff", str(folder), "--against", "TDS", "--points", "2"]
    assert cli.main([*words, "--json", "--csv", str(table), "--chart", str(chart)]) == cli.DONE
    data = json.loads(capsys.readouterr().out)
    assert data["against"]["key"] == "TDS"
    with table.open() as file:
        rows = list(csv.DictReader(file))
    assert [float(row["total"]) for row in rows] == [point["total"] for point in data["points"]]
    assert "<svg" in chart.read_text()
    before = chart.read_bytes()
    assert cli.main([*words, "--chart", str(chart)]) == cli.BAD_INPUT
    assert "give --force to write over it" in capsys.readouterr().err
    assert chart.read_bytes() == before


def test_a_chart_of_another_format_is_refused(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with pytest.raises(SystemExit) as stopped:
        cli.main(["tradeoff", str(folder), "--against", "TDS", "--chart", "tds.pdf"])
    assert stopped.value.code == cli.BAD_INPUT
    assert "a chart ends in .svg or .png" in capsys.readouterr().err
