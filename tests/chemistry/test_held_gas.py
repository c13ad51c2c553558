"""A held CO2 pressure: open waters have their published pH, their derivatives, and a state."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray

from catalogs import load_system
from chemistry import EquilibriumState, System, equilibrate
from chemistry.state import CO2_SPECIES

FloatArray = NDArray[np.float64]

AIR_ATM = 4.2e-4
STEP = 1e-6  # of a central difference, as a share of the total
ROUNDING = 3e-15  # of a solution, as a share of its largest total
COMPONENTS = ("H+", "Na+", "Ca+2", "Cu+2", "Zn+2", "Cl-", "SO4-2", "CO3-2")
ACID = {
    "Na+": 2e-3, "Ca+2": 1e-3, "Cu+2": 6e-4, "Zn+2": 3e-4, "Cl-": 2e-3, "SO4-2": 5e-3,
    "CO3-2": 1e-3, "H+": 8.2e-3,
}  # fmt: skip
LIMED = ACID | {"H+": 8.2e-3 - 2 * 8.5e-3, "Ca+2": 9.5e-3}
SALTY = LIMED | {"Na+": 0.602, "Cl-": 0.602}


@pytest.fixture(scope="module")
def system() -> System:
    return load_system(components=COMPONENTS, activity="davies")


@pytest.mark.parametrize(
    ("totals", "pco2_atm", "ph"),
    [
        # closed forms with pK1 6.35 and log K_H -1.47 at low ionic strength
        ({"H+": 0.0}, 4e-4, 5.61),
        ({"H+": 0.0}, 1.0, 3.91),
        ({"Na+": 1e-3, "H+": -1e-3}, 4e-4, 8.2),
        ({"Na+": 1e-9, "H+": -1e-9}, 1e-2, 4.91),
        ({"Na+": 0.1, "CO3-2": 0.05, "H+": 0.0}, 1e-2, 8.6),
    ],
)
def test_a_water_open_to_gas_has_a_state_and_its_known_ph(
    totals: Mapping[str, float], pco2_atm: float, ph: float
) -> None:
    state = equilibrate(load_system(components=["Na+", "CO3-2"]), totals, pco2_atm=pco2_atm)
    assert state.ph[0] == pytest.approx(ph, abs=0.05)
    assert state.partial_pressure_atm(CO2_SPECIES)[0] == pytest.approx(pco2_atm, rel=1e-9)
    # carbon dioxide goes in and out whole: two protons with every carbonate
    given = state.system.index["CO3-2"], state.system.index["H+"]
    taken_up = [state.totals[0, i] - totals.get(c, 0.0) for i, c in zip(given, ("CO3-2", "H+"),
                strict=True)]  # fmt: skip
    assert taken_up[1] == pytest.approx(2.0 * taken_up[0], rel=1e-9)


@pytest.mark.parametrize("activity", ["davies", "sit", "ideal"])
def test_salt_water_holds_the_pressure_that_it_was_given(activity: str) -> None:
    """With specific ion interaction the activity of water takes part."""
    system = load_system(components=["Na+", "Cl-", "CO3-2"], activity=activity)
    totals = {"Na+": [0.1, 2.0], "Cl-": [0.09, 1.99], "H+": [-0.01, -0.01]}
    state = equilibrate(system, totals, pco2_atm=[0.01, 1.0])
    found = state.partial_pressure_atm(CO2_SPECIES)
    np.testing.assert_allclose(found, [0.01, 1.0], rtol=1e-9)


def test_random_open_waters_all_have_a_state() -> None:
    system, rng = load_system(), np.random.default_rng(20261201)
    waters = np.zeros((60, len(system.components)))
    proton = system.index["H+"]
    others = np.delete(np.arange(len(system.components)), proton)
    for water in waters:
        chosen = rng.choice(others, rng.integers(1, 9), replace=False)
        water[chosen] = 10.0 ** rng.uniform(-9.0, np.log10(0.3), chosen.size)
        water[proton] = -float(water @ system.component_charges)
    pco2 = 10.0 ** rng.uniform(-5.0, 0.0, len(waters))
    state = equilibrate(system, waters, pco2_atm=pco2)
    assert state.converged.all()
    found = state.partial_pressure_atm(CO2_SPECIES)
    np.testing.assert_allclose(found, pco2, rtol=1e-9)


def solved(
    system: System, totals: Mapping[str, float], ph: float | None, moved: str = "", by: float = 0.0
) -> EquilibriumState:
    return equilibrate(
        system, {**totals, moved: totals[moved] + by} if moved else totals,
        ph=ph, pco2_atm=AIR_ATM,
    )  # fmt: skip


@pytest.mark.parametrize("activity", ["davies", "sit"])
@pytest.mark.parametrize("ph", [None, 7.9])
@pytest.mark.parametrize("totals", [ACID, LIMED, SALTY], ids=["acid", "limed", "salty"])
def test_derivatives_at_held_pressure_are_those_of_neighbouring_waters(
    totals: Mapping[str, float], ph: float | None, activity: str
) -> None:
    system = load_system(components=COMPONENTS, activity=activity)
    state = solved(system, totals, ph)
    slopes = state.sensitivity(np.eye(len(COMPONENTS)))
    for k, component in enumerate(system.components):
        by = STEP * abs(totals[component])
        low, high = (solved(system, totals, ph, component, sign * by) for sign in (-1.0, 1.0))
        assert (low.active == high.active).all()

        def slope(below: FloatArray, above: FloatArray, by: float = by) -> FloatArray:
            return (above - below) / (2.0 * by)

        for found, expected in (
            (slopes.dissolved[0, :, k],
             slope(low.dissolved_mol_per_l[0], high.dissolved_mol_per_l[0])),
            (slopes.solids[0, :, k], slope(low.solids_mol_per_l[0], high.solids_mol_per_l[0])),
            (slopes.ph[:, k], slope(low.ph, high.ph)),
            (slopes.titrant[:, k], slope(low.titrant_mol_per_l, high.titrant_mol_per_l)),
        ):  # fmt: skip
            largest = float(np.abs(expected).max(initial=0.0))
            noise = ROUNDING * max(totals.values()) / by
            np.testing.assert_allclose(found, expected, rtol=1e-5, atol=2e-6 * largest + noise)


def test_carbonate_given_to_an_open_water_leaves_as_gas(system: System) -> None:
    """Adding CO2 itself changes nothing at a held pressure; added bicarbonate counts as alkali."""
    state = solved(system, LIMED, None)
    ways = np.zeros((2, len(COMPONENTS)))
    ways[0, [system.index["CO3-2"], system.index["H+"]]] = 1.0, 2.0
    ways[1, [system.index["CO3-2"], system.index["H+"]]] = 1.0, 1.0
    slopes = state.sensitivity(ways)
    assert np.abs(slopes.dissolved[0, :, 0]).max() < 1e-9
    assert slopes.ph[0, 0] == pytest.approx(0.0, abs=1e-6)
    assert slopes.ph[0, 1] > 0.0
