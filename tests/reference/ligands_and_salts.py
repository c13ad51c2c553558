"""Chlorides and sulfates: complexes, common ions, salty water and gypsum.

Salty cases take the model that `choose_activity` gives for their saltiest water, as a site does.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from catalogs import load_reagents, load_system
from chemistry import EquilibriumState, Solid, Species, System, equilibrate
from chemistry.activity import choose_activity
from chemistry.formula import molar_mass_g_per_mol
from tests.reference.cases import Case, computes
from tests.reference.scans import first_true, least
from tests.reference.waters import (
    PLENTY_MOL_PER_L,
    bare_product,
    dissolved,
    dissolved_along,
    free_ion,
    mg_per_l,
    saturated_with_bare_solid,
    vector,
)

FloatArray = NDArray[np.float64]

SILVER_MOL_PER_L = 0.001
LEAD_MOL_PER_L = np.array([0.2])
GYPSUM = "CaSO4.2H2O(s)"


def silver_system(ksp: float, log10_beta: Mapping[int, float]) -> System:
    """Silver and chloride with the constants given, ideal."""
    names = {1: "AgCl(aq)", 2: "AgCl2-"}
    return System(
        ["Ag+", "Cl-"],
        [
            Species.from_reaction(f"Ag+ + {n} Cl- = {names[n]}", log10_k)
            for n, log10_k in log10_beta.items()
        ],
        [Solid.from_reaction("Ag+ + Cl- = AgCl(s)", -np.log10(ksp))],
        activity="ideal",
    )


def silver_over_chloride(
    system: System, chloride_in_excess: FloatArray, silver: float = SILVER_MOL_PER_L
) -> EquilibriumState:
    """Silver chloride in waters with this much chloride beyond the silver. [mol/L]"""
    totals = {"Ag+": np.array([silver]), "Cl-": silver + chloride_in_excess}
    if "Na+" in system.index:
        totals["Na+"] = chloride_in_excess
    return equilibrate(system, totals)


def shipped_silver(most_salt_mol_per_l: float = 0.0) -> System:
    return load_system(
        components=["Ag+", "Cl-", "Na+"], solids=["AgCl(s)"],
        activity=choose_activity(most_salt_mol_per_l),
    )  # fmt: skip


def least_silver(system: System) -> tuple[float, float]:
    """Free chloride at the least dissolved silver, and that silver. [mol/L], [mol/L]"""
    log_excess, silver = least(
        lambda x: dissolved_along(silver_over_chloride(system, 10.0**x), "Ag+"), -4.0, -1.0
    )
    state = silver_over_chloride(system, np.array([10.0**log_excess]))
    return float(free_ion(state, "Cl-")[0]), silver


@computes("D01")
def best_chloride(case: Case) -> Mapping[str, float]:
    found = {"shipped": least_silver(shipped_silver())[0]}
    for name, beta2 in case.inputs["beta2"].items():
        system = silver_system(case.inputs["ksp"], {2: float(np.log10(beta2))})
        found[name] = least_silver(system)[0]
    return found


@computes("D02")
def least_total_silver(case: Case) -> Mapping[str, float]:
    own = silver_system(case.inputs["ksp"], case.inputs["log10_beta"])
    return {
        "least": mg_per_l(least_silver(own)[1], "Ag"),
        "least_mol": least_silver(own)[1],
        "shipped": mg_per_l(least_silver(shipped_silver())[1], "Ag"),
    }


def silver_at_free_chloride(system: System, free_chloride: float) -> float:
    """Dissolved silver where the free chloride has a value. [mol/L]"""
    excess = first_true(
        lambda x: free_ion(silver_over_chloride(system, x), "Cl-") >= free_chloride,
        0.0,
        2.0 * free_chloride,
    )
    return float(dissolved_along(silver_over_chloride(system, np.array([excess])), "Ag+")[0])


@computes("D03")
def silver_curve(case: Case) -> Mapping[str, float]:
    system = silver_system(case.inputs["ksp"], case.inputs["log10_beta"])
    return {
        name: mg_per_l(silver_at_free_chloride(system, float(name)), "Ag") for name in case.values
    }


@computes("D04")
def silver_in_brine(case: Case) -> Mapping[str, float]:
    chloride = np.array([case.inputs["chloride_mol_per_l"]])
    naive = bare_product("Ag+", "Cl-", "AgCl", case.inputs["naive_ksp"])
    systems = {
        "naive": naive,
        "with_complexes": silver_system(case.inputs["ksp"], case.inputs["log10_beta"]),
        "shipped": shipped_silver(),
    }
    return {
        name: float(dissolved_along(silver_over_chloride(system, chloride), "Ag+")[0])
        for name, system in systems.items()
    }


@computes("D05")
def silver_in_strong_brine(case: Case) -> Mapping[str, float]:
    salt = np.array(case.inputs["sodium_chloride_mol_per_l"])
    # The strongest brine dissolves more than the usual amount of silver.
    state = silver_over_chloride(shipped_silver(salt.max()), salt, silver=1.0)
    return dict(zip(case.values, 1000.0 * dissolved_along(state, "Ag+"), strict=True))


def lead_over_chloride(
    chloride_mol_per_l: FloatArray, temperature_degc: float = 25.0
) -> EquilibriumState:
    """Lead chloride in potassium chloride by the shipped constants, laurionite kept out.

    Lead chloride itself brings an ionic strength of 0.1 mol/L.
    """
    salt = np.asarray(chloride_mol_per_l)
    system = load_system(
        temperature_degc, components=["Pb+2", "Cl-", "K+"], solids=["PbCl2(s)"],
        activity=choose_activity(float(salt.max())),
    )  # fmt: skip
    totals = {"Pb+2": LEAD_MOL_PER_L, "Cl-": 2.0 * LEAD_MOL_PER_L + salt, "K+": salt}
    return equilibrate(system, totals)


@computes("D06")
def lead_minimum(case: Case) -> Mapping[str, float]:
    degc, salt = case.inputs["temperature_degc"], case.inputs["chloride_mol_per_l"]

    def lead(x: FloatArray) -> FloatArray:
        return dissolved_along(lead_over_chloride(x, degc), "Pb+2")

    where, amount = least(lead, 0.4, 4.0)
    return {
        "lead_at_minimum": mg_per_l(float(lead(np.array([salt]))[0]), "Pb"),
        "chloride_of_minimum": where,
        "least": mg_per_l(amount, "Pb"),
    }


def naive_lead(ksp: float, chloride_mol_per_l: float) -> float:
    """Dissolved lead over lead chloride in a chloride salt, no complexes. [mol/L]"""
    system = bare_product("Pb+2", "Cl-", "PbCl2", ksp)
    totals = {"Pb+2": 0.1, "Cl-": 0.2 + chloride_mol_per_l}
    return dissolved(equilibrate(system, totals), "Pb+2")


@computes("D07")
def naive_lead_in_brine(case: Case) -> Mapping[str, float]:
    naive = mg_per_l(naive_lead(case.inputs["ksp"], case.inputs["chloride_mol_per_l"]), "Pb")
    return {"naive": naive, "measured_over_naive": case.inputs["measured_mg_per_l"] / naive}


@computes("D08")
def naive_lead_in_acid(case: Case) -> Mapping[str, float]:
    return {"naive": naive_lead(case.inputs["ksp"], case.inputs["chloride_mol_per_l"])}


@computes("D09")
def lead_chloride_in_water(case: Case) -> Mapping[str, float]:
    return {
        "naive": saturated_with_bare_solid("Pb+2", "Cl-", "PbCl2", case.inputs["ksp"]),
        "shipped": float(dissolved_along(lead_over_chloride(np.array([0.0])), "Pb+2")[0]),
    }


def barium_over_sulfate(ksp: float, sulfate_mol_per_l: float) -> float:
    """Dissolved barium over barium sulfate at a sulfate content, ideal. [ug/L]"""
    system = bare_product("Ba+2", "SO4-2", "BaSO4", ksp)
    totals = {"Ba+2": 0.001, "SO4-2": 0.001 + sulfate_mol_per_l}
    return 1000.0 * mg_per_l(dissolved(equilibrate(system, totals), "Ba+2"), "Ba")


@computes("D11")
def barium_in_seawater(case: Case) -> Mapping[str, float]:
    ksp, sulfate = case.inputs["ksp"], case.inputs["sulfate_mol_per_l"]
    gamma = case.inputs["mean_activity_coefficient"]
    sea = case.inputs["seawater"]
    system = load_system(
        case.inputs["temperature_degc"], components=["Ba+2", *sea], solids=["BaSO4(s)"],
        activity=choose_activity(sea["Cl-"]),
    )  # fmt: skip
    barium = 0.001
    totals: dict[str, float] = {**sea, "Ba+2": barium, "SO4-2": sea["SO4-2"] + barium}
    return {
        "naive": barium_over_sulfate(ksp, sulfate),
        "with_given_coefficient": barium_over_sulfate(ksp / gamma**2, sulfate),
        "shipped": 1000.0 * mg_per_l(dissolved(equilibrate(system, totals), "Ba+2"), "Ba"),
    }


@computes("D13")
def lead_sulfate_in_acid(case: Case) -> Mapping[str, float]:
    found = {}
    for percent in case.inputs["acid_percent"]:
        density = case.inputs["density_kg_per_l"][str(percent)]
        acid = percent / 100.0 * density * 1000.0 / molar_mass_g_per_mol("H2SO4")
        system = load_system(
            components=["Pb+2", "SO4-2"], solids=["PbSO4(s)"], activity=choose_activity(acid)
        )
        lead = 0.01
        totals = {"Pb+2": lead, "SO4-2": acid + lead, "H+": 2.0 * acid}
        found[str(percent)] = mg_per_l(dissolved(equilibrate(system, totals), "Pb+2"), "PbSO4")
    return found


def gypsum_in_salt(sodium_chloride_mol_per_l: FloatArray) -> EquilibriumState:
    salt = np.asarray(sodium_chloride_mol_per_l, dtype=float)
    system = load_system(
        components=["Ca+2", "SO4-2", "Na+", "Cl-"], solids=[GYPSUM],
        activity=choose_activity(float(salt.max())),
    )  # fmt: skip
    gypsum = np.array([PLENTY_MOL_PER_L])
    totals = {"Ca+2": gypsum, "SO4-2": gypsum, "Na+": salt, "Cl-": salt}
    return equilibrate(system, totals)


@computes("D14")
def gypsum_in_water(_: Case) -> Mapping[str, float]:
    amount = float(dissolved_along(gypsum_in_salt(np.array([0.0])), "SO4-2")[0])
    return {"shipped": amount, "shipped_mass": mg_per_l(amount, "CaSO4") / 1000.0}


@computes("D15")
def gypsum_product(_: Case) -> Mapping[str, float]:
    state = gypsum_in_salt(np.array([0.0]))
    both = [state.system.index[name] for name in ("Ca+2", "SO4-2")]
    return {"shipped": float(np.exp(state.log_activity[0, both].sum()))}


@computes("D16")
def gypsum_in_brine(case: Case) -> Mapping[str, float]:
    salt = np.array(case.inputs["sodium_chloride_mol_per_l"])
    amounts = dissolved_along(gypsum_in_salt(salt), "SO4-2")
    return dict(zip(case.values, amounts, strict=True))


def limed_acid(acid_mol_per_l: FloatArray, end_ph: float) -> EquilibriumState:
    """Sulfuric acid brought to a pH with lime, gypsum free to form."""
    system = load_system(components=["Ca+2", "SO4-2"], solids=[GYPSUM])
    acid, lime = (load_reagents()[name].components for name in ("sulfuric_acid", "hydrated_lime"))
    totals = np.asarray(acid_mol_per_l)[:, None] * vector(system, acid)
    return equilibrate(system, totals, ph=end_ph, titrant=vector(system, lime))


@computes("D17")
def sulfate_left_by_lime(case: Case) -> Mapping[str, float]:
    state = limed_acid(np.array([case.inputs["acid_mol_per_l"]]), case.inputs["end_ph"])
    return {"shipped": mg_per_l(dissolved(state, "SO4-2"), "SO4-2")}
