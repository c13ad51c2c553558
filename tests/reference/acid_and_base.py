"""pH, buffer capacity and alkali of waters without metals."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from catalogs import load_reagents, load_system
from chemistry import Solid, Species, System, equilibrate
from chemistry.feed import Measurement, WaterAnalysis, feed_water
from chemistry.units import mg_per_l_as_caco3_to_meq_per_l
from tests.reference.cases import Case, computes
from tests.reference.waters import carbonate_water, free_ion, mg_per_l, vector

SODA = {"Na+": 2.0, "CO3-2": 1.0}
CAUSTIC = {"Na+": 1.0, "H+": -1.0}
CARBON_DIOXIDE = {"CO3-2": 1.0, "H+": 2.0}


@computes("E02")
def lime_and_temperature(case: Case) -> Mapping[str, float]:
    half_span_degc, near = 2.0, case.inputs["near_degc"]
    lime = case.inputs["lime_mol_per_l"]
    ph = [
        float(
            equilibrate(
                load_system(near + step, components=["Ca+2"]), {"Ca+2": lime, "H+": -2.0 * lime}
            ).ph[0]
        )
        for step in (-half_span_degc, half_span_degc)
    ]
    return {"shipped": (ph[1] - ph[0]) / (2.0 * half_span_degc)}


def _carbonate_system(case: Case, activity: str = "ideal") -> System:
    constants = (float(case.inputs[name]) for name in ("pk1", "pk2", "pkw"))
    return carbonate_water(*constants, activity=activity)


@computes("E05")
def soda_water(case: Case) -> Mapping[str, float]:
    systems = {
        "ideal": _carbonate_system(case),
        "davies": _carbonate_system(case, "davies"),
        "shipped": load_system(components=["Na+", "CO3-2"]),
    }
    dose = case.inputs["soda_mol_per_l"]
    return {
        name: float(equilibrate(system, dose * vector(system, SODA)).ph[0])
        for name, system in systems.items()
    }


def sulfide_system(pk1: float, pk2: float | None = None) -> System:
    """Sulfide in water with the dissociation constants given, ideal."""
    species = [
        Species.from_reaction("H2O = OH- + H+", -14.0),
        Species.from_reaction("HS- + H+ = H2S(aq)", pk1),
    ]
    if pk2 is not None:
        species.append(Species.from_reaction("HS- = S-2 + H+", -pk2, name="S-2"))
    return System(["H+", "HS-"], species, activity="ideal")


@computes("E07")
def hydrogen_sulfide_share(case: Case) -> Mapping[str, float]:
    systems = {str(pk1): sulfide_system(pk1) for pk1 in case.inputs["pk1"]}
    systems["shipped"] = load_system(components=["HS-"])
    total = case.inputs["sulfide_mol_per_l"]
    found = {}
    for name in case.values:
        constant, ph = name.split()
        state = equilibrate(systems[constant], {"HS-": total}, ph=float(ph))
        found[name] = float(free_ion(state, "H2S(aq)")[0]) / total
    return found


@computes("E08")
def sulfide_ion(case: Case) -> Mapping[str, float]:
    found = {}
    for pk2 in case.inputs["pk2"]:
        system = sulfide_system(case.inputs["pk1"], pk2)
        totals = {"HS-": case.inputs["sulfide_mol_per_l"]}
        state = equilibrate(system, totals, ph=case.inputs["ph"])
        found[str(pk2)] = float(free_ion(state, "S-2")[0])
    return found


@computes("E10")
def caustic_to_phenolphthalein(case: Case) -> Mapping[str, float]:
    start, end = case.inputs["ph_start"], case.inputs["ph_end"]
    alkalinity = case.inputs["alkalinity_mg_per_l_as_caco3"]
    system = _carbonate_system(case)
    base = 0.001 * mg_per_l_as_caco3_to_meq_per_l(alkalinity) * vector(system, CAUSTIC)
    # Alkalinity brought to its pH with carbon dioxide, which leaves alkalinity alone.
    water = equilibrate(system, base, ph=start, titrant=vector(system, CARBON_DIOXIDE))
    dose = _caustic(system, water.totals, end)
    return {
        "dose_meq": 1000.0 * dose,
        "dose_mg": mg_per_l(dose, "NaOH"),
        "shipped_dose_meq": 1000.0 * _dose_of_analysis(alkalinity, start, end),
    }


def _caustic(system: System, totals: NDArray[np.float64], end_ph: float) -> float:
    state = equilibrate(system, totals, ph=end_ph, titrant=vector(system, CAUSTIC))
    return float(state.titrant_mol_per_l[0])


def _dose_of_analysis(alkalinity_mg_per_l_as_caco3: float, start: float, end: float) -> float:
    """The same water read as an analysis and dosed with the shipped constants. [mol/L]"""
    system = load_system(components=["Na+", "CO3-2", "Cl-"], solids=[])
    salt = Measurement(
        dissolved_mg_per_l=1.0, total_mg_per_l=1.0, below_reporting_limit=False, as_written="1 mg/L"
    )
    analysis = WaterAnalysis(
        measurements={"Cl": salt}, temperature_degc=25.0, ph=start,
        alkalinity_mg_per_l_as_caco3=alkalinity_mg_per_l_as_caco3, close_charge_with="Na",
    )  # fmt: skip
    return _caustic(system, feed_water(analysis, system).totals_mol_per_l[None, :], end)


@computes("E11")
def caustic_for_strong_acid(case: Case) -> Mapping[str, float]:
    acid = load_reagents()["hydrochloric_acid"].components
    found = {}
    for activity in ("ideal", "davies"):
        system = load_system(components=["Na+", "Cl-"], activity=activity)
        start = equilibrate(
            system, np.zeros(len(system.components)), ph=case.inputs["ph_start"],
            titrant=vector(system, acid),
        )  # fmt: skip
        found[activity] = mg_per_l(_caustic(system, start.totals, case.inputs["ph_end"]), "NaOH")
    return found


@computes("E13")
def buffer_capacity(case: Case) -> Mapping[str, float]:
    system = _carbonate_system(case)
    totals = {"CO3-2": case.inputs["carbonate_mol_per_l"]}
    held = equilibrate(system, totals, ph=case.inputs["ph"])
    free = equilibrate(system, held.totals)
    slope = free.sensitivity(vector(system, CAUSTIC)[None, :]).ph[0, 0]
    return {"capacity": 1.0 / float(slope)}


@computes("E14")
def magnesia_ceiling(case: Case) -> Mapping[str, float]:
    found = {}
    for name, ksp in case.inputs["ksp"].items():
        system = System(
            ["H+", "Mg+2"],
            [Species.from_reaction("H2O = OH- + H+", -14.0)],
            [Solid.from_reaction("Mg+2 + 2 H2O = Mg(OH)2(s) + 2 H+", -float(np.log10(ksp)) - 28.0)],
            activity="ideal",
        )
        found[name] = float(equilibrate(system, {"Mg+2": 0.1, "H+": -0.2}).ph[0])
    ceiling = load_reagents()["magnesium_hydroxide"].ph_ceiling
    return {**found, "practical_ceiling": float("nan") if ceiling is None else ceiling}
