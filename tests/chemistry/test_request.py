"""Bad input of `equilibrate`: every refusal names the state, the component and the value."""

from __future__ import annotations

import re

import numpy as np
import pytest

from catalogs import load_system
from chemistry import equilibrate
from chemistry.errors import WaterError

SYSTEM = load_system(components=["Na+", "Cl-", "Cu+2"])
SALT = {"Na+": 1e-3, "Cl-": 1e-3}


def refusal(*arguments: object, **held: object) -> str:
    with pytest.raises(WaterError) as caught:
        equilibrate(SYSTEM, *arguments, **held)  # type: ignore[arg-type]
    return str(caught.value)


@pytest.mark.parametrize(
    ("totals", "said"),
    [
        ({"Na+": "salt"}, "total of Na+ is 'salt': expected numbers"),
        ({"Na+": ["1e-3", "x"]}, "total of Na+ is ['1e-3', 'x']: expected numbers"),
        ({"Cl-": 1 + 2j}, "total of Cl- is (1+2j): expected numbers"),
        ({"Na+": [[1e-3]]}, "total of Na+ has shape (1, 1): expected one value or one per state"),
        ({"Na+": [1.0, 1.0], "Cl-": [1.0] * 3},
         "totals of different lengths: [2, 3] (Na+ has 2, Cl- has 3)"),
        ({"Na+": None},
         "state 0: total of Na+ is nan mol/L, expected a finite number, 0 or more"),
        (["a", "b", "c", "d"], "totals is ['a', 'b', 'c', 'd']: expected numbers"),
    ],
)  # fmt: skip
def test_what_is_no_number_or_no_shape_is_told_by_component(totals: object, said: str) -> None:
    assert refusal(totals).startswith(said)


def test_every_bad_state_is_told() -> None:
    said = refusal({"Na+": [1e-3, -1e-3, np.nan], "Cl-": [1e-3, 70.0, 1e-3]})
    assert said == (
        "state 1: total of Na+ is -0.001 mol/L, expected a finite number, 0 or more; "
        "state 2: total of Na+ is nan mol/L, expected a finite number, 0 or more; "
        "state 1: total of Cl- is 70 mol/L, more than any water holds (60 mol/L)"
    )


def test_every_bad_ph_and_pressure_is_told() -> None:
    carbonate = load_system(components=["Na+", "CO3-2"])
    with pytest.raises(WaterError) as caught:
        equilibrate(
            carbonate, {"Na+": 1e-3, "H+": -1e-3}, ph=[99.0, 7.0, -9.0], pco2_atm=[1.0, 0.0, 1e-3]
        )
    assert str(caught.value) == (
        "state 0: pH 99 is outside -3 to 17; state 2: pH -9 is outside -3 to 17; "
        "state 1: pCO2 0 atm is outside 0 to 100 atm"
    )
    assert refusal(SALT, ph="seven").startswith("ph is 'seven': expected numbers")


def test_every_bad_titrant_is_told() -> None:
    titrant = np.array([[1.0, np.nan, 0.0, 0.0], [1.0, 0.0, np.inf, 0.0]])
    assert refusal({"Na+": [1e-3, 1e-3]}, ph=7.0, titrant=titrant) == (
        "state 0: titrant holds nan of Na+; state 1: titrant holds inf of Cl-"
    )


def test_totals_that_no_electroneutral_water_has_are_refused_where_asked() -> None:
    totals = {"Na+": [1e-3, 2e-3, 1e-3], "Cl-": 1e-3, "H+": [0.0, 0.0, -5e-4]}
    assert refusal(totals, require_neutral=True) == (
        "state 1: total of H+ is 0 mol/L, but with the other totals only -0.001 mol/L is "
        "electroneutral (net charge +0.001 mol/L); "
        "state 2: total of H+ is -0.0005 mol/L, but with the other totals only 0 mol/L is "
        "electroneutral (net charge -0.0005 mol/L)"
    )


def test_the_total_named_as_electroneutral_is() -> None:
    said = refusal({"Cu+2": 3e-4, "Cl-": 1e-3, "H+": 0.0}, require_neutral=True)
    named = float(re.findall(r"only (\S+) mol/L", said)[0])
    state = equilibrate(SYSTEM, {"Cu+2": 3e-4, "Cl-": 1e-3, "H+": named}, require_neutral=True)
    assert state.certificate_arrays["charge"][0] < 1e-9


def test_a_water_with_ions_left_out_is_solved_and_its_certificate_shows_the_charge() -> None:
    """A copper nitrate water: nitrate takes no part and is no component."""
    state = equilibrate(SYSTEM, {"Cu+2": 1e-3, "H+": 0.0})
    assert state.converged.all()
    assert state.certificate_arrays["charge"][0] > 0.9


def test_where_the_ph_is_held_the_charge_is_free() -> None:
    held = equilibrate(SYSTEM, {"Cu+2": 1e-3}, ph=5.0, require_neutral=True)
    assert held.ph[0] == pytest.approx(5.0)


def test_no_states_give_no_states() -> None:
    assert equilibrate(SYSTEM, np.zeros((0, 4))).ph.shape == (0,)
