"""Temperature: published lime pH, constants that move, exact derivatives, temperatures refused."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from catalogs import load_system
from catalogs.practice_data import gas_solubilities
from chemistry import EquilibriumState, Solid, Species, System, equilibrate
from chemistry.errors import SystemDefinitionError
from chemistry.gas import ln_henry, ln_henry_slope
from chemistry.temperature import debye_hueckel_slope

FloatArray = NDArray[np.float64]

STEP_DEGC = 0.01
AGREES = 2e-6  # of a central difference over +-0.01 C, relative to the largest of its kind
COMPONENTS = ("H+", "Na+", "Ca+2", "Cu+2", "Zn+2", "Cl-", "SO4-2", "CO3-2")
LIME = {"Ca+2": 1.0, "H+": -2.0}
RINSE = {
    "Na+": 2e-3, "Ca+2": 1e-3, "Cu+2": 6e-4, "Zn+2": 3e-4, "Cl-": 2e-3, "SO4-2": 5e-3,
    "CO3-2": 1e-3, "H+": 8.2e-3,
}  # fmt: skip
LIMED = RINSE | {"H+": 8.2e-3 - 2 * 8.5e-3, "Ca+2": 9.5e-3}
SALTY = LIMED | {"Na+": 0.602, "Cl-": 0.602}
GYPSUM = LIMED | {"Ca+2": 0.0995, "Na+": 0.102, "SO4-2": 0.145}
HELD: Mapping[str, Mapping[str, Any]] = {
    "free": {},
    "pH": {"ph": 9.0},
    "pCO2": {"pco2_atm": 4e-4},
    "pH and pCO2": {"ph": 7.9, "pco2_atm": 4e-4},
    "pH by lime": {"ph": 9.0, "titrant": LIME},
}
CASES = [
    *((RINSE, held) for held in HELD),
    *((LIMED, held) for held in HELD),
    (SALTY, "free"),
    (SALTY, "pCO2"),
    (GYPSUM, "free"),
]


def solved(
    temperature_degc: float, totals: Mapping[str, float], held: str, activity: str
) -> EquilibriumState:
    system = load_system(temperature_degc, components=COMPONENTS, activity=activity)
    how = dict(HELD[held])
    if "titrant" in how:
        how["titrant"] = np.array([how["titrant"].get(c, 0.0) for c in system.components])
    return equilibrate(system, totals, **how)


def assert_close(
    found: FloatArray, below: FloatArray, above: FloatArray, agrees: float = AGREES
) -> None:
    expected = (above - below) / (2.0 * STEP_DEGC)
    largest = max(float(np.abs(expected).max(initial=0.0)), 1e-9)
    np.testing.assert_allclose(found, expected, rtol=agrees, atol=agrees * largest)


@pytest.mark.parametrize("activity", ["davies", "sit"])
@pytest.mark.parametrize("temperature_degc", [12.3, 21.7, 37.0])
@pytest.mark.parametrize(("totals", "held"), CASES)
def test_derivatives_are_those_of_systems_a_hundredth_of_a_degree_away(
    totals: Mapping[str, float], held: str, temperature_degc: float, activity: str
) -> None:
    below, here, above = (
        solved(temperature_degc + step, totals, held, activity)
        for step in (-STEP_DEGC, 0.0, STEP_DEGC)
    )
    assert (below.active == above.active).all(), "no solid may come or go in between"
    slopes = here.sensitivity_to_temperature()
    assert_close(
        slopes.dissolved[0, :, 0], below.dissolved_mol_per_l[0], above.dissolved_mol_per_l[0]
    )
    assert_close(slopes.solids[0, :, 0], below.solids_mol_per_l[0], above.solids_mol_per_l[0])
    assert_close(slopes.titrant[:, 0], below.titrant_mol_per_l, above.titrant_mol_per_l)
    if "pH" in held.split():
        assert slopes.ph[0, 0] == pytest.approx(0.0, abs=1e-12)
    else:
        assert_close(slopes.ph[:, 0], below.ph, above.ph)
    if "pCO2" in held.split():
        carbonate = here.system.index["CO3-2"]
        moved = slopes.dissolved[0, carbonate, 0] + (
            here.system.solid_formation[:, carbonate] @ slopes.solids[0, :, 0]
        )
        assert_close(np.array([moved]), below.totals[:, carbonate], above.totals[:, carbonate])


@pytest.mark.parametrize("activity", ["davies", "sit"])
def test_at_a_node_of_the_table_of_a_the_slope_is_the_mean_of_both_sides(activity: str) -> None:
    """A is read from a table with a node at 25 C; its kink leaves 1e-5 in a difference."""
    below, here, above = (
        solved(25.0 + step, LIMED, "free", activity) for step in (-STEP_DEGC, 0.0, STEP_DEGC)
    )
    slopes = here.sensitivity_to_temperature()
    dissolved = below.dissolved_mol_per_l[0], above.dissolved_mol_per_l[0]
    assert_close(slopes.dissolved[0, :, 0], *dissolved, agrees=2e-5)
    assert debye_hueckel_slope(25.0) == pytest.approx(
        0.5 * (debye_hueckel_slope(24.9) + debye_hueckel_slope(25.1)), rel=1e-9
    )


def test_the_waters_above_hold_solids() -> None:
    assert solved(25.0, RINSE, "free", "davies").active.sum() == 0
    assert solved(25.0, LIMED, "free", "davies").active.sum() >= 3
    assert solved(25.0, GYPSUM, "free", "davies").active.sum() >= 4
    assert solved(25.0, SALTY, "free", "davies").ionic_strength[0] > 0.5


def test_derivatives_of_a_batch_are_those_of_its_states() -> None:
    system = load_system(18.0, components=COMPONENTS)
    totals = {c: np.array([RINSE[c], LIMED[c], GYPSUM[c]]) for c in COMPONENTS}
    together = equilibrate(system, totals, ph=[math.nan, 9.0, math.nan])
    slopes = together.sensitivity_to_temperature()
    for i in range(3):
        alone = together.row(i).sensitivity_to_temperature()
        np.testing.assert_allclose(slopes.dissolved[i], alone.dissolved[0], rtol=1e-9, atol=1e-18)
        np.testing.assert_allclose(slopes.titrant[i], alone.titrant[0], rtol=1e-9, atol=1e-18)


def test_without_enthalpies_and_activity_nothing_moves() -> None:
    system = System(
        ["H+", "Ag+", "Cl-"], [Species.from_reaction("H2O = OH- + H+", -14.0)],
        [Solid.from_reaction("Ag+ + Cl- = AgCl(s)", 9.75)], activity="ideal",
    )  # fmt: skip
    state = equilibrate(system, {"Ag+": 1e-3, "Cl-": 2e-3, "H+": 1e-3})
    slopes = state.sensitivity_to_temperature()
    assert np.abs(slopes.dissolved).max() == 0.0
    assert slopes.ph[0, 0] == 0.0


def test_a_solubility_product_moves_as_van_t_hoff_says() -> None:
    system = System(
        ["Ag+", "Cl-"], [],
        [Solid.from_reaction("Ag+ + Cl- = AgCl(s)", 9.75, enthalpy_kj_per_mol=-65.7)],
        activity="ideal",
    )  # fmt: skip
    state = equilibrate(system, {"Ag+": 1e-3, "Cl-": 1e-3})
    slopes = state.sensitivity_to_temperature()
    # s = K^-1/2, so d ln s / dT = -dH / (2 R T^2) = 0.04445
    relative = slopes.dissolved[0, 0, 0] / state.dissolved_mol_per_l[0, 0]
    assert relative == pytest.approx(65.7 / (2 * 8.314462618e-3 * 298.15**2), rel=1e-10)


# Bates, Bower & Smith 1956, J. Res. NBS 56, 305: saturated lime near 25 C.
PUBLISHED_LIME_PH_PER_DEGC = -0.033
PUBLISHED_LIME_TOLERANCE = 0.004


def lime_water(temperature_degc: float) -> EquilibriumState:
    system = load_system(temperature_degc, components=["Ca+2"], solids=["Ca(OH)2(s)"])
    return equilibrate(system, {"Ca+2": 0.05, "H+": -0.1})


def test_saturated_lime_loses_ph_with_warmth_as_published() -> None:
    cold, middle, warm = (lime_water(t) for t in (20.0, 25.0, 30.0))
    assert all(state.solids_mol_per_l[0, 0] > 0.0 for state in (cold, middle, warm))
    for low, high, span in ((cold, warm, 10.0), (cold, middle, 5.0), (middle, warm, 5.0)):
        slope = float(high.ph[0] - low.ph[0]) / span
        assert slope == pytest.approx(PUBLISHED_LIME_PH_PER_DEGC, abs=PUBLISHED_LIME_TOLERANCE)
    exact = float(middle.sensitivity_to_temperature().ph[0, 0])
    assert exact == pytest.approx(PUBLISHED_LIME_PH_PER_DEGC, abs=PUBLISHED_LIME_TOLERANCE)


def test_lime_dissolves_less_in_warm_water() -> None:
    assert lime_water(25.0).sensitivity_to_temperature().dissolved[0, 1, 0] < 0.0


@pytest.mark.parametrize("temperature_degc", [-0.1, 60.1, 300.0, math.nan, math.inf])
def test_temperatures_without_constants_are_refused(temperature_degc: float) -> None:
    expected = f"temperature {temperature_degc} C is outside 0 to 60 C, where the constants hold"
    with pytest.raises(SystemDefinitionError, match=expected):
        load_system(temperature_degc, components=["Ca+2"])


@pytest.mark.parametrize("temperature_degc", [0.0, 60.0])
def test_the_ends_of_the_range_have_derivatives(temperature_degc: float) -> None:
    slopes = lime_water(temperature_degc).sensitivity_to_temperature()
    assert np.isfinite(slopes.dissolved).all()
    assert debye_hueckel_slope(temperature_degc) > 0.0


def test_henry_constants_are_those_of_the_catalog_at_every_temperature() -> None:
    for gas in gas_solubilities().values():
        for temperature_degc in (5.0, 25.0, 40.0):
            ours = math.exp(ln_henry(gas.species, temperature_degc))
            assert ours == pytest.approx(gas.mol_per_kg_atm(temperature_degc), rel=1e-12)
        step = 1e-4
        rise = ln_henry(gas.species, 18.0 + step) - ln_henry(gas.species, 18.0 - step)
        assert ln_henry_slope(gas.species, 18.0) == pytest.approx(rise / (2 * step), rel=1e-6)


def test_cold_water_takes_up_more_carbon_dioxide_at_one_pressure() -> None:
    cold, warm = (
        equilibrate(load_system(t, components=["Na+", "CO3-2"]), {"H+": 0.0}, pco2_atm=0.01)
        for t in (5.0, 35.0)
    )
    assert (
        cold.totals[0, cold.system.index["CO3-2"]]
        > 2.0 * warm.totals[0, warm.system.index["CO3-2"]]
    )
    for state in (cold, warm):
        assert state.partial_pressure_atm("CO2(aq)")[0] == pytest.approx(0.01, rel=1e-10)
