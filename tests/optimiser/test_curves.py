"""Curves hold what they say: doses bring the pH, residuals come from the whole water."""

from __future__ import annotations

import json
import math
from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest

from chemistry.analysis import ANALYTES
from chemistry.feed import feed_water
from chemistry.state import equilibrate
from optimiser import load_site
from optimiser.curves import Curve, Curves, build_curves, even_doses_mg_per_l
from optimiser.render_curves import curves_text
from optimiser.site import Site

SITES = Path(__file__).resolve().parents[2] / "catalogs" / "sites"
DEMOS = sorted(path.name for path in SITES.iterdir() if (path / "site.yaml").is_file())


@lru_cache
def site_named(name: str) -> Site:
    return load_site(SITES / name / "site.yaml")


@lru_cache
def curves_of(name: str) -> Curves:
    return build_curves(site_named(name))


def curve(curves: Curves, kind: str, reagent: str) -> Curve:
    (found,) = [c for c in curves.curves if (c.kind, c.reagent) == (kind, reagent)]
    return found


def reacting_mol_per_l(site: Site, reagent: str, fed_mg_per_l: float) -> np.ndarray:
    """Component totals that a fed dose brings into reaction, worked out here anew."""
    entry = site.reagents[reagent]
    factor = site.treatment.dose_factors.get(reagent, entry.dose_factor)
    moles = fed_mg_per_l / 1000.0 / entry.molar_mass_g_per_mol / factor
    return np.array([entry.components.get(c, 0.0) * moles for c in site.system.components])


@pytest.mark.parametrize("name", DEMOS)
def test_fed_into_the_feed_each_demanded_dose_brings_its_ph(name: str) -> None:
    site, curves = site_named(name), curves_of(name)
    feed = feed_water(site.analysis, site.system)
    checked = 0
    for ph, doses in curves.demand_mg_per_l.items():
        for reagent, dose in doses.items():
            if dose is not None:
                totals = feed.totals_mol_per_l + reacting_mol_per_l(site, reagent, dose)
                state = equilibrate(site.system, totals[None, :])
                assert state.ph[0] == pytest.approx(ph, abs=1e-6), (reagent, ph)
                checked += 1
    assert checked >= 7


@pytest.mark.parametrize("name", DEMOS)
def test_swept_states_are_the_equilibrium_of_the_dosed_water(name: str) -> None:
    site, curves = site_named(name), curves_of(name)
    feed = feed_water(site.analysis, site.system)
    for found in curves.curves:
        point = found.points[len(found.points) // 2] if found.points else None
        if point is None:
            continue
        totals = feed.totals_mol_per_l + reacting_mol_per_l(
            site, found.reagent, point.dose_mg_per_l
        )
        if point.controller:
            totals = totals + reacting_mol_per_l(
                site, point.controller, point.controller_dose_mg_per_l
            )
        state = equilibrate(site.system, totals[None, :])
        assert state.ph[0] == pytest.approx(point.ph, abs=1e-6)
        for metal, residual in point.residual_mg_per_l.items():
            column = site.system.index[ANALYTES[metal].component]
            dissolved = state.dissolved_mol_per_l[0, column]
            mass = 1000.0 * ANALYTES[metal].molar_mass_g_per_mol
            assert dissolved * mass == pytest.approx(residual, rel=1e-5, abs=1e-12)


def test_held_curves_hold_their_ph() -> None:
    held = [c for c in curves_of("mercury_lab").curves if c.held_ph is not None]
    assert held
    for found in held:
        assert found.points
        assert all(abs(point.ph - found.held_ph) < 1e-6 for point in found.points)  # type: ignore[operator]


def test_chloride_takes_silver_down_to_a_best_dose_and_brings_it_back() -> None:
    found = curve(curves_of("silver_rinse"), "residual-versus-dose", "sodium_chloride")
    silver = [point.residual_mg_per_l["Ag"] for point in found.points]
    best = int(np.argmin(silver))
    assert 0 < best < len(silver) - 1
    assert silver[0] > 100.0 * silver[best]
    assert silver[-1] > 2.0 * silver[best]


def test_magnesia_stops_at_its_practical_ceiling() -> None:
    found = curve(curves_of("plating_rinse"), "residual-versus-ph", "magnesium_hydroxide")
    assert found.points
    assert max(point.ph for point in found.points) <= 9.0 + 1e-6
    assert min(found.unreached) > 9.0


def test_an_alkaline_feed_is_moved_with_acids() -> None:
    curves = curves_of("barium_glaze")
    assert curves.feed_ph > 11.0
    moved = {c.reagent for c in curves.curves if c.kind == "residual-versus-ph"}
    assert moved >= {"sulfuric_acid", "hydrochloric_acid"}


@pytest.mark.parametrize("name", DEMOS)
def test_curves_are_plain_data_within_the_width(name: str) -> None:
    data = curves_of(name).to_dict()
    assert json.loads(json.dumps(data, allow_nan=False)) == data
    assert max(map(len, curves_text(data).splitlines())) <= 100


def test_the_frame_holds_one_row_per_state() -> None:
    curves = curves_of("silver_rinse")
    frame = curves.to_frame()
    assert len(frame) == sum(len(c.points) for c in curves.curves)
    assert list(frame.columns[-3:]) == ["Cu_mg_per_l", "Ag_mg_per_l", "solids"]
    assert not frame.isna().any().any()


def test_the_held_ph_may_be_chosen() -> None:
    curves = build_curves(site_named("silver_rinse"), held_ph=7.5)
    assert {c.held_ph for c in curves.curves} == {None, 7.5}


@pytest.mark.parametrize("top", [0.7, 6.999, 10.0, 408.0, 39_196.0])
def test_even_doses_are_round_and_reach_the_top(top: float) -> None:
    doses = even_doses_mg_per_l(top)
    assert doses[-2] < top <= doses[-1] * (1 + 1e-12)
    assert 10 <= len(doses) - 1 <= 25
    step = doses[1]
    digits = step / 10.0 ** math.floor(math.log10(step) + 1e-9)
    assert min(abs(digits - nice) for nice in (1.0, 2.0, 2.5, 5.0)) < 1e-9
