"""What holds a metal up: the leading species and chelates, in plans and in words."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from catalogs import load_system
from chemistry import equilibrate
from chemistry.analysis import ANALYTES, CHELATES
from optimiser import assess
from optimiser.held_up import COMPLEXING, LIGANDS, HeldUp, held_up_by, kind_of, ligands_of
from optimiser.render import assessment_text
from optimiser.site import Site
from tests.optimiser.small_sites import CARBONATE, dosed, own, row_of, small_site

DOSES = {"caustic_soda": 190.0}


def held_in(totals: dict[str, float], metal: str, ph: float) -> HeldUp:
    system = load_system(components=list(totals))
    state = equilibrate(system, totals, ph=ph)
    weights = np.zeros(len(system.components))
    weights[system.index[metal]] = 1000.0
    found = held_up_by(state, 0, weights)
    assert found is not None
    return found


@pytest.mark.parametrize(
    ("totals", "metal", "ph", "species", "kind", "ligand"),
    [
        ({"Pb+2": 1e-5, "SO4-2": 0.1, "Na+": 0.2}, "Pb+2", 4.0, "PbSO4(aq)", "ion pair", "sulfate"),
        ({"Zn+2": 1e-6, "Na+": 1e-3}, "Zn+2", 6.0, "Zn+2", "free ion", ""),
        ({"Zn+2": 1e-3, "Na+": 1e-3}, "Zn+2", 9.5, "Zn(OH)2(aq)", "hydroxo complex", ""),
        ({"Ag+": 1e-4, "Cl-": 3e-3, "Na+": 3e-3}, "Ag+", 6.0, "AgCl(aq)", "complex", "chloride"),
        ({"Ni+2": 1e-5, "(EDTA)-4": 1e-3, "Na+": 4e-3}, "Ni+2", 9.0, "Ni(EDTA)-2", "chelate",
         "EDTA"),
        ({"Hg+2": 1e-5, "HS-": 1e-3, "Na+": 1e-3}, "Hg+2", 8.5, "HgS2-2", "complex", "sulfide"),
    ],
)  # fmt: skip
def test_the_leading_species_and_its_kind(
    totals: dict[str, float], metal: str, ph: float, species: str, kind: str, ligand: str
) -> None:
    found = held_in(totals, metal, ph)
    if metal == "Hg+2":  # which of the sulfide complexes leads depends on the constants
        assert (found.kind, found.ligand) == (kind, ligand)
    else:
        assert (found.species, found.kind, found.ligand) == (species, kind, ligand)
    assert 30.0 < found.share_percent <= 100.0


def test_shares_are_those_of_the_species() -> None:
    system = load_system(components=["Cu+2", "NH4+", "Na+", "Cl-"])
    totals = {"Cu+2": 1e-5, "NH4+": 0.02, "Cl-": 0.02, "Na+": 1e-3}
    state = equilibrate(system, totals, ph=9.3)
    weights = np.zeros(len(system.components))
    weights[system.index["Cu+2"]] = 63546.0
    found = held_up_by(state, 0, weights)
    assert found is not None
    copper = system.formation[:, system.index["Cu+2"]] * state.species_mol_per_l[0]
    assert found.share_percent == pytest.approx(100.0 * copper.max() / copper.sum())
    with_ammonia = [
        k for k in range(copper.size) if "ammonia" in ligands_of(system, k) and copper[k] > 0.0
    ]
    expected = 100.0 * copper[with_ammonia].sum() / copper.sum()
    assert found.complexing_share_percent == pytest.approx(expected)
    assert found.complexing == "ammonia"
    assert found.text.endswith(f"complex with ammonia, {found.share_percent:.0f} %")


def test_a_metal_that_is_not_there_is_held_by_nothing() -> None:
    system = load_system(components=["Cu+2", "Na+"])
    state = equilibrate(system, {"Na+": 1e-3, "Cu+2": 0.0}, ph=7.0)
    assert held_up_by(state, 0, np.eye(len(system.components))[system.index["Cu+2"]]) is None


def test_every_species_of_the_catalog_has_a_kind() -> None:
    names = ["free ion", "hydroxo complex", "ion pair", "complex", "chelate"]
    system = load_system(components=[*load_system().components, *LIGANDS])
    kinds = {kind_of(system, k) for k in range(len(system.species_names))}
    assert kinds == set(names)


def test_complexing_matter_is_what_feeds_may_carry() -> None:
    assert set(CHELATES) < set(COMPLEXING)
    components = {ANALYTES[name].component for name in (*CHELATES, "NH4", "acetate")}
    assert components == {c for c, name in LIGANDS.items() if name in COMPLEXING}


# -- in plans ------------------------------------------------------------------------------------


def assessed(site: Site) -> dict[str, Any]:
    return dict(assess(site, DOSES).to_dict())


@pytest.fixture(scope="module")
def chelated() -> dict[str, Any]:
    """Copper and zinc with enough EDTA for a third of the copper."""
    return assessed(small_site({"feed": {"analysis": {"EDTA": "90 mg/L"}}}))


def test_a_plan_says_which_species_holds_each_metal_up(chelated: dict[str, Any]) -> None:
    for row in chelated["limits"]:
        held = row["held_up_by"]
        assert held["share_percent"] <= 100.0
        assert held["species"] in held["text"]
    copper = next(row for row in chelated["limits"] if row["parameter"] == "Cu")
    assert copper["held_up_by"]["complexing"] == "EDTA"
    assert copper["held_up_by"]["kind"] == "chelate"


def test_a_chelate_that_holds_a_metal_up_is_a_caution(chelated: dict[str, Any]) -> None:
    [said] = [c for c in chelated["cautions"] if c.startswith("EDTA holds Cu up: ")]
    share = chelated["limits"][0]["held_up_by"]["complexing_share_percent"]
    assert share > 90.0
    assert f"{share:.0f} % of what stays dissolved in the worst state is bound to it" in said


def test_without_the_chelate_there_is_no_such_caution() -> None:
    plain = assessed(small_site())
    assert not any(" up: " in caution for caution in plain["cautions"])
    assert all(row["held_up_by"]["complexing"] == "" for row in plain["limits"])


def test_the_metal_that_the_chelate_holds_is_about_one_to_one() -> None:
    """90 mg/L of the acid is 0.31 mmol/L, and copper wins it: 20 mg/L stay dissolved."""
    site = small_site({"feed": {"analysis": {"EDTA": "90 mg/L"}}})
    state = equilibrate(site.system, dosed(site, DOSES))
    system = site.system
    copper = state.dissolved_mol_per_l[0, system.index["Cu+2"]]
    chelate = state.totals[0, system.index["(EDTA)-4"]]
    assert chelate == pytest.approx(90e-3 / 292.24, rel=1e-3)
    metals = copper + state.dissolved_mol_per_l[0, system.index["Zn+2"]]
    assert 0.9 * chelate < metals < 1.5 * chelate


def test_the_text_names_what_holds_up_metals_that_stay_dissolved(chelated: dict[str, Any]) -> None:
    text = assessment_text(chelated)
    flat = " ".join(text.split())
    assert "Held in solution: Cu as " in flat
    assert "chelate with EDTA" in flat
    assert max(len(line) for line in text.splitlines()) <= 100


def test_a_sum_of_metals_is_held_by_what_holds_most_of_it() -> None:
    limit = own({"parameter": "sum", "of": ["Cu", "Zn"], "daily_mg_per_l": 3.0})
    row = row_of(assess(small_site(limit), DOSES), "Cu + Zn")
    assert row["held_up_by"]["species"].startswith("Zn")


def test_limits_without_metals_are_held_up_by_nothing() -> None:
    limit = own({"parameter": "SO4", "daily_mg_per_l": 900})
    site = small_site(CARBONATE, limit, {"feed": {"analysis": {"SO4": "50 mg/L"}}})
    assert row_of(assess(site, {"caustic_soda": 100.0}), "SO4")["held_up_by"] is None
