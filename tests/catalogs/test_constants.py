"""The shipped constants: rows, balance, ranges, which solids are on, and the systems they build."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest

from catalogs.constants import (
    CHELATES,
    COMPONENTS,
    SolidInfo,
    SpeciesInfo,
    enthalpy_unknown,
    load_system,
    solid_info,
    solid_table,
    species_info,
    species_rows,
    species_table,
)
from catalogs.packaged import read_rows
from chemistry import equilibrate
from chemistry.errors import SystemDefinitionError
from chemistry.formula import charge_of, check_balance, molar_mass_g_per_mol
from chemistry.system import LN10, Solid, Species

EVERY_ROW: list[SpeciesInfo | SolidInfo] = [*species_rows(), *solid_table().values()]


def test_no_row_and_no_digit_was_lost() -> None:
    species = [row for row in read_rows("aqueous_species.csv") if row["models"] != "sit"]
    solids = read_rows("solids.csv")
    assert (len(species), len(solids)) == (260, 113)
    assert sum(float(row["log10_k"]) for row in species) == pytest.approx(-615.222, abs=1e-9)
    assert sum(float(row["log10_k"]) for row in solids) == pytest.approx(717.809, abs=1e-9)
    assert sum(float(row["low"]) for row in species) == pytest.approx(-705.65, abs=1e-9)
    assert sum(float(row["low"]) for row in solids) == pytest.approx(626.623, abs=1e-9)
    cells = [row["enthalpy_kj_per_mol"] for row in (*species, *solids)]
    known = [float(cell) for cell in cells if cell]
    assert len(known) == 164 + 90
    assert sum(known) == pytest.approx(7003.0 + 2456.8, abs=1e-6)


def test_the_tables_of_the_catalog_are_its_files_together() -> None:
    files = ("aqueous_species.csv", "chelate_species.csv")
    assert [row.name for row in species_rows()] == [r["name"] for f in files for r in read_rows(f)]
    solid_files = ("solids.csv", "chelate_solids.csv")
    assert list(solid_table()) == [row["name"] for f in solid_files for row in read_rows(f)]


def test_some_rows_go_with_one_activity_model_and_say_why() -> None:
    assert {row.models for row in species_rows()} == {"both", "davies", "sit"}
    davies, sit = species_table("davies"), species_table("sit")
    assert set(davies) - set(sit) == {
        "NaCO3-", "NaHCO3(aq)", "NaPO4-2", "NaHPO4-", "AgCl4-3", "PbCl4-2",
    }  # fmt: skip
    assert set(sit) <= set(davies)
    changed = {n: (davies[n].log10_k, sit[n].log10_k) for n in sit if sit[n] != davies[n]}
    assert changed == {"AgCl3-2": (5.2, 5.04), "PbCl3-": (1.7, 2.0)}
    assert all("interaction" in row.note for row in species_rows() if row.models == "sit")
    assert species_table("ideal") == davies


def test_a_system_takes_the_rows_of_its_activity_model() -> None:
    silver = load_system(components=["Ag+", "Cl-"], activity="sit")
    assert silver.interactions is not None
    assert "AgCl4-3" not in silver.species_names
    assert {s.name: s.log10_k for s in silver.species}["AgCl3-2"] == 5.04
    assert load_system(components=["Ag+", "Cl-"]).interactions is None
    assert species_info("PbCl3-", "sit").log10_k == 2.0


def test_every_reaction_balances_in_elements_and_charge() -> None:
    assert {row.name: check_balance(row.reaction) for row in EVERY_ROW} == {
        row.name: [] for row in EVERY_ROW
    }


def test_every_constant_lies_within_its_published_range() -> None:
    assert [row.name for row in EVERY_ROW if not row.low <= row.log10_k <= row.high] == []


def test_every_row_has_a_source_and_a_confidence() -> None:
    assert [row.name for row in EVERY_ROW if not row.source.strip()] == []
    assert {row.confidence for row in EVERY_ROW} == {"confirmed", "from memory"}


def test_every_enthalpy_has_a_source_and_no_other_row_claims_one() -> None:
    for row in EVERY_ROW:
        known = row.enthalpy_kj_per_mol is not None
        assert bool(row.enthalpy_source) == known, row.name
        allowed = {"confirmed", "from memory", "estimated"} if known else {""}
        assert row.enthalpy_confidence in allowed, row.name


def test_names_are_unique_and_made_of_the_catalogs_components() -> None:
    system = load_system(components=COMPONENTS, solids=solid_table())
    for table in (species_table("davies"), species_table("sit")):
        names = [*system.components, *table, *solid_table()]
        assert len(names) == len(set(names))
    items: list[Species | Solid] = [*system.species, *system.solids]
    used = {c for item in items for c in item.stoichiometry}
    assert used == set(COMPONENTS)


def test_species_carry_the_charge_of_their_components() -> None:
    for item in load_system(components=COMPONENTS).species:
        charge = sum(n * charge_of(c) for c, n in item.stoichiometry.items())
        assert charge == item.charge, item.name


def test_the_sulfide_ion_and_the_handbook_lead_hydroxide_are_left_out() -> None:
    assert "S-2" not in species_table()
    assert not [name for name in solid_table() if name.startswith("Pb(OH)2")]


def test_solids_on_by_default_are_fresh_and_the_judged_ones_say_why() -> None:
    rows = solid_table().values()
    assert {row.forms for row in rows} == {"fresh", "slow", "aged", "never"}
    assert [row.name for row in rows if row.by_default and row.forms != "fresh"] == []
    assert [row.name for row in rows if not row.by_default and not row.reason] == []
    assert sum(row.by_default for row in rows) == 65 + 2


def test_fresh_solids_off_by_default_are_only_those_hidden_by_a_scale_former() -> None:
    off = [r.name for r in solid_table().values() if r.forms == "fresh" and not r.by_default]
    assert off == ["CaCO3.H2O(s)"]


def test_no_two_solids_of_one_compound_are_on_at_once() -> None:
    """Same components in the same ratio: polymorphs, and hydrates of one compound."""
    system = load_system()
    rows = system.solid_formation / np.abs(system.solid_formation).sum(axis=1, keepdims=True)
    twins = [
        (system.solid_names[i], system.solid_names[j])
        for i, j in combinations(range(len(rows)), 2)
        if np.allclose(rows[i], rows[j])
    ]
    assert twins == []


def test_the_twin_check_would_see_calcite_beside_monohydrocalcite() -> None:
    system = load_system(solids=["CaCO3(s,calcite)", "CaCO3.H2O(s)"])
    assert np.allclose(*system.solid_formation)


@pytest.mark.parametrize(
    ("on", "off"),
    [
        ("Mg(OH)2(s,active)", "Mg(OH)2(s)"),
        ("Zn(OH)2(s,am)", "Zn(OH)2(s,epsilon)"),
        ("Cu(OH)2(s,fresh)", "CuO(s)"),
        ("Ni(OH)2(s,fresh)", "Ni(OH)2(s,beta)"),
        ("Cr(OH)3(s,am)", "MgCO3(s)"),
        ("CaCO3(s,calcite)", "CaMg(CO3)2(s)"),
        ("Fe(OH)2(s,active)", "FeCO3(s)"),
        ("Cu4(OH)6SO4(s)", "Cu2(OH)2CO3(s)"),
    ],
)
def test_the_fresh_solid_is_on_and_the_slow_one_off(on: str, off: str) -> None:
    assert solid_info(on).by_default
    assert not solid_info(off).by_default


def test_gypsum_and_calcite_are_the_scale_formers() -> None:
    formers = [row.name for row in solid_table().values() if row.scale_former]
    assert sorted(formers) == ["CaCO3(s,calcite)", "CaSO4.2H2O(s)"]
    assert [s.name for s in load_system().solids if s.scale_former] == formers


def test_the_default_system_holds_every_component_but_chelates_and_the_default_solids() -> None:
    system = load_system()
    assert (*system.components, *CHELATES) == COMPONENTS
    assert len(system.components) == 28
    assert len(system.species) == 260
    default = {r.name for r in solid_table().values() if r.by_default}
    assert set(system.solid_names) == default - {"Ca(Ox).H2O(s)", "Pb(Ox)(s)"}
    assert set(load_system(components=COMPONENTS).solid_names) == default


def test_narrowing_keeps_the_proton_and_the_order_and_what_forms_from_the_rest() -> None:
    system = load_system(components=["SO4-2", "Cu+2"])
    assert system.components == ("H+", "SO4-2", "Cu+2")
    assert system.solid_names == ("Cu(OH)2(s,fresh)", "Cu4(OH)6SO4(s)")
    assert {"OH-", "HSO4-", "CuSO4(aq)", "Cu2(OH)2+2"} <= set(system.species_names)
    assert not [name for name in system.species_names if "Cl" in name or "Zn" in name]


def test_naming_solids_takes_exactly_these_even_slow_ones() -> None:
    system = load_system(components=["Cu+2"], solids=["CuO(s)"])
    assert system.solid_names == ("CuO(s)",)
    assert load_system(components=["Cu+2"], solids=[]).solid_names == ()


def test_one_name_may_be_given_without_a_list() -> None:
    assert load_system(components="Zn+2", solids="ZnO(s)").solid_names == ("ZnO(s)",)


def test_an_unknown_component_is_refused_with_the_nearest_name() -> None:
    with pytest.raises(SystemDefinitionError) as error:
        load_system(components=["Cu2+"])
    assert str(error.value) == (
        "'Cu2+' is not among the catalog's components. Did you mean `Cu+2`? The components known "
        f"here: {', '.join(sorted(COMPONENTS)[:30])} and 4 more."
    )


def test_an_unknown_solid_is_refused_with_the_nearest_name() -> None:
    with pytest.raises(SystemDefinitionError) as error:
        load_system(solids=["AgCl"])
    assert str(error.value) == ("'AgCl' is not among the catalog's solids. Did you mean `AgCl(s)`?")


def test_a_named_solid_without_its_components_is_refused() -> None:
    with pytest.raises(SystemDefinitionError) as error:
        load_system(components=["Ag+"], solids=["AgCl(s)"])
    assert str(error.value) == (
        "AgCl(s) needs Cl-, which the components leave out: add it to the components or drop the "
        "solid"
    )


def test_an_unknown_row_is_refused_by_the_look_ups() -> None:
    with pytest.raises(SystemDefinitionError, match=r"Did you mean `AgCl2-`\?"):
        species_info("AgCl2")
    with pytest.raises(SystemDefinitionError, match=r"Did you mean `CuO\(s\)`\?"):
        solid_info("CuOs")


def test_an_unknown_activity_model_is_refused() -> None:
    with pytest.raises(SystemDefinitionError, match="activity"):
        _ = load_system(activity="guess").activity_model


def test_water_and_calcite_move_with_temperature_as_measured() -> None:
    """Kw at 10 C: 14.53 (handbook, from memory); calcite by Plummer & Busenberg 1982."""
    system = load_system(10.0, components=["Ca+2", "CO3-2"])
    log10_kw = system.ln_k[system.species_names.index("OH-")] / LN10
    assert log10_kw == pytest.approx(-14.53, abs=0.02)
    kelvin = 283.15
    published = 171.9065 + 0.077993 * kelvin - 2839.319 / kelvin - 71.595 * np.log10(kelvin)
    log10_calcite = system.solid_ln_k[system.solid_names.index("CaCO3(s,calcite)")] / LN10
    assert log10_calcite == pytest.approx(published, abs=0.03)


def test_what_was_kept_at_25_degrees_is_listed_only_away_from_25_degrees() -> None:
    assert enthalpy_unknown(load_system(components=["Cu+2", "SO4-2"])) == ()
    cold = enthalpy_unknown(load_system(10.0, components=["Cu+2", "SO4-2"]))
    assert cold == ("Cu4(OH)6SO4(s)",)


def test_gypsum_dissolves_in_water_as_measured() -> None:
    """Lebedev & Kosorukov 2017, Geochem. Int. 55, 205: 0.0147 to 0.0182 mol/L at 25 C."""
    system = load_system(components=["Ca+2", "SO4-2"])
    state = equilibrate(system, {"Ca+2": 0.05, "SO4-2": 0.05, "H+": 0.0})
    assert 0.0147 <= state.dissolved["Ca+2"].iloc[0] <= 0.0182


def test_lead_chloride_dissolves_in_water_as_measured() -> None:
    """Handbook 1.08 g per 100 g of water at 25 C (from memory); here per litre."""
    system = load_system(components=["Pb+2", "Cl-"])
    state = equilibrate(system, {"Pb+2": 0.1, "Cl-": 0.2, "H+": 0.0})
    assert 278.1 * state.dissolved["Pb+2"].iloc[0] == pytest.approx(10.8, rel=0.05)


def test_chloride_takes_silver_down_to_a_best_dose_and_brings_it_back() -> None:
    """Published minima over AgCl: 0.03 to 0.07 mg/L near 2 to 3 mmol/L of chloride."""
    system = load_system(components=["Ag+", "Cl-", "Na+"])
    chloride = np.array([2e-4, 2.5e-3, 0.1])
    totals = np.column_stack([0.0 * chloride, chloride, chloride + 1e-4, 1e-4 + 0.0 * chloride])
    silver = 107868.0 * equilibrate(system, totals, ph=7.0).dissolved["Ag+"].to_numpy()
    assert 0.03 <= silver[1] <= 0.07
    assert silver[0] > 1.5 * silver[1]
    assert silver[2] > 5.0 * silver[1]


@pytest.mark.parametrize(
    ("metal", "best_ph", "least_mg_per_l"),
    [
        ("Zn+2", 9.6, 0.41),
        ("Cr+3", 8.9, 0.0076),
        ("Cu+2", 9.35, 0.0094),
        ("Ni+2", 10.3, 0.014),
        ("Cd+2", 11.85, 0.155),
        ("Al+3", 6.25, 0.17),
        ("Mn+2", 11.9, 0.012),
    ],
)
def test_fresh_hydroxides_have_their_least_solubility_where_a_second_solver_found_it(
    metal: str, best_ph: float, least_mg_per_l: float
) -> None:
    """Minima of the same constants at zero ionic strength, from a separate Newton solver."""
    system = load_system(components=[metal], activity="ideal")
    ph = np.arange(6.0, 13.0, 0.05)
    state = equilibrate(system, {metal: np.full(ph.size, 1e-2)}, ph=ph)
    residual = 1000.0 * molar_mass_g_per_mol(metal) * state.dissolved[metal].to_numpy()
    assert ph[residual.argmin()] == pytest.approx(best_ph, abs=0.101)
    assert residual.min() == pytest.approx(least_mg_per_l, rel=0.05)
