"""Chelating ligands: their constants, the waters that carry them, and the metals they hold up."""

from __future__ import annotations

import re
from pathlib import Path
from shutil import copytree

import numpy as np
import pytest

import catalogs
from catalogs.constants import CHELATES, COMPONENTS, load_system, solid_table, species_table
from catalogs.packaged import read_rows
from chemistry import System, equilibrate
from chemistry.activity import build_activity
from chemistry.analysis import ANALYTES, Measurement, WaterAnalysis, analyte_of
from chemistry.analysis import CHELATES as CHELATE_IDS
from chemistry.feed import feed_water
from chemistry.formula import charge_of, molar_mass_g_per_mol
from chemistry.system import LN10
from optimiser import load_site

ROWS = [species_table()[row["name"]] for row in read_rows("chelate_species.csv")]
SOURCE_VALUE = re.compile(r"source value (-?[\d.]+) at I=([\d.]+) M")


def test_no_row_and_no_digit_was_lost() -> None:
    assert len(ROWS) == 170
    assert sum(row.log10_k for row in ROWS) == pytest.approx(1704.67, abs=1e-9)
    known = [row.enthalpy_kj_per_mol for row in ROWS if row.enthalpy_kj_per_mol is not None]
    assert len(known) == 37
    assert sum(known) == pytest.approx(-413.3, abs=1e-9)
    counts = {c: sum(c in row.reaction for row in ROWS) for c in CHELATES}
    assert counts == {
        "(EDTA)-4": 40, "(NTA)-3": 36, "(Cit)-3": 37, "(Tart)-2": 19, "(Ox)-2": 27, "(Gluc)-": 11,
    }  # fmt: skip


@pytest.mark.parametrize(
    "row", [r for r in ROWS if SOURCE_VALUE.search(r.note)], ids=lambda r: r.name
)
def test_at_the_ionic_strength_of_the_source_the_constant_is_that_of_the_source(row) -> None:
    """Our own Davies term brings every row back to what was measured at I = 0.1 or so."""
    match = SOURCE_VALUE.search(row.note)
    assert match is not None
    measured, strength = float(match.group(1)), float(match.group(2))
    system = load_system(components=COMPONENTS)
    species = next(s for s in system.species if s.name == row.name)
    parts = [*species.stoichiometry.items(), (row.name, -1.0)]
    model = build_activity("davies", np.array([float(charge_of(name)) for name, _ in parts]))
    ln_gamma = -model.offset(np.array([[strength]]))[0]
    there = row.log10_k + sum(n * g for (_, n), g in zip(parts, ln_gamma, strict=True)) / LN10
    assert there == pytest.approx(measured, abs=0.011)


def test_acid_constants_of_edta_at_a_tenth_molar_are_the_published_ones() -> None:
    """10.27, 6.16, 2.67 and 2.0 at I = 0.1 (published page), as ratios of concentrations."""
    system = load_system(components=["(EDTA)-4", "K+", "Cl-"])
    ph = np.array([10.2, 6.1, 2.7, 2.0])
    totals = {"(EDTA)-4": 1e-5, "K+": 0.1, "Cl-": 0.1}
    state = equilibrate(system, totals, ph=ph)
    m = dict(zip(system.species_names, state.species_mol_per_l.T, strict=True))
    forms = ("(EDTA)-4", "H(EDTA)-3", "H2(EDTA)-2", "H3(EDTA)-", "H4(EDTA)(aq)")
    proton = m["H+"]
    found = [
        float((np.log10(m[forms[k + 1]] / m[forms[k]]) - np.log10(proton))[k]) for k in range(4)
    ]
    assert found == pytest.approx([10.27, 6.16, 2.67, 2.0], abs=0.15)


def test_oxalates_dissolve_in_water_as_handbooks_say() -> None:
    """CaC2O4.H2O about 6 to 8 mg/L, PbC2O4 about 1.6 to 4 mg/L at 20-25 C (from memory)."""
    for metal, solid, low, high in (
        ("Ca+2", "Ca(Ox).H2O(s)", 6.0, 8.0), ("Pb+2", "Pb(Ox)(s)", 1.6, 4.0),
    ):  # fmt: skip
        system = load_system(components=[metal, "(Ox)-2"], solids=[solid])
        state = equilibrate(system, {metal: 0.01, "(Ox)-2": 0.01}, ph=7.0)
        dissolved = float(state.dissolved[metal].iloc[0])
        mg = 1000.0 * molar_mass_g_per_mol(solid.removesuffix("(s)")) * dissolved
        assert low < mg < high, metal


def test_chelates_are_held_only_where_they_are_named() -> None:
    assert not set(CHELATES) & set(load_system().components)
    assert not [s for s in load_system().species_names if "(EDTA)" in s]
    system = load_system(components=["Cu+2", "(EDTA)-4"])
    assert {"Cu(EDTA)-2", "H2(EDTA)-2"} <= set(system.species_names)
    assert {"Ca(Ox).H2O(s)", "Pb(Ox)(s)"} <= set(solid_table())
    assert load_system(components=["Ca+2", "(Ox)-2"]).solid_names[-1] == "Ca(Ox).H2O(s)"


