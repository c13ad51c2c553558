"""Systems: reactions to arrays, constants at temperature, narrowing, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest

from catalogs import load_system
from chemistry import Solid, Species, System, SystemDefinitionError, equilibrate

WATER = Species.from_reaction("H2O = OH- + H+", -14.0, enthalpy_kj_per_mol=55.8)
COMPLEX = Species.from_reaction("Ag+ + 2 Cl- = AgCl2-", 5.25)
SALT = Solid.from_reaction("Ag+ + Cl- = AgCl(s)", 9.75, mineral="chlorargyrite")


def silver(**settings: object) -> System:
    return System(["H+", "Ag+", "Cl-"], [WATER, COMPLEX], [SALT], **settings)  # type: ignore[arg-type]


def test_a_species_is_read_from_its_reaction() -> None:
    assert COMPLEX.name == "AgCl2-"
    assert COMPLEX.stoichiometry == {"Ag+": 1.0, "Cl-": 2.0}
    assert COMPLEX.charge == -1
    hydroxide = Species.from_reaction("Zn+2 + 2 H2O = Zn(OH)2(aq) + 2 H+", -17.8)
    assert hydroxide.stoichiometry == {"Zn+2": 1.0, "H+": -2.0}
    assert hydroxide.water == 2.0
    carbonic = Species.from_reaction("CO3-2 + 2 H+ = CO2(aq) + H2O", 16.68)
    assert carbonic.water == -1.0


def test_a_solid_is_read_from_its_reaction() -> None:
    assert SALT.stoichiometry == {"Ag+": 1.0, "Cl-": 1.0}
    assert SALT.molar_mass_g_per_mol == pytest.approx(143.32, abs=0.01)
    gypsum = Solid.from_reaction("Ca+2 + SO4-2 + 2 H2O = CaSO4.2H2O(s)", 4.6)
    assert gypsum.water == 2.0
    assert gypsum.molar_mass_g_per_mol == pytest.approx(172.17, abs=0.01)


def test_a_product_that_cannot_be_told_must_be_named() -> None:
    with pytest.raises(SystemDefinitionError, match="name the product of"):
        Species.from_reaction("A+ + B- = C(aq) + D(aq)", 1.0)
    named = Species.from_reaction("HS- = S-2 + H+", -17.3, name="S-2")
    assert named.stoichiometry == {"HS-": 1.0, "H+": -1.0}
    with pytest.raises(SystemDefinitionError, match="'Ag2Cl' must appear once as a product"):
        Species.from_reaction("Ag+ + Cl- = AgCl(aq)", 3.3, name="Ag2Cl")


def test_arrays_follow_the_order_given() -> None:
    system = silver()
    assert system.species_names == ("H+", "Ag+", "Cl-", "OH-", "AgCl2-")
    np.testing.assert_array_equal(
        system.formation, [[1, 0, 0], [0, 1, 0], [0, 0, 1], [-1, 0, 0], [0, 1, 2]]
    )
    np.testing.assert_array_equal(system.solid_formation, [[0, 1, 1]])
    np.testing.assert_array_equal(system.charges, [1, 1, -1, -1, -1])
    np.testing.assert_allclose(system.ln_k / np.log(10), [0, 0, 0, -14.0, 5.25])
    np.testing.assert_array_equal(system.water, [0, 0, 0, 1, 0])


def test_charge_is_conserved_by_every_species_of_the_catalog() -> None:
    system = load_system()
    carried = system.formation @ system.component_charges
    np.testing.assert_allclose(carried, system.charges, atol=1e-12)
    np.testing.assert_allclose(system.solid_formation @ system.component_charges, 0.0, atol=1e-12)


def test_constants_move_with_temperature_by_their_enthalpy_or_stay() -> None:
    """Water: log Kw is -14.53 at 10 C and -13.53 at 40 C (CRC Handbook, from memory)."""
    for degc, log10_kw in ((10.0, -14.53), (40.0, -13.53)):
        system = silver(temperature_degc=degc)
        assert system.ln_k[3] / np.log(10) == pytest.approx(log10_kw, abs=0.03)
        assert system.ln_k[4] / np.log(10) == pytest.approx(5.25, abs=1e-12)
    kelvin = 283.15
    shift = 55.8 / 8.314462618e-3 * (1 / kelvin - 1 / 298.15)
    expected = -14.0 * np.log(10) - shift
    assert silver(temperature_degc=10.0).ln_k[3] == pytest.approx(expected, rel=1e-12)


def test_lime_water_is_more_alkaline_when_cold() -> None:
    """The pH standard of saturated lime (Bates, Determination of pH, from memory)."""
    published = {10.0: 13.003, 20.0: 12.627, 25.0: 12.454, 35.0: 12.133}
    for degc, ph in published.items():
        system = load_system(temperature_degc=degc, components=["H+", "Ca+2"], activity="davies")
        state = equilibrate(system, {"Ca+2": 0.1, "H+": -0.2})
        assert state.active.any()
        assert state.ph[0] == pytest.approx(ph, abs=0.05)


def test_a_narrowed_system_keeps_what_forms_from_its_components() -> None:
    narrow = silver().narrowed(["Ag+", "Cl-"])
    assert narrow.components == ("Ag+", "Cl-")
    assert narrow.species_names == ("Ag+", "Cl-", "AgCl2-")
    assert narrow.solid_names == ("AgCl(s)",)
    assert silver().narrowed(solids=[]).solid_names == ()
    with pytest.raises(SystemDefinitionError, match=r"not in the system: Br-, AgBr\(s\)"):
        silver().narrowed(["Br-", "Cl-"], ["AgBr(s)"])


def test_narrowing_keeps_temperature_and_activity() -> None:
    narrow = silver(temperature_degc=12.0, activity="ideal").narrowed(["H+", "Cl-"])
    assert narrow.temperature_degc == 12.0
    assert narrow.activity == "ideal"


def test_a_solid_held_back_to_a_supersaturation_is_that_much_more_soluble() -> None:
    system = silver(activity="ideal")
    held_back = system.shifted_solids({"AgCl(s)": 0.3})
    water = {"Ag+": 0.01, "Cl-": 0.01, "H+": 0.0}
    plain, shifted = equilibrate(system, water), equilibrate(held_back, water)
    product = [np.log10(np.prod(s.species_mol_per_l[0, 1:3])) for s in (plain, shifted)]
    assert product[1] - product[0] == pytest.approx(0.3, abs=1e-9)
    assert system.solids[0].log10_k == 9.75


def test_a_system_that_does_not_fit_together_tells_everything_at_once() -> None:
    with pytest.raises(SystemDefinitionError) as caught:
        System(["H+", "Cl-", "Cl-"], [COMPLEX], [SALT], temperature_degc=80.0)
    text = str(caught.value)
    assert "repeated names: Cl-" in text
    assert "AgCl2- needs components not given: Ag+" in text
    assert "AgCl(s) needs components not given: Ag+" in text
    assert "temperature 80.0 C is outside 0 to 60 C" in text


def test_a_system_needs_a_component() -> None:
    with pytest.raises(SystemDefinitionError, match="at least one component"):
        System([])


def test_a_temperature_that_is_no_number_is_refused() -> None:
    with pytest.raises(SystemDefinitionError, match="temperature nan C"):
        silver(temperature_degc=float("nan"))
