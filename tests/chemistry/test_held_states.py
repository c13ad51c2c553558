"""States with a held pH or CO2 pressure, and the doses of titrants that hold them."""

from __future__ import annotations

import numpy as np
import pytest

from catalogs import load_system
from chemistry import equilibrate
from tests.chemistry.acid_rinse import ACID, LIME, PROTON, SYSTEM, assert_same, vector
from tests.chemistry.certificate import certify

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
