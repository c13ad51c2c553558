"""Masses of sludge, the acid that makes gypsum, and the money on a tonne of cake."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from catalogs import load_reagents
from chemistry import Solid, Species, System, equilibrate
from chemistry.formula import molar_mass_g_per_mol
from chemistry.sludge import dry_masses_mg_per_l, wet_mass
from chemistry.units import price_per_lb_to_price_per_t
from tests.reference.cases import Case, computes
from tests.reference.ligands_and_salts import GYPSUM, limed_acid
from tests.reference.scans import first_true
from tests.reference.waters import bare_product, mg_per_l, solid_amount, vector

INSOLUBLE_KSP = 1e-30


@computes("F01")
def dry_solids(case: Case) -> Mapping[str, float]:
    found = {}
    for name, (solid, cation, anion) in case.inputs["solids"].items():
        system = bare_product(cation, anion, solid, INSOLUBLE_KSP)
        metal, ligand = system.solid_formation[0]
        amount = 0.01
        state = equilibrate(system, {cation: amount * metal, anion: amount * ligand})
        dry = dry_masses_mg_per_l(state.solids_mol_per_l, system, bound_water_factor=1.0)
        found[name] = float(dry.sum()) / mg_per_l(amount * metal, cation)
    return found


@computes("F02")
def gypsum_from_acid(case: Case) -> Mapping[str, float]:
    reagents = load_reagents()
    system = System(
        ["H+", "Ca+2", "SO4-2"],
        [Species.from_reaction("H2O = OH- + H+", -14.0)],
        [Solid.from_reaction(f"Ca+2 + SO4-2 + 2 H2O = {GYPSUM}", case.inputs["insoluble_log10_k"])],
        activity="ideal",
    )
    acid = case.inputs["acid_mol_per_l"]
    state = equilibrate(
        system, acid * vector(system, reagents["sulfuric_acid"].components),
        ph=case.inputs["end_ph"], titrant=vector(system, reagents["hydrated_lime"].components),
    )  # fmt: skip
    dry = float(dry_masses_mg_per_l(state.solids_mol_per_l, system)[0].sum())
    return {"gypsum": dry / mg_per_l(acid, "H2SO4")}


@computes("F03")
def acid_without_gypsum(case: Case) -> Mapping[str, float]:
    acid = first_true(
        lambda x: solid_amount(limed_acid(x, case.inputs["end_ph"]), GYPSUM) > 0.0, 1e-4, 0.05
    )
    return {"shipped": acid * molar_mass_g_per_mol("H2SO4")}


@computes("F06")
def wet_cake(case: Case) -> Mapping[str, float]:
    return {"wet": wet_mass(float(case.inputs["dry_kg"]), case.inputs["cake_solids_fraction"])}


@computes("F07")
def tariffs(case: Case) -> Mapping[str, float]:
    return {
        name: price_per_lb_to_price_per_t(price)
        for name, price in case.inputs["price_per_lb"].items()
    }


@computes("F08")
def cake_density(case: Case) -> Mapping[str, float]:
    solids, volumes = [], []
    for cation, metal_g in case.inputs["metal_g_per_kg"].items():
        solid = case.inputs["solids"][cation]
        mass = metal_g * molar_mass_g_per_mol(solid) / molar_mass_g_per_mol(cation)
        solids.append(mass)
        volumes.append(mass / case.inputs["density_kg_per_l"][solid])
    water = 1000.0 - float(np.sum(solids))
    return {"solid_and_water": 1000.0 / (float(np.sum(volumes)) + water)}
