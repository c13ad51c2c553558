"""The shipped reagents: vectors, masses, forms and limits of practice."""

from __future__ import annotations

import pytest

from catalogs.constants import COMPONENTS
from catalogs.reagents import CAUTIONS_DEFER_TO, FAMILIES, Reagent, load_reagents
from chemistry.formula import charge_of, molar_mass_g_per_mol

REAGENTS = load_reagents()
METAL_MASSES = {"Cu": 63.546, "Ni": 58.693, "Cd": 112.414, "Cr": 51.996, "Ag": 107.868}


def acid_taken_up(reagent: Reagent) -> float:
    """Moles of strong acid that a mole takes up; carbonate counts twice (to about pH 4.5)."""
    return 2.0 * reagent.components.get("CO3-2", 0.0) - reagent.components.get("H+", 0.0)


def test_the_reagents_are_the_twenty_of_the_design() -> None:
    assert list(REAGENTS) == [
        "caustic_soda", "potassium_hydroxide", "hydrated_lime", "quicklime",
        "magnesium_hydroxide", "soda_ash", "sodium_bicarbonate", "carbon_dioxide",
        "sodium_chloride", "calcium_chloride", "magnesium_chloride", "barium_chloride",
        "sodium_sulfate", "sodium_hydrosulfide", "sodium_sulfide", "ferrous_sulfide",
        "ferric_chloride", "ferric_sulfate", "sulfuric_acid", "hydrochloric_acid",
    ]  # fmt: skip
    assert [r.reagent for r in REAGENTS.values()] == list(REAGENTS)


def test_no_row_and_no_digit_was_lost() -> None:
    forms = [form for r in REAGENTS.values() for form in r.product_forms]
    assert len(forms) == 50
    assert sum(form.strength_fraction for form in forms) == pytest.approx(28.551, abs=1e-9)
    assert sum(form.density_kg_per_l for form in forms) == pytest.approx(57.569, abs=1e-9)
    masses = sum(r.molar_mass_g_per_mol for r in REAGENTS.values())
    assert masses == pytest.approx(2052.065, abs=1e-9)


@pytest.mark.parametrize("reagent", REAGENTS.values(), ids=list(REAGENTS))
def test_molar_masses_agree_with_the_formula(reagent: Reagent) -> None:
    expected = molar_mass_g_per_mol(reagent.formula)
    assert reagent.molar_mass_g_per_mol == pytest.approx(expected, abs=6e-4)


@pytest.mark.parametrize("reagent", REAGENTS.values(), ids=list(REAGENTS))
def test_component_vectors_are_neutral_and_weigh_what_the_formula_weighs(reagent: Reagent) -> None:
    """Water is the only difference: CaO and Ca(OH)2 are both Ca+2 less two protons."""
    assert set(reagent.components) <= set(COMPONENTS)
    assert sum(n * charge_of(c) for c, n in reagent.components.items()) == 0
    mass = sum(n * molar_mass_g_per_mol(c) for c, n in reagent.components.items())
    water = (reagent.molar_mass_g_per_mol - mass) / molar_mass_g_per_mol("H2O")
    assert water == pytest.approx(round(water), abs=1e-3)
    assert -1 <= round(water) <= 2


@pytest.mark.parametrize("reagent", REAGENTS.values(), ids=list(REAGENTS))
def test_every_row_and_product_form_has_a_source_and_sane_figures(reagent: Reagent) -> None:
    assert reagent.source
    assert reagent.dose_factor_source
    assert reagent.cautions
    assert len(reagent.product_forms) >= 2
    for form in reagent.product_forms:
        assert form.source, form.form
        assert 0.0 < form.strength_fraction <= 1.0
        assert 0.4 < form.density_kg_per_l < 2.0


def test_alkali_per_kilogram_of_sulfuric_acid_is_the_published_one() -> None:
    published = {
        "caustic_soda": 0.8157, "hydrated_lime": 0.7555, "quicklime": 0.5718,
        "magnesium_hydroxide": 0.5947, "soda_ash": 1.0807, "sodium_bicarbonate": 1.7131,
        "potassium_hydroxide": 1.1442,
    }  # fmt: skip
    acid = REAGENTS["sulfuric_acid"]
    for name, kg_per_kg in published.items():
        alkali = REAGENTS[name]
        moles = acid.components["H+"] / acid_taken_up(alkali)
        ratio = moles * alkali.molar_mass_g_per_mol / acid.molar_mass_g_per_mol
        assert ratio == pytest.approx(kg_per_kg, rel=0.002), name


