"""Exact derivatives agree with differences taken in 50 digits, whatever is held."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import EquilibriumState, System, equilibrate
from chemistry.state import Sensitivity
from tests.chemistry.oracle import Factors, Held, solve_exact, water_of
from tests.chemistry.oracle_differences import Difference

FloatArray = NDArray[np.float64]

AGREES = 1e-8  # relative to the largest derivative of the same kind

COMPONENTS = ("H+", "Na+", "Ca+2", "Cu+2", "Zn+2", "Cl-", "SO4-2", "CO3-2")
LIME = {"Ca+2": 1.0, "H+": -2.0}
SODA_ASH = {"Na+": 2.0, "CO3-2": 1.0}

RINSE = {
    "Na+": 2e-3, "Ca+2": 1e-3, "Cu+2": 6e-4, "Zn+2": 3e-4, "Cl-": 2e-3, "SO4-2": 5e-3,
    "CO3-2": 1e-3, "H+": 1.02e-2,
}  # fmt: skip
LIMED = RINSE | {"H+": 1.02e-2 - 2 * 8.5e-3, "Ca+2": 9.5e-3}
SALTY = LIMED | {"Na+": 0.6, "Cl-": 0.6}
WATERS = {"acid, no solid": RINSE, "limed, three solids": LIMED, "above I = 0.5": SALTY}
HELD = {
    "free": Held(),
    "pH": Held(ph=9.0),
    "pCO2": Held(pco2_atm=4e-4),
    "pH and pCO2": Held(ph=7.9, pco2_atm=4e-4),
    "pH by lime": Held(ph=9.0, titrant=LIME),
    "pH by soda ash": Held(ph=8.0, titrant=SODA_ASH),
    "pH by soda ash, pCO2": Held(ph=8.1, pco2_atm=4e-4, titrant=SODA_ASH),
}
# Soda ash only raises a pH, so it holds 8.0 in the acid water alone.
CASES = [
    *(("acid, no solid", held) for held in HELD),
    *(("limed, three solids", held) for held in HELD if held != "pH by soda ash"),
    ("above I = 0.5", "free"),
    ("above I = 0.5", "pH by lime"),
]


@pytest.fixture(scope="module")
def system() -> System:
    return load_system(components=COMPONENTS, activity="davies")


def solved(system: System, totals: Mapping[str, float], held: Held) -> EquilibriumState:
    titrant = np.array([held.titrant.get(c, 0.0) for c in system.components])
    return equilibrate(system, totals, ph=held.ph, pco2_atm=held.pco2_atm, titrant=titrant)


def assert_close(found: FloatArray | float, expected: FloatArray | float) -> None:
    largest = max(1.0, float(np.abs(expected).max(initial=0.0)) if np.ndim(expected) else 0.0)
    np.testing.assert_allclose(found, expected, rtol=AGREES, atol=AGREES * largest)


@pytest.mark.parametrize(("water_name", "held_name"), CASES)
def test_derivatives_are_those_of_the_exact_solution(
    system: System, water_name: str, held_name: str
) -> None:
    totals, held = WATERS[water_name], HELD[held_name]
    state = solved(system, totals, held)
    slopes = state.sensitivity(np.eye(len(COMPONENTS)))
    water, start = water_of(state, held)
    _, unknowns = solve_exact(water, start)
    factors = Factors(water, unknowns)
    for k, component in enumerate(system.components):
        exact = Difference(water, unknowns, component, factors)
        assert_close(slopes.dissolved[0, :, k], exact.dissolved(system.components))
        assert_close(slopes.solids[0, :, k], exact.solids(system.solid_names))
        assert slopes.ph[0, k] == pytest.approx(exact.ph(), rel=AGREES, abs=1e-7)
        assert slopes.titrant[0, k] == pytest.approx(exact.titrant(), rel=AGREES, abs=1e-9)


@pytest.mark.parametrize("held_name", ["free", "pH by lime"])
def test_derivatives_in_salty_water_are_exact_too(held_name: str) -> None:
    """Specific ion interaction: every coefficient moves with every ion, and so does the water."""
    system = load_system(components=["H+", "Na+", "Ca+2", "Cl-", "SO4-2"], activity="sit")
    brine = {"Na+": 0.9, "Ca+2": 0.05, "Cl-": 0.8, "SO4-2": 0.1, "H+": 0.0}
    held = HELD[held_name]
    state = solved(system, brine, held)
    assert state.active.any()
    slopes = state.sensitivity(np.eye(len(system.components)))
    water, start = water_of(state, held)
    _, unknowns = solve_exact(water, start)
    factors = Factors(water, unknowns)
    for k, component in enumerate(system.components):
        exact = Difference(water, unknowns, component, factors)
        assert_close(slopes.dissolved[0, :, k], exact.dissolved(system.components))
        assert_close(slopes.solids[0, :, k], exact.solids(system.solid_names))
        assert slopes.ph[0, k] == pytest.approx(exact.ph(), rel=AGREES, abs=1e-6)
        assert slopes.titrant[0, k] == pytest.approx(exact.titrant(), rel=AGREES, abs=1e-9)


def test_the_waters_have_the_solids_that_their_names_say(system: System) -> None:
    counts = [int(solved(system, w, Held()).active.sum()) for w in WATERS.values()]
    assert counts[0] == 0
    assert counts[1] >= 3
    assert solved(system, SALTY, Held()).ionic_strength[0] > 0.5


def slopes_of(state: EquilibriumState, *ways: Mapping[str, float]) -> Sensitivity:
    components = state.system.components
    return state.sensitivity(np.array([[way.get(c, 0.0) for c in components] for way in ways]))


def test_a_direction_is_the_sum_of_its_components(system: System) -> None:
    state = solved(system, LIMED, Held())
    lime, calcium, proton = np.moveaxis(
        slopes_of(state, LIME, {"Ca+2": 1.0}, {"H+": 1.0}).dissolved[0], 1, 0
    )
    np.testing.assert_allclose(lime, calcium - 2.0 * proton, atol=1e-10)


def test_what_dissolves_and_what_precipitates_add_up_to_what_is_added(system: System) -> None:
    state = solved(system, LIMED, Held())
    slopes = state.sensitivity(np.eye(len(COMPONENTS)))
    total = slopes.dissolved[0] + system.solid_formation.T @ slopes.solids[0]
    np.testing.assert_allclose(total, np.eye(len(COMPONENTS)), atol=1e-9)


def test_directions_may_differ_between_states(system: System) -> None:
    waters = {c: np.array([RINSE[c], LIMED[c]]) for c in COMPONENTS}
    state = equilibrate(system, waters)
    ways = np.stack([np.eye(len(COMPONENTS))[:3], np.eye(len(COMPONENTS))[3:6]])
    both = state.sensitivity(ways)
    for i in range(2):
        alone = state.row(i).sensitivity(ways[i])
        np.testing.assert_allclose(both.dissolved[i], alone.dissolved[0], rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("totals", [RINSE, LIMED], ids=["acid", "limed"])
def test_a_component_that_the_water_lacks_has_its_derivative_from_above(
    system: System, totals: Mapping[str, float]
) -> None:
    without = dict(totals) | {"CO3-2": 0.0}
    slopes = slopes_of(solved(system, without, Held()), SODA_ASH)
    trace = slopes_of(solved(system, without | {"CO3-2": 1e-13}, Held()), SODA_ASH)
    np.testing.assert_allclose(slopes.dissolved, trace.dissolved, rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(slopes.ph, trace.ph, rtol=1e-5)
    carbonate = system.index["CO3-2"]
    assert slopes.dissolved[0, carbonate, 0] == pytest.approx(1.0, abs=1e-9)


def test_the_titrant_that_holds_the_ph_replaces_what_is_added_of_itself(system: System) -> None:
    state = solved(system, RINSE, Held(ph=9.0, titrant=LIME))
    slopes = slopes_of(state, LIME)
    assert slopes.titrant[0, 0] == pytest.approx(-1.0, abs=1e-9)
    np.testing.assert_allclose(slopes.dissolved[0, :, 0], 0.0, atol=1e-9)


def test_nothing_moves_the_ph_that_is_held(system: System) -> None:
    state = solved(system, RINSE, Held(ph=9.0))
    slopes = state.sensitivity(np.eye(len(COMPONENTS)))
    np.testing.assert_allclose(slopes.ph, 0.0, atol=1e-12)
    proton = system.index["H+"]
    assert slopes.titrant[0, proton] == pytest.approx(-1.0, abs=1e-12)
