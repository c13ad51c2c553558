"""Masses of solids, their metal content and what slips past a separator."""

from __future__ import annotations

import numpy as np
import pytest

from chemistry.errors import WaterError
from chemistry.formula import molar_mass_g_per_mol
from chemistry.sludge import (
    carried_fraction,
    dry_masses_mg_per_l,
    formula_masses_g_per_mol,
    is_hydroxide,
    metal_content_mg_per_kg,
    metals_of,
    sludge,
    wet_mass,
)
from chemistry.system import Solid, System

REACTIONS = {
    "Cu(OH)2(s)": "Cu+2 + 2 H2O = Cu(OH)2(s) + 2 H+",
    "Pb2O(OH)2(s)": "2 Pb+2 + 3 H2O = Pb2O(OH)2(s) + 4 H+",
    "PbO(s)": "Pb+2 + H2O = PbO(s) + 2 H+",
    "Zn5(OH)6(CO3)2(s)": "5 Zn+2 + 2 CO3-2 + 6 H2O = Zn5(OH)6(CO3)2(s) + 6 H+",
    "CaSO4.2H2O(s)": "Ca+2 + SO4-2 + 2 H2O = CaSO4.2H2O(s)",
    "ZnS(s)": "Zn+2 + HS- = ZnS(s) + H+",
}
HYDROXIDES = {"Cu(OH)2(s)", "Pb2O(OH)2(s)"}


def system() -> System:
    # Masses only: the constants play no part here.
    solids = [Solid.from_reaction(reaction, 1.0) for reaction in REACTIONS.values()]
    components = ["H+", "Cu+2", "Pb+2", "Zn+2", "Ca+2", "SO4-2", "CO3-2", "HS-"]
    return System(components, (), solids)


def amounts(**mol_per_l: float) -> np.ndarray:
    found = np.zeros(len(REACTIONS))
    for name, value in mol_per_l.items():
        found[[n.split("(s")[0] for n in REACTIONS].index(name)] = value
    return found


def test_masses_from_components_and_water_are_those_of_the_formula() -> None:
    expected = [molar_mass_g_per_mol(name.removesuffix("(s)")) for name in REACTIONS]
    assert formula_masses_g_per_mol(system()) == pytest.approx(expected, rel=1e-12)


def test_only_hydroxides_hold_bound_water() -> None:
    names = np.array(system().solid_names)
    assert set(names[is_hydroxide(system())]) == HYDROXIDES
    bare = dry_masses_mg_per_l(np.ones(6), system(), bound_water_factor=1.0)
    wet = dry_masses_mg_per_l(np.ones(6), system(), bound_water_factor=1.3)
    expected = np.where(is_hydroxide(system()), 1.3, 1.0)
    assert wet / bare == pytest.approx(expected, rel=1e-12)


def test_a_kilogram_of_copper_makes_1_535_kg_of_hydroxide() -> None:
    # Stoichiometry, tolerance 0.2 %.
    copper = 1.0 / molar_mass_g_per_mol("Cu")
    dry = dry_masses_mg_per_l(np.array([copper, 0, 0, 0, 0, 0.0]), system(), bound_water_factor=1.0)
    assert dry.sum() / 1000.0 == pytest.approx(1.535, rel=0.002)


def test_hundred_kg_dry_at_30_percent_are_a_third_of_a_tonne_wet() -> None:
    assert wet_mass(100.0, 0.30) == pytest.approx(333.3, rel=1e-3)
    with pytest.raises(WaterError, match="cake solids fraction 0 is outside 0 to 1"):
        wet_mass(100.0, 0.0)


def test_twenty_mg_of_copper_floc_carry_13_mg_of_copper() -> None:
    # 0.05 mg/L dissolved and 20 mg/L TSS of pure Cu(OH)2: 13.08 mg/L, arithmetic, 1 %.
    solid = sludge(np.array([1e-3, 0, 0, 0, 0, 0.0]), system(), bound_water_factor=1.0)
    share = carried_fraction(solid.dry_mg_per_l, tss_mg_per_l=20.0, capture_fraction=0.0)
    copper = solid.metal_mg_per_l[0, solid.metals.index("Cu")]
    assert 0.05 + float(share[0]) * copper == pytest.approx(13.08, rel=0.01)


def test_carry_over_is_the_smaller_of_tss_and_what_is_not_captured() -> None:
    dry = np.array([0.0, 100.0, 2000.0])
    share = carried_fraction(dry, tss_mg_per_l=15.0, capture_fraction=0.985)
    assert share * dry == pytest.approx([0.0, 1.5, 15.0])


def test_everything_that_settles_is_weighed_and_metals_are_kept() -> None:
    states = np.stack([amounts(ZnS=1e-3), np.zeros(6)])
    found = sludge(
        states, system(), cake_solids_fraction=0.25, unreacted_mg_per_l=np.array([10.0, 0.0]),
        feed_tss_mg_per_l=15.0, feed_particulate_mg_per_l={"Cu": 2.0, "Zn": 1.0},
        polymer_g_per_kg=4.0,
    )  # fmt: skip
    sulfide = 1000.0 * 1e-3 * molar_mass_g_per_mol("ZnS")
    expected = 1.004 * np.array([sulfide + 10.0 + 15.0, 15.0])
    assert found.dry_mg_per_l == pytest.approx(expected, rel=1e-12)
    assert found.wet_mg_per_l == pytest.approx(4.0 * expected, rel=1e-12)
    assert found.metals == metals_of(system()) == ("Cu", "Zn", "Pb")
    zinc = 65.38 + 1.0
    assert found.metal_mg_per_l == pytest.approx(np.array([[2.0, zinc, 0], [2.0, 1.0, 0]]))
    assert found.metal_mg_per_kg_dry[1, 0] == pytest.approx(2.0 / expected[1] * 1e6)
    assert found.masses_by_name(0) == {"ZnS(s)": pytest.approx(sulfide)}


def test_particles_outweigh_a_missing_suspended_solids_value() -> None:
    found = sludge(np.zeros(6), system(), feed_particulate_mg_per_l={"Cu": 2.0})
    assert found.dry_mg_per_l == pytest.approx([2.0])


def test_no_solids_no_metal_content() -> None:
    assert metal_content_mg_per_kg(np.zeros((1, 2)), np.zeros(1)) == pytest.approx(0.0)


def test_a_bound_water_factor_below_one_is_refused() -> None:
    with pytest.raises(WaterError, match=r"bound water factor 0\.9 is below 1"):
        dry_masses_mg_per_l(np.zeros(6), system(), bound_water_factor=0.9)
