"""Charts carry the numbers they claim, come out the same twice, and are written whole or not."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import optimiser
from optimiser import cli
from optimiser.chart_curves import Guides, draw_curves
from optimiser.chart_style import house_style, pen, spread_apart
from optimiser.chart_trade_off import draw_trade_off
from optimiser.curve_guides import TOLERANCE_LN, bands, ceilings
from optimiser.curves import Curve, Curves, build_curves
from optimiser.errors import ChartError, refuse_existing_chart
from optimiser.site import Site
from tests.optimiser.small_sites import SILVER, SULFATE, row_of, small_site

SVG = "{http://www.w3.org/2000/svg}"


def point(
    tds: float, total: float, reagents: list[str], *, is_plan: bool = False
) -> dict[str, Any]:
    return {"tds_mg_per_l": tds, "total": total, "reagents": reagents, "is_plan": is_plan}


TRADE_OFF: dict[str, Any] = {
    "site": {"name": "Fenwick plating", "currency": "EUR"},
    "against": {"key": "TDS", "what": "TDS of the mean discharge", "unit": "mg/L",
                "column": "tds_mg_per_l", "digits": 4},
    "points": [
        point(900.0, 40000.0, ["hydrated_lime"], is_plan=True),
        point(870.0, 41000.0, ["hydrated_lime", "soda_ash"]),
        point(850.0, 43500.0, ["hydrated_lime", "soda_ash"]),
        point(810.0, 52000.0, ["magnesium_hydroxide"]),
    ],
    "without_plan": [], "least_reached": 809.0,
}  # fmt: skip


def drawn(path: Path) -> ET.Element:
    return ET.fromstring(path.read_text(encoding="utf-8"))


def group(root: ET.Element, name: str) -> ET.Element:
    (found,) = [g for g in root.iter(f"{SVG}g") if g.get("id", "").startswith(name)]
    return found


def markers(element: ET.Element) -> list[tuple[float, float]]:
    return [(float(u.attrib["x"]), float(u.attrib["y"])) for u in element.iter(f"{SVG}use")]


def texts(root: ET.Element) -> list[str]:
    return ["".join(t.itertext()).strip() for t in root.iter(f"{SVG}text")]


def ticks(root: ET.Element, axis: str) -> list[tuple[float, float]]:
    """Values that an axis is labelled with, and where they stand."""
    found = []
    for tick in (g for g in root.iter(f"{SVG}g") if re.match(rf"{axis}tick_\d+$", g.get("id", ""))):
        uses = list(tick.iter(f"{SVG}use"))
        words = texts(tick)
        if uses and words:
            found.append((float(words[0].replace(",", "")), float(uses[-1].attrib[axis])))
    return found


def scale(root: ET.Element, axis: str) -> np.poly1d:
    """Map from the page to values, from the first and the last tick."""
    first, *_, last = ticks(root, axis)
    return np.poly1d(np.polyfit([first[1], last[1]], [first[0], last[0]], 1))


def test_points_stand_where_the_ticks_say_their_numbers_are(tmp_path: Path) -> None:
    path = tmp_path / "chart.svg"
    draw_trade_off(TRADE_OFF, path)
    root = drawn(path)
    across, up = scale(root, "x"), scale(root, "y")
    seen = [
        (float(across(x)), float(up(y)))
        for number in range(3)
        for x, y in markers(group(root, f"recipe-{number}-"))
    ]
    claimed = [(p["tds_mg_per_l"], p["total"]) for p in TRADE_OFF["points"]]
    assert np.allclose(seen, claimed, rtol=1e-4)
    assert markers(group(root, "plan"))[0] == markers(group(root, "recipe-0-"))[0]


def test_a_trade_off_names_its_recipes_costs_and_what_has_no_plan(tmp_path: Path) -> None:
    path = tmp_path / "chart.svg"
    draw_trade_off(TRADE_OFF, path)
    words = texts(drawn(path))
    for text in (
        "hydrated lime (ringed: the plan)", "hydrated lime + soda ash",
        "magnesium hydroxide",
        "40,000", "52,000", "EUR a year", "TDS of the mean discharge, mg/L",
        "no plan found below 809",
    ):  # fmt: skip
        assert text in words


@pytest.mark.parametrize("suffix", [".svg", ".png"])
def test_two_runs_give_the_same_file(tmp_path: Path, suffix: str) -> None:
    first, second = tmp_path / f"a{suffix}", tmp_path / f"b{suffix}"
    draw_trade_off(TRADE_OFF, first)
    draw_trade_off(TRADE_OFF, second)
    assert first.read_bytes() == second.read_bytes()
    if suffix == ".png":
        assert first.read_bytes().startswith(b"\x89PNG")


def test_a_chart_is_written_whole_or_not_at_all(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "chart.svg"
    path.write_text("what was there")

    def fail(_part: Path, _data: bytes) -> int:
        _part.touch()
        raise OSError(28, "no space left", str(_part))

    monkeypatch.setattr(Path, "write_bytes", fail)
    with pytest.raises(OSError, match="no space"):
        draw_trade_off(TRADE_OFF, path)
    assert [p.name for p in tmp_path.iterdir()] == ["chart.svg"]
    assert path.read_text() == "what was there"


def test_a_file_that_is_there_is_written_over_only_by_force(tmp_path: Path) -> None:
    path = tmp_path / "chart.svg"
    refuse_existing_chart(path, force=False)
    path.touch()
    refuse_existing_chart(path, force=True)
    with pytest.raises(ChartError, match="--force"):
        refuse_existing_chart(path, force=False)
    with pytest.raises(FileNotFoundError):
        refuse_existing_chart(tmp_path / "nowhere" / "chart.svg", force=False)


def test_lines_differ_in_dash_and_marker_as_well_as_in_colour() -> None:
    pens = [pen(number) for number in range(7)]
    for part in ("colour", "dash", "marker"):
        assert len({str(getattr(one, part)) for one in pens}) == 7


def test_the_house_look_leaves_the_users_settings_alone() -> None:
    import matplotlib as mpl

    before = dict(mpl.rcParams)
    with house_style():
        assert mpl.rcParams["svg.fonttype"] == "none"
    assert dict(mpl.rcParams) == before


def test_labels_are_moved_apart_and_stay_in_order() -> None:
    heights = [0.02, 0.02, 0.5, 0.51, 0.98, 1.0, 1.0]
    places = spread_apart(heights, 0.08)
    assert min(np.diff(places)) >= 0.08 - 1e-9
    assert places[0] >= 0.0
    assert places[-1] <= 1.0
    assert spread_apart([0.1, 0.5], 0.1) == [0.1, 0.5]


# -- curves ---------------------------------------------------------------------------------------


@cache
def silver() -> tuple[Site, Curves]:
    """Silver under salt: falls, and comes back as complexes."""
    site = small_site(SILVER)
    return site, build_curves(site, 7.0)


def salt() -> Curve:
    (found,) = [c for c in silver()[1].curves if c.reagent == "sodium_chloride"]
    return found


def log_scale(root: ET.Element, axis: str) -> np.poly1d:
    """Map from the page to the log10 of values."""
    found = [(value, place) for value, place in ticks(root, axis) if value > 0.0]
    (low, first), (high, last) = found[0], found[-1]
    return np.poly1d(np.polyfit([first, last], np.log10([low, high]), 1))


def line_points(element: ET.Element) -> list[tuple[float, float]]:
    """Corners of the first path under an element."""
    path = next(element.iter(f"{SVG}path")).attrib["d"]
    return [(float(x), float(y)) for x, y in re.findall(r"[ML] (\S+) (\S+)", path)]


def test_residuals_limits_and_the_planned_dose_stand_where_the_ticks_say(tmp_path: Path) -> None:
    site, curves = silver()
    path = tmp_path / "curves.svg"
    guides = Guides(ceilings=ceilings(site), doses_mg_per_l={"sodium_chloride": 60.0})
    draw_curves(curves, guides, path, ["sodium_chloride"])
    root = drawn(path)
    across, up = log_scale(root, "x"), log_scale(root, "y")
    seen = markers(group(root, "residual-dose-sodium_chloride-Ag"))
    claimed = [(p.dose_mg_per_l, p.residual_mg_per_l["Ag"]) for p in salt().points]
    assert len(seen) == len(claimed)
    for (x, y), (dose, residual) in zip(seen, claimed, strict=True):
        assert 10.0 ** float(up(y)) == pytest.approx(residual, rel=1e-3)
        if dose > 0.0:
            assert 10.0 ** float(across(x)) == pytest.approx(dose, rel=1e-3)
    ((_, height), _) = line_points(group(root, "ceiling-dose-sodium_chloride-Ag"))
    target = guides.ceilings["Ag"].target_mg_per_l
    assert 10.0 ** float(up(height)) == pytest.approx(target, rel=1e-3)
    ((place, _), _) = line_points(group(root, "planned-sodium_chloride"))
    assert 10.0 ** float(across(place)) == pytest.approx(60.0, rel=1e-3)
    words = texts(root)
    assert "planned 60.00" in words
    best = min(salt().points, key=lambda p: p.residual_mg_per_l["Ag"])
    assert f"least at {best.dose_mg_per_l:.0f}" in words


def test_the_line_of_a_limit_is_the_mean_that_a_plan_may_have() -> None:
    site = small_site(SULFATE, {"feed": {"stands_for": "average"}})
    found = optimiser.assess(site, {"hydrated_lime": 500.0})
    for metal in ("Cu", "Zn"):
        row = row_of(found, metal)
        mean = row["target"] / row["variability_factor"]
        assert ceilings(site)[metal].target_mg_per_l == pytest.approx(mean, rel=1e-12)


def test_every_state_of_a_curve_lies_inside_its_envelope() -> None:
    site, curves = silver()
    band = bands(site, salt(), ["Ag"])["Ag"]
    known = [p for p in salt().points if p.dose_mg_per_l > 0.0]
    doses = [p.dose_mg_per_l for p in known]
    residual = np.log([p.residual_mg_per_l["Ag"] for p in known])
    safe = np.interp(doses, band.dose_mg_per_l, np.log(band.safe_mg_per_l))
    optimistic = np.interp(doses, band.dose_mg_per_l, np.log(band.optimistic_mg_per_l))
    assert (residual <= safe + 2e-3).all()
    assert (residual >= optimistic - 2e-3).all()
    assert (safe - optimistic).max() <= TOLERANCE_LN
    assert curves.metals == ("Ag",)


def test_alkali_demand_is_drawn_for_every_alkali_with_its_numbers(tmp_path: Path) -> None:
    curves = build_curves(small_site())
    path = tmp_path / "curves.svg"
    draw_curves(curves, Guides(), path)
    root = drawn(path)
    panels = [g for g in root.iter(f"{SVG}g") if g.get("id", "").startswith("axes_")]
    (panel,) = [g for g in panels if "Alkali and acid demand, each one alone" in texts(g)]
    across, up = scale(panel, "x"), scale(panel, "y")
    for name in ("caustic_soda", "hydrated_lime"):
        claimed = [(ph, row[name]) for ph, row in curves.demand_mg_per_l.items() if row[name]]
        seen = [(float(across(x)), float(up(y))) for x, y in markers(group(root, f"demand-{name}"))]
        assert np.allclose(seen, claimed, rtol=1e-3)


def test_the_command_draws_and_refuses(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(optimiser, "load_site", lambda _path: silver()[0])
    chart = tmp_path / "c.png"
    words = ["curves", "site.yaml", "--chart", str(chart), "--ph", "7"]
    assert cli.main([*words, "--reagent", "sodium_chloride", "--dose", "sodium_chloride=60"]) == 0
    assert chart.read_bytes().startswith(b"\x89PNG")
    assert cli.main(words) == cli.BAD_INPUT
    assert "--force" in capsys.readouterr().err
    assert cli.main([*words, "--force", "--reagent", "sodium_cloride"]) == cli.BAD_INPUT
    assert "did you mean `sodium_chloride`" in capsys.readouterr().err


def test_a_reagent_without_a_state_is_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    # nothing on this site lifts the pH to 9
    monkeypatch.setattr(optimiser, "load_site", lambda _path: silver()[0])
    words = ["curves", "site.yaml", "--chart", str(tmp_path / "c.svg"), "--ph", "9"]
    assert cli.main([*words, "--reagent", "sodium_chloride"]) == cli.BAD_INPUT
    assert "no state along it was reached" in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []
