"""Exact derivatives with temperature agree with differences taken in 50 digits."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from mpmath import mp

from catalogs import load_system
from chemistry import EquilibriumState, System, equilibrate
from tests.chemistry.oracle import DIGITS, Exact, Held, solve_exact, water_of
from tests.chemistry.test_temperature import COMPONENTS, GYPSUM, LIME, LIMED, RINSE, SALTY

TEMPERATURE_DEGC = 21.75
STEP_DEGC = 2.0**-30  # exact in double precision beside the temperature
AGREES = 1e-8  # relative to the largest derivative of the same kind

HELD = {
    "free": Held(),
    "pH": Held(ph=9.0),
    "pCO2": Held(pco2_atm=4e-4),
    "pH and pCO2": Held(ph=7.9, pco2_atm=4e-4),
    "pH by lime": Held(ph=9.0, titrant=LIME),
}
WATERS = {"acid": RINSE, "limed": LIMED, "salty": SALTY, "gypsum": GYPSUM}
CASES = [
    *(("acid", held, "davies") for held in HELD),
    *(("limed", held, "davies") for held in HELD),
    ("salty", "free", "davies"),
    ("gypsum", "free", "davies"),
    ("gypsum", "pH", "davies"),
    ("limed", "pCO2", "sit"),
]


def solved(system: System, totals: Mapping[str, float], held: Held) -> EquilibriumState:
    titrant = np.array([held.titrant.get(c, 0.0) for c in system.components])
    return equilibrate(system, totals, ph=held.ph, pco2_atm=held.pco2_atm, titrant=titrant)


def exact_beside(step_degc: float, totals: Mapping[str, float], held: Held, model: str) -> Exact:
    system = load_system(TEMPERATURE_DEGC + step_degc, components=COMPONENTS, activity=model)
    return solve_exact(*water_of(solved(system, totals, held), held))[0]


def quantities(exact: Exact, names: tuple[str, ...], solids: list[str]) -> dict[str, list]:
    return {
        "dissolved": [exact.dissolved[c] for c in names],
        "solids": [exact.solids[n] for n in solids],
        "pH": [exact.ph],
        "titrant": [exact.titrant],
    }


@pytest.mark.parametrize(("water", "condition", "model"), CASES)
def test_derivatives_with_temperature_are_those_of_the_exact_solution(
    water: str, condition: str, model: str
) -> None:
    totals, held = WATERS[water], HELD[condition]
    system = load_system(TEMPERATURE_DEGC, components=COMPONENTS, activity=model)
    state = solved(system, totals, held)
    slopes = state.sensitivity_to_temperature()
    here = {
        "dissolved": slopes.dissolved[0, :, 0],
        "solids": slopes.solids[0, state.active[0], 0],
        "pH": slopes.ph[0],
        "titrant": slopes.titrant[0],
    }
    solids = [n for n, a in zip(system.solid_names, state.active[0], strict=True) if a]
    low, high = (
        quantities(exact_beside(sign * STEP_DEGC, totals, held, model), system.components, solids)
        for sign in (-1, 1)
    )
    for kind, found in here.items():
        with mp.workdps(DIGITS):
            expected = np.array(
                [
                    float((b - a) / (2 * STEP_DEGC))
                    for a, b in zip(low[kind], high[kind], strict=True)
                ]
            )
        largest = max(float(np.abs(expected).max(initial=0.0)), 1e-9)
        np.testing.assert_allclose(found, expected, rtol=AGREES, atol=AGREES * largest)
