"""Solubility in pure water by the bare product, and by the shipped constants beside it."""

from __future__ import annotations

from collections.abc import Mapping

from catalogs import load_system
from chemistry import equilibrate
from tests.reference.cases import Case, computes
from tests.reference.waters import (
    PLENTY_MOL_PER_L,
    dissolved,
    mg_per_l,
    saturated_with_bare_solid,
)


@computes("A01", "A02", "A03", "A04", "A07", "A08", "A09")
def hydroxides(case: Case) -> Mapping[str, float]:
    metal, solid = case.inputs["metal"], case.inputs["solid"]
    found = {
        name: mg_per_l(saturated_with_bare_solid(metal, "OH-", solid, ksp), metal)
        for name, ksp in case.inputs["ksp"].items()
    }
    if "shipped" in case.values:
        found["shipped"] = mg_per_l(saturated_with_shipped_hydroxide(metal), metal)
    return found


def saturated_with_shipped_hydroxide(metal: str) -> float:
    """Dissolved metal of pure water over its default hydroxide, hydrolysis and all. [mol/L]"""
    system = load_system(components=[metal])
    charge = int(system.component_charges[system.index[metal]])
    totals = {metal: PLENTY_MOL_PER_L, "H+": -charge * PLENTY_MOL_PER_L}
    return dissolved(equilibrate(system, totals), metal)


@computes("A10")
def sulfides(case: Case) -> Mapping[str, float]:
    found = {}
    for symbol, ksp in case.inputs["ksp"].items():
        metal, solid = (f"{symbol}+2", f"{symbol}S") if symbol != "Ag" else ("Ag+", "Ag2S")
        found[symbol] = mg_per_l(saturated_with_bare_solid(metal, "S-2", solid, ksp), metal)
    return found


@computes("A11")
def lead_carbonate(case: Case) -> Mapping[str, float]:
    return {
        name: mg_per_l(saturated_with_bare_solid("Pb+2", "CO3-2", "PbCO3", ksp), "Pb")
        for name, ksp in case.inputs["ksp"].items()
    }


@computes("A12")
def carbonates(case: Case) -> Mapping[str, float]:
    found = {}
    for name, ksp in case.inputs["ksp"].items():
        symbol = name.split("_")[0]
        metal, solid = (f"{symbol}+2", f"{symbol}CO3") if symbol != "Ag" else ("Ag+", "Ag2CO3")
        found[name] = mg_per_l(saturated_with_bare_solid(metal, "CO3-2", solid, ksp), metal)
    return found


def _salt(case: Case, cation: str, anion: str, solid: str) -> Mapping[str, float]:
    system = load_system(components=[cation, anion], solids=[f"{solid}(s)"])
    totals = {cation: PLENTY_MOL_PER_L, anion: PLENTY_MOL_PER_L}
    return {
        "bare": saturated_with_bare_solid(cation, anion, solid, case.inputs["ksp"]),
        "shipped": dissolved(equilibrate(system, totals), cation),
    }


@computes("A13")
def silver_chloride(case: Case) -> Mapping[str, float]:
    return _salt(case, "Ag+", "Cl-", "AgCl")


@computes("A14")
def lead_sulfate(case: Case) -> Mapping[str, float]:
    return _salt(case, "Pb+2", "SO4-2", "PbSO4")


@computes("A15")
def barium_sulfate(case: Case) -> Mapping[str, float]:
    return _salt(case, "Ba+2", "SO4-2", "BaSO4")