@pytest.mark.parametrize(
    ("name", "component", "metal", "per_metal", "kg_per_kg"),
    [
        ("caustic_soda", "H+", "Cu", -2, 1.2588),
        ("caustic_soda", "H+", "Cr", -3, 2.3077),
        ("hydrated_lime", "H+", "Ni", -2, 1.2624),
        ("magnesium_hydroxide", "H+", "Cu", -2, 0.9177),
        ("sodium_sulfide", "HS-", "Cd", 1, 0.6942),
        ("sodium_chloride", "Cl-", "Ag", 1, 0.5418),
    ],
)
def test_reagent_per_kilogram_of_metal_is_the_published_one(
    name: str, component: str, metal: str, per_metal: int, kg_per_kg: float
) -> None:
    reagent = REAGENTS[name]
    moles = per_metal / reagent.components[component]
    ratio = moles * reagent.molar_mass_g_per_mol / METAL_MASSES[metal]
    assert ratio == pytest.approx(kg_per_kg, rel=0.002)


@pytest.mark.parametrize(
    ("name", "ion", "fraction"),
    [
        ("sodium_chloride", "Cl-", 0.6066),
        ("calcium_chloride", "Cl-", 0.6389),
        ("magnesium_chloride", "Cl-", 0.7447),
        ("ferric_chloride", "Cl-", 0.6557),
        ("hydrochloric_acid", "Cl-", 0.9724),
        ("barium_chloride", "Cl-", 0.3405),
        ("sulfuric_acid", "SO4-2", 0.9794),
        ("sodium_sulfate", "SO4-2", 0.6763),
    ],
)
def test_burden_per_kilogram_is_the_published_one(name: str, ion: str, fraction: float) -> None:
    reagent = REAGENTS[name]
    mass = reagent.components[ion] * molar_mass_g_per_mol(ion)
    assert mass / reagent.molar_mass_g_per_mol == pytest.approx(fraction, rel=0.002)


def test_half_strength_caustic_holds_the_published_amount_per_litre() -> None:
    """Density table at 20 C: 762.7 g and 19.07 mol of NaOH per litre of 50 % solution."""
    caustic = REAGENTS["caustic_soda"]
    form = caustic.product_forms[0]
    grams = 1000.0 * form.strength_fraction * form.density_kg_per_l
    assert grams == pytest.approx(762.7, rel=0.005)
    assert grams / caustic.molar_mass_g_per_mol == pytest.approx(19.07, rel=0.005)


def test_slurries_are_overdosed_and_soluble_reagents_are_not() -> None:
    slurries = {name: r.dose_factor for name, r in REAGENTS.items() if r.is_slurry}
    assert slurries == {
        "hydrated_lime": 1.15,
        "quicklime": 1.2,
        "magnesium_hydroxide": 1.15,
        "ferrous_sulfide": 1.3,
    }
    assert {r.dose_factor for r in REAGENTS.values() if not r.is_slurry} == {1.0}


def test_only_magnesia_has_a_practical_ceiling() -> None:
    ceilings = {n: r.ph_ceiling for n, r in REAGENTS.items() if r.ph_ceiling is not None}
    assert ceilings == {"magnesium_hydroxide": 9.0}


def test_controllers_move_the_ph_the_way_they_say_and_are_ranked_without_ties() -> None:
    for name, reagent in REAGENTS.items():
        if reagent.ph_control == "up":
            assert acid_taken_up(reagent) > 0.0, name
        if reagent.ph_control == "down":  # down to pH 8.3 carbonate takes up one proton only
            assert acid_taken_up(reagent) - reagent.components.get("CO3-2", 0.0) < 0.0, name
    for direction, first, count in (("up", "caustic_soda", 7), ("down", "sulfuric_acid", 3)):
        ranks = {n: r.control_rank for n, r in REAGENTS.items() if r.ph_control == direction}
        assert sorted(ranks.values()) == list(range(1, count + 1))
        assert ranks[first] == 1
    assert {r.control_rank for r in REAGENTS.values() if not r.ph_control} == {99}


def test_families_are_known_and_each_has_a_reagent() -> None:
    assert {r.family for r in REAGENTS.values()} == set(FAMILIES)


def test_half_strength_caustic_freezes_in_a_cool_store_and_weaker_does_not() -> None:
    caustic = REAGENTS["caustic_soda"]
    assert caustic.crystallises_below_degc == 14.0
    assert caustic.product_forms[1].crystallises_below_degc == 2.0


def test_every_reagent_that_can_give_hydrogen_sulfide_says_so() -> None:
    carriers = [n for n, r in REAGENTS.items() if "HS-" in r.components]
    strong_acids = ["sulfuric_acid", "hydrochloric_acid"]
    for name in carriers + strong_acids:
        assert any("hydrogen sulfide" in text for text in REAGENTS[name].cautions), name
    assert "licensed" in CAUTIONS_DEFER_TO


def test_loading_twice_hands_out_separate_tables() -> None:
    first = load_reagents()
    first.pop("soda_ash")
    assert "soda_ash" in load_reagents()
