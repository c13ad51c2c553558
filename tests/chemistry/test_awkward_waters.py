"""Awkward waters by name: nothing there, everything there, ties, ladders of starts."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from catalogs import load_system
from chemistry import Solid, Species, System, equilibrate
from chemistry.state import certified_or_solved
from tests.chemistry.acid_rinse import ACID, COMPONENTS, PROTON, SYSTEM, assert_same, vector
from tests.chemistry.certificate import certify

WATER = Species.from_reaction("H2O = OH- + H+", -14.0)


def test_pure_water_is_neutral() -> None:
    state = equilibrate(System(["H+"], [WATER]), {"H+": 0.0})
    assert state.ph[0] == pytest.approx(7.0, abs=1e-6)
    assert certify(state).mass_balance[0] <= 1e-12


def test_one_component_without_reactions_stays_as_it_is() -> None:
    state = equilibrate(System(["Na+"], activity="ideal"), {"Na+": 0.123})
    assert state.dissolved_mol_per_l[0, 0] == pytest.approx(0.123, rel=1e-12)
    assert np.isnan(state.ph[0])


def test_one_component_with_a_solid_and_no_partner_precipitates_to_its_solubility() -> None:
    sulfur = System(
        ["Xx"], [], [Solid(name="Xx(s)", stoichiometry={"Xx": 1.0}, log10_k=4.0)], activity="ideal"
    )
    state = equilibrate(sulfur, {"Xx": np.array([1e-2, 1e-5])})
    np.testing.assert_allclose(state.dissolved_mol_per_l[:, 0], [1e-4, 1e-5], rtol=1e-9)


def test_zero_totals_are_absent_components() -> None:
    narrow = load_system(components=["H+", "Na+", "Cl-", "Zn+2"], activity="davies")
    water = {"Na+": 0.01, "Cl-": 0.012, "Zn+2": 1e-3, "H+": 0.0}
    small = equilibrate(narrow, water)
    whole = equilibrate(SYSTEM, water | {"Cu+2": 0.0, "CO3-2": 0.0})
    assert whole.ph[0] == pytest.approx(small.ph[0], abs=1e-10)
    absent = [SYSTEM.index[c] for c in ("Cu+2", "CO3-2", "Pb+2")]
    assert (whole.dissolved_mol_per_l[0, absent] == 0.0).all()
    assert (whole.saturation_index.loc[0, "CaCO3(s,calcite)"]) == -np.inf


def test_all_totals_zero_is_pure_water() -> None:
    state = equilibrate(SYSTEM, np.zeros((2, len(COMPONENTS))))
    np.testing.assert_allclose(state.ph, 7.0, atol=1e-3)
    assert (state.solids_mol_per_l == 0.0).all()


def test_no_states_give_no_states() -> None:
    state = equilibrate(SYSTEM, np.zeros((0, len(COMPONENTS))))
    assert state.ph.shape == (0,)
    assert len(state.dissolved) == 0


def test_nothing_precipitates_from_a_clear_acid() -> None:
    state = equilibrate(SYSTEM, {"Zn+2": 1e-3, "Cl-": 0.012, "H+": 0.01})
    assert (state.solids_mol_per_l == 0.0).all()
    assert state.saturation_index_log10.max() < 0.0


def test_everything_precipitates_where_salt_and_metal_match() -> None:
    """A heavy insoluble salt at its own ratio: solids hold all but the solubility."""
    salt = System(
        ["H+", "Aa+", "Bb-"], [WATER],
        [Solid(name="AaBb(s)", stoichiometry={"Aa+": 1.0, "Bb-": 1.0}, log10_k=30.0)],
        activity="ideal",
    )  # fmt: skip
    state = equilibrate(salt, {"Aa+": 0.2, "Bb-": 0.2, "H+": 0.0})
    np.testing.assert_allclose(state.dissolved_mol_per_l[0, 1:], 1e-15, rtol=1e-3)
    assert state.solids_mol_per_l[0, 0] == pytest.approx(0.2, rel=1e-12)


ZINC_SOLIDS = [
    Solid.from_reaction("Zn+2 + 2 H2O = Zn(OH)2(s) + 2 H+", -11.5),
    Solid.from_reaction("Zn+2 + CO3-2 = ZnCO3(s)", 10.2),
    Solid.from_reaction("5 Zn+2 + 2 CO3-2 + 6 H2O = Zn5(OH)6(CO3)2(s) + 6 H+", -13.7),
]
CARBONATES = [
    Species.from_reaction("CO3-2 + H+ = HCO3-", 10.33),
    Species.from_reaction("CO3-2 + 2 H+ = CO2(aq) + H2O", 16.68),
]


def zinc_system(*, solids: list[Solid] | None = None) -> System:
    return System(
        ["H+", "Na+", "Zn+2", "CO3-2"], [WATER, *CARBONATES],
        ZINC_SOLIDS if solids is None else solids, activity="ideal",
    )  # fmt: skip


def test_rank_deficient_solids_leave_two_of_three() -> None:
    """Hydroxide, carbonate and basic carbonate: their stoichiometries are linearly dependent."""
    system = zinc_system()
    assert np.linalg.matrix_rank(system.solid_formation) == 2
    base = np.linspace(0.0, 0.05, 40)
    state = equilibrate(system, {"Na+": base, "Zn+2": 0.01, "CO3-2": 0.006, "H+": 0.012 - base})
    worst = certify(state).worst()
    assert worst["mass_balance"] <= 1e-10
    assert worst["supersaturation"] <= 1e-8
    assert state.active.sum(axis=1).max() == 2
    assert {tuple(row) for row in state.active} > {(False, False, False)}


def test_a_tie_between_four_solids_leaves_three_with_positive_amounts() -> None:
    """3 Ni(OH)2 + 2 Ag3PO4 = Ni3(PO4)2 + 3 Ag2O + 3 H2O runs neither way with the constants.

    Keeping the three largest of the four would leave silver oxide with a negative amount.
    """
    system = load_system(activity="davies")
    water = {
        "H+": -0.07899684015684852, "Na+": 0.012310596530003397, "K+": 2.6455400987216502e-09,
        "Sr+2": 5.120071040016127e-05, "NH4+": 1.7329750475911812e-07,
        "SO4-2": 1.0133108769357793e-06, "CO3-2": 0.006156295697366995,
        "F-": 0.01563037616564358, "PO4-3": 0.021359274415981115, "Ag+": 0.06070612701063692,
        "Pb+2": 8.07412640056804e-05, "Cd+2": 0.00027691521077182976,
        "Cu+2": 0.002056793091251616, "Zn+2": 6.769275251009504e-09,
        "Ni+2": 0.04589240964287328, "Al+3": 2.6849040204727426e-05,
        "Hg+2": 0.000603038802734149,
    }  # fmt: skip
    state = equilibrate(system, water)
    tied = ["Ni(OH)2(s,fresh)", "Ag2O(s)", "Ni3(PO4)2(s)", "Ag3PO4(s)"]
    amounts = state.solids.loc[0, tied]
    assert (amounts > 0.0).sum() == 3
    np.testing.assert_allclose(state.saturation_index.loc[0, tied], 0.0, atol=1e-9)
    assert certify(state).least_amount[0] >= 0.0


def test_the_same_solid_under_two_names_is_held_once() -> None:
    twice = [
        ZINC_SOLIDS[0],
        Solid(
            **{
                name: getattr(ZINC_SOLIDS[0], name)
                for name in Solid.__dataclass_fields__
                if name != "name"
            },
            name="Zn(OH)2(s) again",
        ),
    ]
    one = equilibrate(zinc_system(solids=ZINC_SOLIDS[:1]), {"Zn+2": 0.01, "H+": -0.02})
    two = equilibrate(zinc_system(solids=twice), {"Zn+2": 0.01, "H+": -0.02})
    np.testing.assert_allclose(two.solids_mol_per_l.sum(), one.solids_mol_per_l.sum(), rtol=1e-9)
    np.testing.assert_allclose(two.dissolved_mol_per_l, one.dissolved_mol_per_l, rtol=1e-9)


@pytest.mark.parametrize("protons", [-0.05, -1e-3, -1e-8, -1e-14, 0.0, 1e-14, 1e-8, 1e-3, 0.05])
def test_the_proton_total_may_be_negative_or_near_0(protons: float) -> None:
    salt = {"Na+": 0.1 - min(protons, 0.0), "Cl-": 0.1 + max(protons, 0.0)}
    state = equilibrate(SYSTEM, salt | {"H+": protons})
    ideal = -np.log10(0.5 * (protons + np.sqrt(protons**2 + 4e-14)))
    assert state.ph[0] == pytest.approx(ideal, abs=0.35)  # activity coefficients move it
    assert certify(state).mass_balance[0] <= 1e-10
    assert state.certificate["charge"][0] < 1e-9


def test_another_choice_of_components_gives_the_same_water() -> None:
    """Bicarbonate in the place of carbonate: the constants move, the water does not."""
    direct = equilibrate(zinc_system(), {"Na+": 0.02, "Zn+2": 0.01, "CO3-2": 0.006, "H+": -0.004})
    other = System(
        ["H+", "Na+", "Zn+2", "HCO3-"],
        [
            WATER,
            Species.from_reaction("HCO3- = CO3-2 + H+", -10.33),
            Species.from_reaction("HCO3- + H+ = CO2(aq) + H2O", 16.68 - 10.33),
        ],
        [
            ZINC_SOLIDS[0],
            Solid.from_reaction("Zn+2 + HCO3- = ZnCO3(s) + H+", 10.2 - 10.33),
            Solid.from_reaction(
                "5 Zn+2 + 2 HCO3- + 6 H2O = Zn5(OH)6(CO3)2(s) + 8 H+", -13.7 - 2 * 10.33
            ),
        ],
        activity="ideal",
    )
    again = equilibrate(other, {"Na+": 0.02, "Zn+2": 0.01, "HCO3-": 0.006, "H+": -0.004 - 0.006})
    assert again.ph[0] == pytest.approx(direct.ph[0], abs=1e-9)
    np.testing.assert_allclose(again.solids_mol_per_l, direct.solids_mol_per_l, rtol=1e-8)


def test_a_start_from_a_water_with_more_components_is_no_trap() -> None:
    """Solids of a component that the new water lacks must not stay on."""
    rich = equilibrate(SYSTEM, ACID | {"H+": -0.01, "CO3-2": 5e-3})
    assert rich.active.any()
    poor = {"Na+": 0.02, "Cl-": 0.02, "H+": 0.0}
    assert_same(equilibrate(SYSTEM, poor, start=rich), equilibrate(SYSTEM, poor))


def test_a_start_makes_no_difference_along_a_ladder() -> None:
    base = np.linspace(0.0, 0.03, 31)
    totals = np.tile(vector(ACID), (base.size, 1))
    totals[:, PROTON] -= base
    totals[:, SYSTEM.index["Na+"]] += base
    cold = equilibrate(SYSTEM, totals)
    shifted = equilibrate(SYSTEM, totals[1:], start=cold.rows(np.arange(base.size - 1)))
    assert_same(shifted, cold.rows(np.arange(1, base.size)))


def test_values_that_claim_another_ionic_strength_are_not_trusted() -> None:
    """Above I = 0.5 the coefficients no longer tell the ionic strength, the certificate does."""
    totals = vector(ACID | {"Na+": 0.8, "Cl-": 0.8})[None, :]
    right = equilibrate(SYSTEM, totals)
    assert right.ionic_strength[0] > 0.7
    claimed = dataclasses.replace(right, surroundings=np.full((1, 1), 0.6))
    state = certified_or_solved(SYSTEM, totals, claimed, np.array([True]))
    np.testing.assert_allclose(state.ionic_strength, right.ionic_strength, rtol=1e-9)
