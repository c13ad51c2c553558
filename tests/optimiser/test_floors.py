"""Floors: nothing lower exists on a finer grid, and what stops each is what the chemistry says."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from chemistry import equilibrate
from chemistry.analysis import ANALYTES
from optimiser.cli import main
from optimiser.floors import Floor, Floors, explain_floors
from optimiser.render_floors import floors_text
from optimiser.site import Site
from tests.optimiser.small_sites import (
    ALKALINE,
    CARBONATE,
    COPPER_ZINC,
    SILVER,
    SULFATE,
    SULFIDE,
    dosed,
    own,
    small_site,
)

DEMOS = Path(__file__).resolve().parents[2] / "catalogs" / "sites"
FINER = 0.98  # a finer grid may find this share of the floor, no less


def floors_of(site: Site) -> dict[tuple[str, str], Floor]:
    return {(f.metal, f.family): f for f in explain_floors(site).floors}


def lowest_on_grid(
    site: Site, metal: str, alkali: str, paced: str = "", top: float = 5000.0
) -> float:
    """Lowest residual on a fine grid by equilibrium at held pH, the alkali its titrant. [mg/L]"""
    system, analyte = site.system, ANALYTES[metal]
    window = site.treatment.ph_set_point
    ph = np.arange(window.low, window.high + 1e-9, 0.05)
    lowest = np.inf
    for dose in np.geomspace(1.0, top, 30) if paced else np.zeros(1):
        totals = dosed(site, {paced: dose} if paced else {})
        vector = np.array([site.reagents[alkali].components.get(c, 0.0) for c in system.components])
        state = equilibrate(
            system, np.tile(totals, (ph.size, 1)), ph=ph, titrant=vector, on_failure="flag"
        )
        good = state.converged & (state.titrant_mol_per_l >= 0.0)
        column = state.dissolved_mol_per_l[good, system.index[analyte.component]]
        lowest = min(lowest, float(column.min(initial=np.inf)))
    return lowest * 1000.0 * analyte.molar_mass_g_per_mol


@pytest.mark.parametrize("metal", ["Cu", "Zn"])
def test_no_set_point_gives_less_than_the_hydroxide_floor(metal: str) -> None:
    site = small_site({"treatment": {"dose_factors": {"hydrated_lime": 1.0}}})
    found = floors_of(site)[metal, "hydroxide"]
    grid = min(lowest_on_grid(site, metal, alkali) for alkali in ("caustic_soda", "hydrated_lime"))
    assert FINER * found.residual_mg_per_l <= grid <= 1.05 * found.residual_mg_per_l


@pytest.mark.parametrize("metal", ["Pb", "Zn"])
def test_no_dose_and_set_point_give_less_than_the_carbonate_floor(metal: str) -> None:
    site = small_site(CARBONATE)
    found = floors_of(site)[metal, "carbonate"]
    grid = lowest_on_grid(site, metal, "caustic_soda", "soda_ash")
    assert FINER * found.residual_mg_per_l <= grid <= 1.05 * found.residual_mg_per_l


def test_the_doses_of_a_floor_make_its_residual() -> None:
    """Put into the water by hand, the doses give the pH and the residual that are told."""
    site = small_site(CARBONATE)
    for floor in explain_floors(site).floors:
        state = equilibrate(site.system, dosed(site, floor.doses_mg_per_l))
        analyte = ANALYTES[floor.metal]
        column = site.system.index[analyte.component]
        residual = state.dissolved_mol_per_l[0, column] * 1000.0 * analyte.molar_mass_g_per_mol
        assert residual == pytest.approx(floor.residual_mg_per_l, rel=1e-4)
        assert state.ph[0] == pytest.approx(floor.ph, abs=1e-4)


def test_families_are_those_that_the_allowed_reagents_bring() -> None:
    for tree, families in (
        (COPPER_ZINC, {"hydroxide"}),
        (CARBONATE, {"hydroxide", "carbonate"}),
        (SULFIDE, {"hydroxide", "sulfide"}),
        (ALKALINE, {"hydroxide", "chloride"}),
        (SILVER, {"chloride"}),
    ):
        assert {family for _, family in floors_of(small_site(tree))} == families


def test_sulfide_stays_in_its_ph_window() -> None:
    site = small_site(SULFIDE)
    for (_, family), floor in floors_of(site).items():
        if family == "sulfide":
            assert floor.ph >= site.treatment.sulfide_least_ph


# -- what stops it -------------------------------------------------------------------------------


def test_a_neutral_ion_pair_is_the_floor_of_lead_in_sulfate() -> None:
    lead = {
        "feed": {"ph": 2.0, "close_charge_with": "SO4",
                 "analysis": {"Pb": "20 mg/L", "SO4": "9000 mg/L", "Na": "3000 mg/L", "Cu": None,
                              "Zn": None, "Cl": None}},
        "treatment": {"reagents": ["caustic_soda"], "ph_set_point": {"low": 5.5, "high": 7.5},
                      "equipment_cost_per_year": {"hydrated_lime": None}},
        **own({"parameter": "Pb", "daily_mg_per_l": 0.5}),
    }  # fmt: skip
    floor = floors_of(small_site(lead))["Pb", "hydroxide"]
    assert floor.held_up_by is not None
    assert floor.held_up_by.species == "PbSO4(aq)"
    assert floor.held_up_by.kind == "ion pair"
    assert floor.held_up_by.share_percent > 50.0
    assert "dissolved as PbSO4(aq), ion pair with sulfate, " in " ".join(floor.stops)
    assert floor.solid == "PbSO4(s)"


def test_a_hydroxo_complex_holds_zinc_up() -> None:
    held = floors_of(small_site())["Zn", "hydroxide"].held_up_by
    assert held is not None
    assert (held.species, held.kind, held.ligand) == ("Zn(OH)2(aq)", "hydroxo complex", "")


def test_a_set_point_window_that_stops_a_metal_is_named_with_what_lies_beyond() -> None:
    narrow = {"treatment": {"ph_set_point": {"low": 7.5, "high": 8.0}}}
    floor = floors_of(small_site(narrow))["Zn", "hydroxide"]
    assert floor.ph == pytest.approx(8.0, abs=0.02)
    [said] = [text for text in floor.stops if text.startswith("pH 8.00 is the highest set point")]
    wide = {"treatment": {"ph_set_point": {"low": 8.5, "high": 8.5001}}}
    beyond = floors_of(small_site(wide))["Zn", "hydroxide"].residual_mg_per_l
    assert f"at pH 8.50 it would come to {beyond:.2g}" in said
    assert beyond < floor.residual_mg_per_l


def test_a_window_that_stops_nothing_is_not_named() -> None:
    floor = floors_of(small_site())["Zn", "hydroxide"]
    assert not any("set point allowed" in text for text in floor.stops)


def test_copper_that_takes_the_sulfide_is_named_where_the_dose_is_capped() -> None:
    """8 mg/L of hydrosulfide is less than the copper takes; cadmium alone would find enough."""
    capped = {"treatment": {"dose_ceilings_mg_per_l": {"sodium_hydrosulfide": 8.0}}}
    site = small_site(SULFIDE, capped, {"feed": {"analysis": {"Cd": "3 mg/L"}}})
    floor = floors_of(site)["Cd", "sulfide"]
    said = "other metals take the ligand: at the largest dose of 8 mg/L it would come to "
    assert any(text.startswith(said) and text.endswith(" alone") for text in floor.stops)
    assert "sulfide takes it no lower than the set point alone" in floor.stops
    free = floors_of(small_site(SULFIDE))["Cd", "sulfide"]
    assert not any(text.startswith("other metals") for text in free.stops)
    assert free.residual_mg_per_l < 0.01 * floor.residual_mg_per_l


def test_a_dose_ceiling_that_stops_a_metal_is_named_with_what_lies_beyond() -> None:
    capped = {"treatment": {"dose_ceilings_mg_per_l": {"sodium_chloride": 30.0}}}
    floor = floors_of(small_site(SILVER, capped))["Ag", "chloride"]
    assert floor.doses_mg_per_l["sodium_chloride"] == pytest.approx(30.0, rel=0.03)
    [said] = [text for text in floor.stops if text.startswith("the largest dose tried; twice of")]
    free = floors_of(small_site(SILVER))["Ag", "chloride"]
    assert free.residual_mg_per_l < floor.residual_mg_per_l
    assert float(said.split("come to ")[1].split()[0]) < floor.residual_mg_per_l


def test_carry_over_and_practical_floor_come_before_chemistry() -> None:
    leaky = {"treatment": {"separator": {"tss_mg_per_l": 30, "capture_fraction": 0.9}}}
    carried = floors_of(small_site(leaky))["Cu", "hydroxide"]
    assert carried.stopped_by == "carry-over"
    assert carried.carry_over_mg_per_l > 1.0
    assert carried.stops[0].startswith("carry-over past the filter: ")
    tight = {"treatment": {"separator": {"tss_mg_per_l": 0.0, "capture_fraction": 1.0}}}
    floor = floors_of(small_site(tight))["Cu", "hydroxide"]
    assert floor.stopped_by == "practical floor"
    assert floor.predicted_mg_per_l == floor.practical_floor_mg_per_l
    assert floor.predicted_mg_per_l > floor.residual_mg_per_l


def test_a_ligand_without_a_solid_is_told() -> None:
    floor = floors_of(small_site(SULFIDE, own({"parameter": "Cd", "daily_mg_per_l": 1.0})))
    assert floor["Cd", "hydroxide"].residual_mg_per_l < 9.0
    water = {"feed": {"analysis": {"Ba": "3 mg/L"}},
             **own({"parameter": "Ba", "daily_mg_per_l": 1.0})}  # fmt: skip
    barium = floors_of(small_site(water))["Ba", "hydroxide"]
    assert barium.stopped_by == "no solid"
    assert barium.stops[0] == "no solid of it forms with hydroxide in this water"
    assert barium.residual_mg_per_l == pytest.approx(3.0, rel=1e-3)


def test_ammonia_that_holds_copper_up_is_a_complex_with_its_share() -> None:
    ammonia = {"feed": {"analysis": {"NH4": "400 mg/L as N"}}}
    plain = floors_of(small_site())["Cu", "hydroxide"]
    floor = floors_of(small_site(ammonia))["Cu", "hydroxide"]
    assert floor.residual_mg_per_l > 10.0 * plain.residual_mg_per_l
    assert floor.held_up_by is not None
    assert floor.held_up_by.complexing == "ammonia"
    assert floor.held_up_by.is_complexed
    assert plain.held_up_by is not None
    assert not plain.held_up_by.is_complexed


def test_a_chelate_is_a_floor_that_no_set_point_lowers() -> None:
    chelated = floors_of(small_site({"feed": {"analysis": {"EDTA": "60 mg/L"}}}))
    plain = floors_of(small_site())
    copper = chelated["Cu", "hydroxide"]
    assert copper.residual_mg_per_l > 50.0 * plain["Cu", "hydroxide"].residual_mg_per_l
    assert copper.stopped_by == "dissolved species"
    assert copper.held_up_by is not None
    assert (copper.held_up_by.kind, copper.held_up_by.ligand) == ("chelate", "EDTA")


def test_a_site_that_limits_no_metal_has_no_floors() -> None:
    found = explain_floors(small_site(own({"parameter": "Cl", "daily_mg_per_l": 900.0})))
    assert found.floors == ()
    assert "No metal with a limit is in this water." in floors_text(found.to_dict())


def test_metals_that_the_water_lacks_are_listed_apart() -> None:
    site = small_site(
        {"feed": {"analysis": {"Pb": "0 mg/L"}}},
        own({"parameter": "Cu", "daily_mg_per_l": 1.0}, {"parameter": "Pb", "daily_mg_per_l": 1.0}),
    )
    found = explain_floors(site)
    assert found.not_in_the_water == ("Pb",)
    assert {floor.metal for floor in found.floors} == {"Cu"}


def test_the_target_is_the_tightest_of_the_metals_own_limits() -> None:
    site = small_site(own(
        {"parameter": "Cu", "daily_mg_per_l": 1.0},
        {"parameter": "sum", "of": ["Cu", "Zn"], "daily_mg_per_l": 3.0},
    ))  # fmt: skip
    found = floors_of(site)
    assert found["Cu", "hydroxide"].target_mg_per_l == pytest.approx(0.8)
    assert found["Cu", "hydroxide"].meets is True
    assert found["Zn", "hydroxide"].target_mg_per_l is None
    assert found["Zn", "hydroxide"].meets is None


# -- printed -------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def lead() -> Floors:
    from optimiser import load_site

    return explain_floors(load_site(DEMOS / "lead_battery" / "site.yaml"))


def test_the_text_fits_its_width_and_tells_every_floor(lead: Floors) -> None:
    text = floors_text(lead.to_dict())
    assert max(len(line) for line in text.splitlines()) <= 100
    for floor in lead.floors:
        assert f"  - {floor.metal}, {floor.family}" in text
        assert floor.held_up_by is None or floor.held_up_by.species in text


def test_a_demo_shows_the_ion_pair_that_its_comment_speaks_of(lead: Floors) -> None:
    pairs = {(f.metal, f.family): f.held_up_by for f in lead.floors}
    held = pairs["Pb", "hydroxide"]
    assert held is not None
    assert held.species == "PbSO4(aq)"


def test_data_and_table_carry_every_floor(lead: Floors) -> None:
    data: dict[str, Any] = json.loads(json.dumps(lead.to_dict(), allow_nan=False))
    frame = lead.to_frame()
    assert len(frame) == len(data["floors"]) == len(lead.floors)
    assert list(frame["metal"]) == [row["metal"] for row in data["floors"]]
    assert {"residual_mg_per_l", "carry_over_mg_per_l", "ph", "held_up_by", "stops"} <= set(frame)


def test_the_command_prints_and_writes(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    site = DEMOS / "silver_rinse"
    assert main(["floors", str(site), "--csv", str(tmp_path / "floors.csv")]) == 0
    text = capsys.readouterr().out
    assert text.startswith("Larkmere mirror works, silvering line: how low each metal comes")
    assert "AgCl(aq), complex with chloride" in text
    rows = list(csv.DictReader((tmp_path / "floors.csv").read_text("utf-8").splitlines()))
    assert {(row["metal"], row["family"]) for row in rows} >= {
        ("Ag", "chloride"),
        ("Cu", "sulfide"),
    }
    assert main(["floors", str(site), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["site"].startswith("Larkmere")


def test_gypsum_water_keeps_lime_and_caustic_apart() -> None:
    """Lime brings calcium: in a sulfate water both alkalis are looked at."""
    floor = floors_of(small_site(SULFATE))["Cu", "hydroxide"]
    assert set(floor.doses_mg_per_l) <= {"caustic_soda", "hydrated_lime"}
    assert floor.controller in floor.doses_mg_per_l
