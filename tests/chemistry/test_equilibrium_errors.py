"""What `equilibrate` refuses or misses, and what it then says; frames and pressures."""

from __future__ import annotations

import numpy as np
import pytest

from chemistry import EquilibriumError, Species, System, WaterError, equilibrate
from tests.chemistry.acid_rinse import ACID, SYSTEM, vector
from tests.chemistry.certificate import certify

WATER = Species.from_reaction("H2O = OH- + H+", -14.0)


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
