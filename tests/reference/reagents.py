"""Equivalents, strengths and burdens of reagents, dosed through the equilibrium."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from catalogs import load_reagents, load_system
from chemistry import Solid, Species, System, equilibrate
from chemistry.burden import water_burden
from chemistry.formula import charge_of, molar_mass_g_per_mol
from chemistry.units import kg_cao_to_kg_hydrated_lime, kg_pure_per_d_to_l_product_per_h
from tests.reference.cases import Case, computes, load_cases
from tests.reference.scans import first_true
from tests.reference.waters import dissolved_along, vector

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Dosed:
    """A reagent as moles of components per mole, and its molar mass."""

    components: Mapping[str, float]
    molar_mass_g_per_mol: float


def shipped(name: str) -> Dosed:
    reagent = load_reagents()[name]
    return Dosed(components=reagent.components, molar_mass_g_per_mol=reagent.molar_mass_g_per_mol)


def _listed(inputs: Mapping[str, Any]) -> dict[str, Dosed]:
    """The shipped reagents of a case and those it brings itself."""
    found = {name: shipped(reagent) for name, reagent in inputs["shipped"].items()}
    for name, row in inputs["others"].items():
        mass = molar_mass_g_per_mol(row["formula"])
        found[name] = Dosed(components=row["components"], molar_mass_g_per_mol=mass)
    return found


def _ideal(components: set[str]) -> System:
    return load_system(components=sorted(components), solids=[], activity="ideal")


@computes("G01")
def neutralising_alkalis(case: Case) -> Mapping[str, float]:
    return {
        name: alkali_per_acid_stripped(alkali, case)
        for name, alkali in _listed(case.inputs).items()
    }


def alkali_per_acid_stripped(alkali: Dosed, case: Case) -> float:
    """Alkali that brings sulfuric acid to its equivalence, carbon dioxide stripped. [kg/kg]"""
    return alkali_per_acid(
        alkali,
        amount=case.inputs["acid_mol_per_l"],
        end_ph=case.inputs["end_ph"],
        pco2_atm=case.inputs["pco2_atm"] if "CO3-2" in alkali.components else None,
    )


def alkali_per_acid(
    alkali: Dosed, *, amount: float, end_ph: float, pco2_atm: float | None
) -> float:
    """Alkali that brings sulfuric acid to a pH, open to carbon dioxide or closed. [kg/kg]"""
    acid = shipped("sulfuric_acid")
    system = _ideal({*alkali.components, *acid.components})
    state = equilibrate(
        system, amount * vector(system, acid.components), ph=end_ph, pco2_atm=pco2_atm,
        titrant=vector(system, alkali.components),
    )  # fmt: skip
    moles = float(state.titrant_mol_per_l[0]) / amount
    return moles * alkali.molar_mass_g_per_mol / acid.molar_mass_g_per_mol


@computes("G02")
def magnesia_for_caustic(case: Case) -> Mapping[str, float]:
    acid_case = load_cases()["G01"]
    caustic, magnesia = (
        alkali_per_acid_stripped(shipped(name), acid_case)
        for name in ("caustic_soda", "magnesium_hydroxide")
    )
    tonnes = case.inputs["caustic_t"] * magnesia / caustic
    cost_caustic = case.inputs["caustic_t"] * case.inputs["caustic_price_per_t"]
    cost_magnesia = tonnes * case.inputs["magnesia_price_per_t"]
    return {
        "magnesia": tonnes,
        "cost_caustic": cost_caustic,
        "cost_magnesia": cost_magnesia,
        "saving": cost_caustic - cost_magnesia,
    }


def pure_g_per_l_product(strength_fraction: float, density_kg_per_l: float) -> float:
    """Pure compound in a litre of product, by the conversion that doses it. [g/L]"""
    litres_per_h = kg_pure_per_d_to_l_product_per_h(1.0, strength_fraction, density_kg_per_l)
    return 1000.0 / (24.0 * litres_per_h)


@computes("G04")
def caustic_solution(case: Case) -> Mapping[str, float]:
    mass = pure_g_per_l_product(case.inputs["strength_fraction"], case.inputs["density_kg_per_l"])
    form = load_reagents()["caustic_soda"].product_forms[0]
    return {
        "mass": mass,
        "amount": mass / molar_mass_g_per_mol(case.inputs["formula"]),
        "shipped_mass": pure_g_per_l_product(form.strength_fraction, form.density_kg_per_l),
    }


@computes("G05")
def molarities(case: Case) -> Mapping[str, float]:
    return {
        name: pure_g_per_l_product(row["strength_fraction"], row["density_kg_per_l"])
        / molar_mass_g_per_mol(row["formula"])
        for name, row in case.inputs["products"].items()
    }


@computes("G08")
def lime_quality(case: Case) -> Mapping[str, float]:
    return {
        name: kg_cao_to_kg_hydrated_lime(float(percent))
        for name, percent in case.inputs["cao_percent"].items()
    }


@computes("G12")
def reagent_per_metal(case: Case) -> Mapping[str, float]:
    found = {}
    for name in case.values:
        reagent_name, metal_name = name.split("/")
        reagent = shipped(case.inputs["reagents"][reagent_name])
        metal = case.inputs["metals"][metal_name]
        amount = case.inputs["metal_mol_per_l"]
        if set(reagent.components) & {"HS-", "CO3-2", "Cl-", "SO4-2"}:
            dose = _dose_until_gone(reagent, metal, amount, case.inputs["most_left_fraction"])
        else:
            dose = _dose_to_ph(reagent, metal, amount, case.inputs["end_ph"])
        mass = dose / amount * reagent.molar_mass_g_per_mol
        found[name] = mass / molar_mass_g_per_mol(metal)
    return found


def _metal_system(reagent: Dosed, metal: str, reaction: str, log10_k: float) -> System:
    return System(
        sorted({"H+", metal, *reagent.components}),
        [Species.from_reaction("H2O = OH- + H+", -14.0)],
        [Solid.from_reaction(reaction, log10_k)],
        activity="ideal",
    )


def _dose_to_ph(reagent: Dosed, metal: str, amount: float, end_ph: float) -> float:
    """Alkali that turns all of a metal into a hydroxide insoluble at the end pH. [mol/L]"""
    z, symbol = charge_of(metal), metal.rstrip("+0123456789")
    hydroxide = f"{symbol}(OH){z}(s)"
    system = _metal_system(reagent, metal, f"{metal} + {z} H2O = {hydroxide} + {z} H+", 0.0)
    state = equilibrate(
        system, {metal: amount}, ph=end_ph, titrant=vector(system, reagent.components)
    )
    return float(state.titrant_mol_per_l[0])


def _dose_until_gone(reagent: Dosed, metal: str, amount: float, most_left: float) -> float:
    """Least dose that leaves a small share of a metal, its solid being insoluble. [mol/L]"""
    symbol = metal.rstrip("+0123456789")
    z = charge_of(metal)
    reactions = {
        "HS-": f"{metal} + HS- = {symbol}S(s) + H+",
        "CO3-2": f"{metal} + CO3-2 = {symbol}CO3(s)",
        "SO4-2": f"{metal} + SO4-2 = {symbol}SO4(s)",
        "Cl-": f"{metal} + {z} Cl- = {symbol}Cl(s)",
    }
    anion = next(name for name in reagent.components if name in reactions)
    system = _metal_system(reagent, metal, reactions[anion], 30.0)
    water = vector(system, {metal: amount})
    per_mole = vector(system, reagent.components)

    def gone(dose: FloatArray) -> NDArray[np.bool_]:
        state = equilibrate(system, water + dose[:, None] * per_mole)
        return np.asarray(dissolved_along(state, metal) <= most_left * amount)

    return first_true(gone, 0.5 * amount, 2.0 * amount)


@computes("G13")
def burdens(case: Case) -> Mapping[str, float]:
    dose = case.inputs["dose_mg_per_l"]
    chlorides = set(case.inputs["chlorides"])
    found = {}
    for name, reagent in _listed(case.inputs).items():
        system = _ideal(set(reagent.components))
        amount = dose / (1000.0 * reagent.molar_mass_g_per_mol)
        state = equilibrate(system, amount * vector(system, reagent.components))
        burden = water_burden(state.dissolved_mol_per_l, system)
        found[name] = float(burden["Cl" if name in chlorides else "SO4"][0]) / dose
    pairs = (
        ("Na2SO4_per_H2SO4_neutralised", "sulfuric_acid"),
        ("NaCl_per_HCl_neutralised", "hydrochloric_acid"),
    )
    for name, acid in pairs:
        found[name] = _salt_per_acid(shipped(acid), case)
    return found


def _salt_per_acid(acid: Dosed, case: Case) -> float:
    """Dissolved salts of an acid neutralised with caustic soda, per mass of acid. [kg/kg]"""
    caustic = shipped("caustic_soda")
    system = _ideal({*acid.components, *caustic.components})
    amount = float(case.inputs["acid_mol_per_l"])
    state = equilibrate(
        system, amount * vector(system, acid.components), ph=case.inputs["end_ph"],
        titrant=vector(system, caustic.components),
    )  # fmt: skip
    salts = float(water_burden(state.dissolved_mol_per_l, system)["TDS"][0])
    return salts / (1000.0 * amount * acid.molar_mass_g_per_mol)