@pytest.mark.parametrize("activity", ["davies", "sit"])
def test_every_chelate_solves_with_every_metal_at_any_ph(activity: str) -> None:
    system = load_system(components=COMPONENTS, activity=activity)
    ph = np.linspace(1.0, 13.0, 25)
    for ligand in CHELATES:
        totals = {c: np.full(ph.size, 1e-3) for c in system.components if c not in CHELATES}
        totals |= {ligand: np.full(ph.size, 3e-3), "H+": np.zeros(ph.size)}
        assert equilibrate(system, totals, ph=ph).converged.all(), ligand


# -- in the laboratory's words -------------------------------------------------------------------


def test_every_ligand_has_an_analyte_that_states_its_basis() -> None:
    assert {ANALYTES[name].component for name in CHELATE_IDS} == set(CHELATES)
    assert [analyte_of(c) for c in CHELATES] == list(CHELATE_IDS)
    masses = {name: ANALYTES[name].molar_mass_g_per_mol for name in CHELATE_IDS}
    assert masses == pytest.approx(
        {"EDTA": 292.24, "NTA": 191.14, "citrate": 189.10, "tartrate": 148.07,
         "oxalate": 88.02, "gluconate": 195.15}, abs=0.01,
    )  # fmt: skip
    assert all("(as the " in ANALYTES[name].name for name in CHELATE_IDS)


@pytest.fixture
def chelated_site(tmp_path: Path) -> Path:
    """The plating demo with EDTA in its feed."""
    demo = Path(catalogs.__file__).parent / "sites" / "plating_rinse"
    copytree(demo, tmp_path / "site")
    file = tmp_path / "site" / "site.yaml"
    text = file.read_text(encoding="utf-8")
    assert text.count("\n  analysis:") == 1
    lines = text.splitlines()
    at = next(i for i, line in enumerate(lines) if line.startswith("  analysis:"))
    lines.insert(at + 1, "    EDTA: 12 mg/L")
    file.write_text("\n".join(lines), encoding="utf-8")
    return file


def test_a_feed_with_a_chelate_loads_from_a_site_file(chelated_site: Path) -> None:
    site = load_site(chelated_site)
    assert "(EDTA)-4" in site.system.components
    feed = feed_water(site.analysis, site.system)
    amount = float(feed.totals_mol_per_l[site.system.index["(EDTA)-4"]])
    assert amount == pytest.approx(12.0 / 292.24 / 1000.0, rel=1e-4)


def test_a_metal_without_constants_for_a_chelate_of_the_feed_is_named() -> None:
    amounts = {"Hg": 0.5, "Cu": 20.0, "EDTA": 30.0, "Cl": 100.0, "Na": 50.0}
    analysis = WaterAnalysis(
        measurements={
            name: Measurement(dissolved_mg_per_l=mg, total_mg_per_l=mg)
            for name, mg in amounts.items()
        },
        ph=3.0, close_charge_with="Cl",
    )  # fmt: skip
    system = load_system(components=[ANALYTES[name].component for name in amounts])
    said = [note for note in feed_water(analysis, system).notes if "no constants" in note]
    assert said == [
        "no constants are known here for Hg with EDTA: more of it may stay dissolved than is shown"
    ]


# -- what they do to a plan ------------------------------------------------------------------------


def residual_mg_per_l(system: System, metal: str, ligand: str, amount_mol_per_l: float) -> float:
    """Dissolved metal of 0.5 mmol/L brought to pH 9.5 with 1 mmol/L of calcium there. [mg/L]"""
    totals = {
        metal: 5e-4, "Ca+2": 1e-3, "Na+": 1e-2, "Cl-": 1e-2, ligand: amount_mol_per_l,
    }  # fmt: skip
    dissolved = equilibrate(system, totals, ph=9.5).dissolved[metal].iloc[0]
    return 1000.0 * molar_mass_g_per_mol(metal) * float(dissolved)


@pytest.mark.parametrize(
    ("metal", "ligand"),
    [("Cu+2", "(EDTA)-4"), ("Ni+2", "(EDTA)-4"), ("Cd+2", "(NTA)-3"), ("Cu+2", "(Cit)-3")],
)
def test_a_chelate_holds_about_as_much_metal_up_as_there_is_of_it(metal: str, ligand: str) -> None:
    system = load_system(components=[metal, "Ca+2", "Na+", "Cl-", ligand])
    without = residual_mg_per_l(system, metal, ligand, 0.0)
    held = residual_mg_per_l(system, metal, ligand, 1e-4) - without
    whole = 1000.0 * molar_mass_g_per_mol(metal) * 1e-4
    assert 0.5 * whole < held < 1.05 * whole


def test_sulfide_takes_copper_from_edta() -> None:
    """The constants say so: CuS is thirty decades less soluble than the complex is strong."""
    system = load_system(components=["Cu+2", "Ca+2", "Na+", "Cl-", "(EDTA)-4", "HS-"])
    totals = {"Cu+2": 5e-4, "Ca+2": 1e-3, "Na+": 1e-2, "Cl-": 1e-2, "(EDTA)-4": 1e-3}
    bare = equilibrate(system, totals, ph=9.5).dissolved["Cu+2"].iloc[0]
    polished = equilibrate(system, totals | {"HS-": 6e-4}, ph=9.5).dissolved["Cu+2"].iloc[0]
    assert bare == pytest.approx(5e-4, rel=1e-3)
    assert polished < 1e-8
