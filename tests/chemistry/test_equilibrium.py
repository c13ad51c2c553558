"""Equilibrium states: what every water promises, the awkward waters by name, and the errors."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import (
    EquilibriumError,
    EquilibriumState,
    Solid,
    Species,
    System,
    WaterError,
    equilibrate,
)
from chemistry.state import certified_or_solved
from tests.chemistry.certificate import certify

FloatArray = NDArray[np.float64]

COMPONENTS = (
    "H+", "Na+", "Ca+2", "Mg+2", "Cu+2", "Zn+2", "Pb+2", "Fe+3", "Cl-", "SO4-2", "CO3-2", "HS-",
)  # fmt: skip
SYSTEM = load_system(components=COMPONENTS, activity="davies")
IDEAL = load_system(components=COMPONENTS, activity="ideal")
PROTON = SYSTEM.index["H+"]

log10_totals = st.lists(
    st.floats(-9.0, -0.53, allow_nan=False) | st.just(-np.inf), min_size=11, max_size=11
)
batches = st.lists(log10_totals, min_size=1, max_size=4)
quick = settings(max_examples=25, deadline=None, derandomize=True, database=None)


def closed(logs: list[list[float]]) -> FloatArray:
    """Totals from logs of all but the protons, which close the charge."""
    others = 10.0 ** np.array(logs)
    totals = np.insert(others, PROTON, 0.0, axis=1)
    totals[:, PROTON] = -(totals @ SYSTEM.component_charges)
    return totals


def assert_same(one: EquilibriumState, other: EquilibriumState, rtol: float = 1e-9) -> None:
    """Same pH, dissolved totals and solids."""
    np.testing.assert_allclose(one.ph, other.ph, atol=1e-9)
    np.testing.assert_allclose(
        one.dissolved_mol_per_l, other.dissolved_mol_per_l, rtol=rtol, atol=1e-15
    )
    np.testing.assert_allclose(one.solids_mol_per_l, other.solids_mol_per_l, rtol=rtol, atol=1e-12)


# -- what every water promises ------------------------------------------------------------------


@quick
@given(batches)
def test_every_water_is_certified(logs: list[list[float]]) -> None:
    state = equilibrate(SYSTEM, closed(logs))
    worst = certify(state).worst()
    assert worst["mass_balance"] <= 1e-10
    assert worst["mass_action"] <= 1e-10
    assert worst["ionic_strength"] <= 1e-10
    assert worst["supersaturation"] <= 1e-8
    assert worst["presence"] <= 1e-8
    assert worst["least_amount"] >= 0.0


@quick
@given(batches)
def test_the_certificate_tells_the_errors_that_the_reactions_show(logs: list[list[float]]) -> None:
    state = equilibrate(SYSTEM, closed(logs))
    own, told = certify(state), state.certificate
    np.testing.assert_allclose(told["mass_balance"], own.mass_balance, atol=1e-13)
    np.testing.assert_allclose(told["supersaturation"], own.supersaturation, atol=1e-11)
    np.testing.assert_allclose(told["presence"], own.presence, atol=1e-11)
    assert told["charge"].max() < 1e-9  # the totals were closed
    assert told["converged"].all()


@quick
@given(batches)
def test_dissolved_and_solids_add_up_to_the_totals(logs: list[list[float]]) -> None:
    totals = closed(logs)
    state = equilibrate(SYSTEM, totals)
    added = state.dissolved_mol_per_l + state.solids_mol_per_l @ SYSTEM.solid_formation
    np.testing.assert_allclose(added, totals, rtol=1e-9, atol=1e-13)


@quick
@given(st.lists(log10_totals, min_size=3, max_size=5), st.randoms(use_true_random=False))
def test_a_water_does_not_notice_the_others(logs: list[list[float]], random) -> None:
    totals = closed(logs)
    whole = equilibrate(SYSTEM, totals)
    order = list(range(len(totals)))
    random.shuffle(order)
    assert_same(equilibrate(SYSTEM, totals[order]), whole.rows(np.array(order)))
    for i in range(len(totals)):
        assert_same(equilibrate(SYSTEM, totals[i]), whole.row(i))


@quick
@given(batches, st.randoms(use_true_random=False))
def test_the_order_of_components_species_and_solids_is_free(
    logs: list[list[float]], random
) -> None:
    state = equilibrate(SYSTEM, closed(logs))
    mixed = {}
    for part in ("components", "species", "solids"):
        mixed[part] = list(getattr(SYSTEM, part))
        random.shuffle(mixed[part])
    other = System(**mixed, activity="davies")
    totals = {c: state.totals[:, SYSTEM.index[c]] for c in SYSTEM.components}
    again = equilibrate(other, totals)
    np.testing.assert_allclose(again.ph, state.ph, atol=1e-9)
    np.testing.assert_allclose(
        again.dissolved[list(SYSTEM.components)], state.dissolved, rtol=1e-8, atol=1e-15
    )
    np.testing.assert_allclose(
        again.solids[list(SYSTEM.solid_names)], state.solids, rtol=1e-8, atol=1e-12
    )


@quick
@given(log10_totals, st.floats(1e-6, 0.1))
def test_more_of_a_solid_that_is_there_only_adds_to_it(logs: list[float], more: float) -> None:
    state = equilibrate(SYSTEM, closed([logs]))
    here = np.flatnonzero(state.solids_mol_per_l[0] > 0.0)
    if here.size == 0:
        return
    grown = equilibrate(SYSTEM, state.totals + more * SYSTEM.solid_formation[here[0]])
    np.testing.assert_allclose(grown.ph, state.ph, atol=1e-8)
    np.testing.assert_allclose(
        grown.dissolved_mol_per_l, state.dissolved_mol_per_l, rtol=1e-7, atol=1e-12
    )
    added = grown.solids_mol_per_l[0] - state.solids_mol_per_l[0]
    expected = more * (np.arange(added.size) == here[0])
    np.testing.assert_allclose(added, expected, atol=1e-11)


@quick
@given(log10_totals, st.floats(1e-6, 0.05), st.integers(0, len(COMPONENTS) - 1))
def test_more_of_a_component_raises_its_activity(
    logs: list[float], more: float, component: int
) -> None:
    """Gibbs energy is convex: without activity coefficients no component works against itself."""
    totals = closed([logs, logs])
    totals[1, component] += more
    state = equilibrate(IDEAL, totals)
    before, after = state.log_activity[:, component]
    assert after >= before - 1e-9


@quick
@given(log10_totals)
def test_ideal_waters_have_no_coefficients(logs: list[float]) -> None:
    state = equilibrate(IDEAL, closed([logs]))
    free = state.species_mol_per_l[:, : len(COMPONENTS)]
    there = free > 1e-280
    np.testing.assert_allclose(np.log(free[there]), state.log_activity[there], rtol=0, atol=1e-12)


@quick
@given(log10_totals, st.floats(2.0, 12.0))
def test_a_held_ph_needs_the_protons_that_make_it_by_themselves(
    logs: list[float], ph: float
) -> None:
    held = equilibrate(SYSTEM, closed([logs]), ph=ph)
    assert held.ph[0] == pytest.approx(ph, abs=1e-11)
    assert_same(equilibrate(SYSTEM, held.totals), held, rtol=1e-6)
    given_protons = closed([logs])[0, PROTON]
    assert held.titrant_mol_per_l[0] == pytest.approx(
        held.totals[0, PROTON] - given_protons, rel=1e-9, abs=1e-14
    )


# -- held pH, pressure and titrants --------------------------------------------------------------

ACID = {
    "Na+": 1e-3, "Ca+2": 1e-3, "Cu+2": 8e-4, "Zn+2": 5e-4, "Pb+2": 1e-4, "Fe+3": 3e-4,
    "Cl-": 2e-3, "SO4-2": 6e-3, "H+": 7.3e-3,
}  # fmt: skip
LIME = {"Ca+2": 1.0, "H+": -2.0}
TITRANTS = {
    "lime": (LIME, 9.5),
    "caustic": ({"Na+": 1.0, "H+": -1.0}, 10.5),
    "magnesium hydroxide": ({"Mg+2": 1.0, "H+": -2.0}, 8.8),
    "soda ash": ({"Na+": 2.0, "CO3-2": 1.0}, 8.5),
    "bicarbonate": ({"Na+": 1.0, "H+": 1.0, "CO3-2": 1.0}, 6.5),
    "sodium sulfide": ({"Na+": 2.0, "HS-": 1.0, "H+": -1.0}, 9.0),
    "sulfuric acid": ({"SO4-2": 1.0, "H+": 2.0}, 1.8),
    "ferric chloride": ({"Fe+3": 1.0, "Cl-": 3.0}, 2.15),
}


def vector(moles: dict[str, float], system: System = SYSTEM) -> FloatArray:
    return np.array([moles.get(c, 0.0) for c in system.components])


@pytest.mark.parametrize(("moles", "ph"), TITRANTS.values(), ids=list(TITRANTS))
def test_the_dose_that_holds_a_ph_makes_it_when_dosed(moles: dict[str, float], ph: float) -> None:
    held = equilibrate(SYSTEM, ACID, ph=ph, titrant=vector(moles))
    dose = held.titrant_mol_per_l[0]
    assert dose > 0.0
    dosed = vector(ACID) + dose * vector(moles)
    np.testing.assert_allclose(held.totals[0], dosed, rtol=1e-9, atol=1e-13)
    free = equilibrate(SYSTEM, dosed)
    assert free.ph[0] == pytest.approx(ph, abs=1e-7)
    assert_same(free, held, rtol=1e-6)


def test_every_ph_from_5_to_12_has_its_dose_of_lime_soda_ash_and_caustic() -> None:
    rng = np.random.default_rng(5)
    n = 60
    system = load_system(activity="davies")
    metals = ["Ca+2", "Mg+2", "Pb+2", "Cd+2", "Cu+2", "Zn+2", "Ni+2", "Fe+3", "Al+3", "Cr+3"]
    totals = np.zeros((n, len(system.components)))
    for metal in metals:
        drawn = 10.0 ** rng.uniform(-6.0, -2.0, n) * (rng.random(n) < 0.5)
        totals[:, system.index[metal]] = drawn
    totals[:, system.index["H+"]] = 10.0 ** rng.uniform(-4.0, -1.0, n)
    charge = totals @ system.component_charges
    totals[:, system.index["SO4-2"]] = 0.3 * charge / 2.0
    totals[:, system.index["Cl-"]] = 0.7 * charge
    for moles, highest in (
        (LIME, 12.0),
        (TITRANTS["caustic"][0], 12.0),
        ({"Na+": 2.0, "CO3-2": 1.0}, 10.0),
    ):
        ph = rng.uniform(5.0, highest, n)
        state = equilibrate(system, totals, ph=ph, titrant=vector(moles, system))
        np.testing.assert_allclose(state.ph, ph, atol=1e-10)
        assert certify(state).mass_balance.max() <= 1e-10


def test_a_dose_hidden_among_solids_is_found_from_the_dose_side() -> None:
    """A lead sulfate water whose held pH is reached only by bracketing the dose of soda ash."""
    system = load_system(activity="davies")
    water = {
        "H+": 0.0012519738932719876, "Na+": 0.15864994007528255, "Ca+2": 3.897347388983054e-05,
        "Cl-": 0.06877387624452233, "SO4-2": 0.0745061414345818, "Pb+2": 0.027949827576100414,
        "Zn+2": 0.0009533215225754442,
    }  # fmt: skip
    soda_ash = vector({"Na+": 2.0, "CO3-2": 1.0}, system)
    state = equilibrate(system, water, ph=6.183512537453714, titrant=soda_ash)
    assert state.titrant_mol_per_l[0] == pytest.approx(8.27514e-4, rel=1e-5)


@pytest.mark.parametrize("dose", [1e-4, 1e-6, 1e-8, 1e-10])
def test_a_dose_far_below_the_acid_it_meets_is_found(dose: float) -> None:
    """Read off the proton balance of a strong buffer, such a dose would drown in rounding."""
    system = load_system(activity="davies")
    buffer = {"H+": 0.945, "NH4+": 0.227, "F-": 0.128, "PO4-3": 0.26, "CH3COO-": 0.263}
    caustic = vector({"Na+": 1.0, "H+": -1.0}, system)
    dosed = equilibrate(system, vector(buffer, system) + dose * caustic)
    held = equilibrate(system, buffer, ph=dosed.ph, titrant=caustic)
    assert held.titrant_mol_per_l[0] == pytest.approx(dose, rel=1e-4, abs=1e-14)
    assert certify(held).mass_balance[0] <= 1e-10


def test_the_pressure_of_a_closed_water_holds_its_carbonate() -> None:
    closed_water = ACID | {"CO3-2": 3e-3, "H+": 3e-4}
    free = equilibrate(SYSTEM, closed_water)
    pressure = free.partial_pressure_atm("CO2(aq)")
    open_water = equilibrate(SYSTEM, closed_water, pco2_atm=pressure)
    assert_same(open_water, free, rtol=1e-7)
    np.testing.assert_allclose(open_water.totals, free.totals, rtol=1e-8, atol=1e-13)


def test_carbon_dioxide_enters_an_open_water_with_its_protons() -> None:
    state = equilibrate(SYSTEM, {"Na+": 1e-3, "H+": -1e-3}, pco2_atm=4e-4)
    carbonate = SYSTEM.index["CO3-2"]
    taken_up = state.totals[0, carbonate]
    assert taken_up > 9e-4
    assert state.totals[0, PROTON] == pytest.approx(-1e-3 + 2.0 * taken_up, rel=1e-10)
    assert state.partial_pressure_atm("CO2(aq)")[0] == pytest.approx(4e-4, rel=1e-10)


def test_rain_in_equilibrium_with_air_has_a_ph_near_5_6() -> None:
    assert equilibrate(SYSTEM, {"H+": 0.0}, pco2_atm=4.2e-4).ph[0] == pytest.approx(5.6, abs=0.05)


def test_states_may_differ_in_what_is_held() -> None:
    ph = np.array([np.nan, 9.0])
    both = equilibrate(SYSTEM, ACID, ph=ph)
    assert_same(both.row(0), equilibrate(SYSTEM, ACID))
    assert_same(both.row(1), equilibrate(SYSTEM, ACID, ph=9.0))


# -- awkward waters by name ----------------------------------------------------------------------

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


# -- errors --------------------------------------------------------------------------------------


def refused(match: str, *arguments: object, **held: object) -> None:
    with pytest.raises(WaterError, match=match):
        equilibrate(SYSTEM, *arguments, **held)  # type: ignore[arg-type]


def test_totals_that_are_no_numbers_name_state_component_and_value() -> None:
    refused(
        r"state 1: total of Cu\+2 is nan mol/L, expected a finite number, 0 or more",
        {"Cu+2": [1e-3, np.nan]},
    )
    refused(r"state 0: total of H\+ is inf mol/L, expected a finite number$", {"H+": np.inf})


def test_negative_totals_are_refused_but_for_protons() -> None:
    refused(r"state 0: total of Zn\+2 is -0\.001 mol/L", {"Zn+2": -1e-3, "Cl-": 1.0})
    assert equilibrate(SYSTEM, {"Na+": 1e-3, "H+": -1e-3}).ph[0] > 10.0


def test_every_bad_total_is_told_at_once() -> None:
    with pytest.raises(WaterError) as caught:
        equilibrate(SYSTEM, {"Zn+2": [-1e-3, 1e-3], "Cl-": [1.0, np.nan]})
    assert str(caught.value).count("state ") == 2


def test_totals_above_what_water_holds_are_refused() -> None:
    refused(
        r"state 0: total of Na\+ is 61 mol/L, more than any water holds \(60 mol/L\)", {"Na+": 61.0}
    )


def test_unknown_components_are_named() -> None:
    refused(r"unknown components: Xx\+2, Zn; the system has H\+, Na\+", {"Zn": 1.0, "Xx+2": 1.0})


def test_wrong_shapes_are_refused() -> None:
    refused(r"totals have shape \(2, 3\): expected \(states, 12\)", np.zeros((2, 3)))
    refused(r"totals have shape \(2, 12, 1\)", np.zeros((2, 12, 1)))
    refused(r"totals of different lengths: \[2, 3\]", {"Na+": [1.0, 1.0], "Cl-": [1.0] * 3})
    refused(r"different numbers of states: 2, 3", {"Na+": [1.0, 1.0]}, ph=[7.0, 8.0, 9.0])
    refused(
        r"titrant has shape \(5,\): expected \(12,\) or \(1, 12\)", ACID, ph=7.0, titrant=np.ones(5)
    )


def test_a_ph_or_pressure_out_of_range_is_refused() -> None:
    refused(r"state 1: pH 17\.5 is outside -3 to 17", ACID, ph=[7.0, 17.5])
    refused(r"state 0: pH -4 is outside -3 to 17", ACID, ph=-4.0)
    refused(r"state 0: pCO2 0 atm is outside 0 to 100 atm", ACID, pco2_atm=0.0)
    refused(r"state 0: pCO2 -1 atm is outside", ACID, pco2_atm=-1.0)


def test_what_the_system_cannot_hold_is_refused() -> None:
    dry = System(["Na+", "Cl-"])
    with pytest.raises(WaterError, match=r"pH cannot be held: the system has no component H\+"):
        equilibrate(dry, {"Na+": 1.0}, ph=7.0)
    with pytest.raises(WaterError, match=r"pCO2 cannot be held: the system has no species CO2"):
        equilibrate(dry, {"Na+": 1.0}, pco2_atm=1e-3)


def test_a_titrant_that_cannot_move_the_ph_is_refused() -> None:
    refused(
        "the titrant cannot hold the pH: it carries neither protons",
        ACID,
        ph=8.0,
        titrant=vector({"Na+": 1.0, "Cl-": 1.0}),
    )
    refused(
        "the titrant cannot hold the pH",
        ACID,
        ph=8.0,
        pco2_atm=1e-3,
        titrant=vector({"CO3-2": 1.0, "H+": 2.0}),
    )
    refused(r"state 0: titrant holds nan of Na\+", ACID, ph=8.0, titrant=vector({"Na+": np.nan}))


def test_a_start_of_another_shape_is_refused() -> None:
    two = equilibrate(SYSTEM, {"Na+": [1e-3, 1e-3], "Cl-": 1e-3})
    refused(
        r"start has \(states, components\) \(2, 12\), the totals have \(1, 12\)", ACID, start=two
    )


def test_a_ph_that_no_dose_reaches_is_an_error_with_the_water_to_try_again() -> None:
    magnesia = vector({"Mg+2": 1.0, "H+": -2.0})
    with pytest.raises(EquilibriumError) as caught:
        equilibrate(SYSTEM, ACID, ph=12.0, titrant=magnesia)
    text = str(caught.value)
    assert text.startswith("1 of 1 states missed their certificate")
    assert "'Zn+2': 0.0005" in text
    assert "pH 12 held with {'H+': -2.0, 'Mg+2': 1.0}: perhaps no dose reaches it" in text


def test_a_missed_state_is_flagged_where_asked_and_leaves_the_others_alone() -> None:
    magnesia = vector({"Mg+2": 1.0, "H+": -2.0})
    state = equilibrate(SYSTEM, ACID, ph=[8.5, 12.0], titrant=magnesia, on_failure="flag")
    assert state.converged.tolist() == [True, False]
    assert certify(state.row(0)).mass_balance[0] <= 1e-10


def test_a_ph_that_takes_more_than_water_holds_is_missed_not_answered() -> None:
    state = equilibrate(SYSTEM, {"Na+": 0.1, "H+": -0.1}, ph=13.0, pco2_atm=1.0, on_failure="flag")
    assert not state.converged[0]


def test_on_failure_takes_two_words() -> None:
    with pytest.raises(ValueError, match="on_failure is 'ignore': use 'raise' or 'flag'"):
        equilibrate(SYSTEM, ACID, on_failure="ignore")


def test_pressures_are_known_for_two_gases() -> None:
    state = equilibrate(SYSTEM, ACID | {"HS-": 1e-3})
    assert state.partial_pressure_atm("H2S(aq)")[0] > 0.0
    assert equilibrate(System(["H+"], [WATER]), {"H+": 0.0}).partial_pressure_atm("CO2(aq)") == 0.0
    with pytest.raises(KeyError):
        state.partial_pressure_atm("NH3(aq)")


def test_frames_carry_names() -> None:
    state = equilibrate(SYSTEM, {"Na+": [1e-3, 2e-3], "Cl-": [1e-3, 2e-3]})
    assert tuple(state.dissolved.columns) == SYSTEM.components
    assert tuple(state.solids.columns) == SYSTEM.solid_names
    assert tuple(state.saturation_index.columns) == SYSTEM.solid_names
    assert len(state.certificate) == 2
