"""Small sites that plan in a second or two, for tests. Plants, waters and prices are invented."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import yaml
from numpy.typing import NDArray

from chemistry import System, equilibrate
from chemistry.calibration import FactorFit
from chemistry.feed import feed_water
from chemistry.state import EquilibriumState
from optimiser import load_site
from optimiser.jar_file import JarCalibration, Span
from optimiser.outcome import Outcome
from optimiser.site import Site

Tree = dict[str, Any]

FLOW_M3_PER_D = 100.0
DAYS = 250.0
M3_PER_YEAR = FLOW_M3_PER_D * DAYS
KG_PER_MG_PER_L = M3_PER_YEAR / 1000.0

# offer, reagent, strength %, density, price, per, freight per t, least order t
OFFERS = (
    ("NA-50", "caustic_soda", 50, 1.525, 420, "t", 40, 0.5),
    ("LI-95", "hydrated_lime", 95, 0.5, 210, "t", 35, 0.5),
    ("MG-61", "magnesium_hydroxide", 61, 1.5, 380, "t", 45, 0.5),
    ("SA-99", "soda_ash", 99, 1.0, 330, "t", 30, 0.5),
    ("HS-30", "sodium_hydrosulfide", 30, 1.2, 520, "t", 60, 0.2),
    ("CL-99", "sodium_chloride", 99, 1.1, 120, "t", 30, 0.5),
    ("SU-93", "sulfuric_acid", 93, 1.83, 0.36, "L", 50, 0.2),
    ("HC-33", "hydrochloric_acid", 33, 1.16, 180, "t", 50, 0.2),
)

# 58 mg/L copper and 40 mg/L zinc in a chloride water: fresh hydroxides and nothing else form.
COPPER_ZINC: Tree = {
    "site": "Small copper and zinc rinse",
    "currency": "EUR",
    "feed": {
        "stands_for": "peak", "flow_m3_per_d": FLOW_M3_PER_D, "operating_days_per_year": DAYS,
        "temperature_degc": 25, "ph": 2.6, "close_charge_with": "Cl",
        "analysis": {"Cu": "58 mg/L", "Zn": "40 mg/L", "Cl": "300 mg/L"},
    },
    "limits": {
        "own": [
            {"parameter": "Cu", "daily_mg_per_l": 1.0, "source": "invented"},
            {"parameter": "Zn", "daily_mg_per_l": 2.0, "source": "invented"},
        ],
        "ph": {"low": 6.5, "high": 9.5, "source": "invented"},
    },
    "treatment": {
        "reagents": ["caustic_soda", "hydrated_lime"],
        "trim_reagents": ["hydrochloric_acid"],
        "most_reagents": 2,
        "equipment_cost_per_year": {
            "caustic_soda": 500, "hydrated_lime": 900, "hydrochloric_acid": 300,
        },
        "ph_set_point": {"low": 7.5, "high": 10.5},
        "separator": {
            "name": "filter", "tss_mg_per_l": 0.5, "capture_fraction": 0.999, "cost_per_year": 400,
        },
    },
    "disposal": {
        "cake_solids_fraction": 0.3, "bound_water_factor": 1.2,
        "rules": [{"sludge_class": "ordinary", "tariff_per_wet_t": 130}],
    },
    "offers": "offers.csv",
}  # fmt: skip

# The same metals in a strong sulfate water with some calcium: lime makes gypsum.
SULFATE: Tree = {
    "site": "Small sulfate rinse",
    "feed": {
        "close_charge_with": "SO4", "ph": 2.2,
        "analysis": {
            "Cu": "30 mg/L", "Zn": "30 mg/L", "SO4": "2600 mg/L", "Na": "500 mg/L",
            "Ca": "300 mg/L", "Cl": None,
        },
    },
}  # fmt: skip

# Cadmium and copper that sulfide takes down.
SULFIDE: Tree = {
    "site": "Small cadmium rinse",
    "feed": {"analysis": {"Cu": "12 mg/L", "Cd": "9 mg/L", "Zn": None}},
    "limits": {
        "own": [
            {"parameter": "Cd", "daily_mg_per_l": 0.05, "source": "invented"},
            {"parameter": "Cu", "daily_mg_per_l": 0.5, "source": "invented"},
        ],
    },
    "treatment": {
        "reagents": ["caustic_soda", "sodium_hydrosulfide"],
        "equipment_cost_per_year": {"hydrated_lime": None, "sodium_hydrosulfide": 4000},
        "least_doses_mg_per_l": {"sodium_hydrosulfide": 2},
        "separator": {"tss_mg_per_l": 0.02, "capture_fraction": 0.9999},
    },
}  # fmt: skip

# Lead and zinc that carbonate takes down in an acid water.
CARBONATE: Tree = {
    "site": "Small lead rinse",
    "feed": {"analysis": {"Pb": "20 mg/L", "Cu": None, "Zn": "15 mg/L"}, "ph": 2.3},
    "limits": {
        "own": [
            {"parameter": "Pb", "daily_mg_per_l": 0.4, "source": "invented"},
            {"parameter": "Zn", "daily_mg_per_l": 1.5, "source": "invented"},
        ],
    },
    "treatment": {
        "reagents": ["caustic_soda", "soda_ash"],
        "equipment_cost_per_year": {"hydrated_lime": None, "soda_ash": 600},
    },
}  # fmt: skip


# A caustic rinse that acid brings down to where zinc settles.
ALKALINE: Tree = {
    "site": "Small alkaline rinse",
    "feed": {
        "ph": 11.5, "close_charge_with": "Na", "analysis": {"Cu": "5 mg/L", "Zn": "20 mg/L"},
    },
    "treatment": {
        "reagents": ["hydrochloric_acid"], "trim_reagents": None,
        "equipment_cost_per_year": {"caustic_soda": None, "hydrated_lime": None},
    },
}  # fmt: skip

# Silver that salt takes down; nothing holds the pH.
SILVER: Tree = {
    "site": "Small silver rinse",
    "feed": {
        "ph": 7.5, "close_charge_with": "SO4",
        "analysis": {"Ag": "20 mg/L", "Cu": None, "Zn": None, "Cl": None, "Na": "200 mg/L"},
    },
    "limits": {"own": [{"parameter": "Ag", "daily_mg_per_l": 0.5, "source": "invented"}]},
    "treatment": {
        "reagents": ["sodium_chloride"],
        "equipment_cost_per_year": {"caustic_soda": None, "hydrated_lime": None},
    },
}  # fmt: skip


def merged(base: Mapping[str, Any], changes: Mapping[str, Any]) -> Tree:
    """Return a tree with changes laid over it; None takes a key out, lists are replaced."""
    result = dict(base)
    for key, value in changes.items():
        if value is None:
            result.pop(key, None)
        elif isinstance(value, Mapping) and isinstance(result.get(key), Mapping):
            result[key] = merged(result[key], value)
        else:
            result[key] = value
    return result


def small_site(*changes: Mapping[str, Any], offers: tuple[tuple[Any, ...], ...] = OFFERS) -> Site:
    """Write, read and return the copper and zinc site with changes laid over it in turn."""
    tree: Tree = COPPER_ZINC
    for change in changes:
        tree = merged(tree, change)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "offers.csv").write_text(price_book(offers), encoding="utf-8")
        path = folder / "site.yaml"
        path.write_text(yaml.safe_dump(tree, sort_keys=False), encoding="utf-8")
        return load_site(path)


def price_book(offers: tuple[tuple[Any, ...], ...]) -> str:
    """Return offers as the text of a price book."""
    lines = [
        "offer,supplier,reagent,product,form,strength_percent,density_kg_per_l,price,price_per,"
        "freight_per_t,least_order_t,valid_until,note"
    ]
    for offer, reagent, strength, density, price, per, freight, least in offers:
        lines.append(
            f"{offer},Invented Supply,{reagent},{reagent},solution,{strength},{density},{price},"
            f"{per},{freight},{least},2029-12-31,"
        )
    return "\n".join(lines) + "\n"


def own(*limits: Mapping[str, Any]) -> Tree:
    """Return the change that gives a site these limits and no others."""
    return {"limits": {"own": [{"source": "invented", **limit} for limit in limits]}}


def with_factors(site: Site, **factors: float | tuple[float, float, float]) -> Site:
    """The site as if jar tests had found residual factors for some metals."""
    fits = {}
    for metal, found in factors.items():
        factor, low, high = found if isinstance(found, tuple) else (found, found / 2, found * 2)
        fits[metal] = FactorFit(factor=factor, low=low, high=high, scatter_ln=0.2, jars=5)
    calibration = JarCalibration(
        results="bench.csv", first_day="2026-03-02", last_day="2026-03-02", jars=5, confidence=0.9,
        ph=Span(low=7.0, high=11.0), residual_factors=fits,
    )  # fmt: skip
    return replace(site, jar=calibration)


# -- chemistry by hand --------------------------------------------------------------------------


def feed_totals(site: Site) -> NDArray[np.float64]:
    """Totals of a site's feed. [mol/L]"""
    return np.asarray(feed_water(site.analysis, site.system).totals_mol_per_l, dtype=float)


def dosed(site: Site, doses_mg_per_l: Mapping[str, float]) -> NDArray[np.float64]:
    """Totals of the feed with reacting doses in it, from formulas alone. [mol/L]"""
    totals = feed_totals(site).copy()
    for name, dose in doses_mg_per_l.items():
        reagent = site.reagents[name]
        moles = dose / 1000.0 / reagent.molar_mass_g_per_mol
        for component, count in reagent.components.items():
            totals[site.system.index[component]] += count * moles
    return totals


def settled(
    site: Site, doses_mg_per_l: Mapping[str, float], *, ph: float | None = None,
    system: System | None = None, lost_co2_mol_per_l: float = 0.0,
) -> EquilibriumState:  # fmt: skip
    """Equilibrium of the feed with reacting doses, at their own pH or at a fixed one."""
    totals = dosed(site, doses_mg_per_l)
    index = site.system.index
    totals[index["CO3-2"]] -= lost_co2_mol_per_l
    totals[index["H+"]] -= 2.0 * lost_co2_mol_per_l
    return equilibrate(system or site.system, totals, ph=ph)


def dissolved_mg_per_l(state: EquilibriumState, component: str, mass_g_per_mol: float) -> float:
    """Dissolved total of one component. [mg/L]"""
    return float(state.dissolved[component].iloc[0]) * 1000.0 * mass_g_per_mol


def held_back(system: System, supersaturation_si: float) -> System:
    """The same system with gypsum and calcite forming only above a supersaturation."""
    names = ("CaSO4.2H2O(s)", "CaCO3(s,calcite)")
    solids = [
        replace(s, log10_k=s.log10_k - supersaturation_si) if s.name in names else s
        for s in system.solids
    ]
    return System(
        system.components, system.species, solids,
        temperature_degc=system.temperature_degc, activity=system.activity,
    )  # fmt: skip


def lost_co2_mol_per_l(site: Site, doses_mg_per_l: Mapping[str, float]) -> float:
    """Carbon dioxide that the feed with its carbonate alone gives off to air. [mol/L]"""
    carbonate = {n: d for n, d in doses_mg_per_l.items() if "CO3-2" in site.reagents[n].components}
    totals = dosed(site, carbonate)
    column = site.system.index["CO3-2"]
    at_rest = equilibrate(
        site.system.narrowed(solids=()), totals, pco2_atm=site.treatment.vent_pco2_atm
    )
    return max(0.0, float(totals[column] - at_rest.totals[0, column]))


def dose_for_ph(
    site: Site, controller: str, ph: float, others: Mapping[str, float],
    *, system: System | None = None, lost_co2_mol_per_l: float = 0.0,
) -> float:  # fmt: skip
    """Reacting dose of an alkali that brings the feed with other doses to a pH. [mg/L]

    The interval that holds the pH is divided by 12 again and again.
    """
    base = dosed(site, others)
    base[site.system.index["CO3-2"]] -= lost_co2_mol_per_l
    base[site.system.index["H+"]] -= 2.0 * lost_co2_mol_per_l
    step = dosed(site, {controller: 1.0}) - feed_totals(site)
    low, high = 0.0, 3000.0
    for _ in range(7):
        doses = np.linspace(low, high, 13)
        found = equilibrate(system or site.system, base + doses[:, None] * step).ph
        above = int(np.argmax(found > ph))
        assert above > 0, "the pH lies inside the interval"
        low, high = float(doses[above - 1]), float(doses[above])
    share = (ph - found[above - 1]) / (found[above] - found[above - 1])
    return float(low + share * (high - low))


def row_of(outcome: Outcome, parameter: str, averaging: str = "daily") -> dict[str, Any]:
    """The row of one limit."""
    return next(
        row
        for row in outcome.data["limits"]
        if row["parameter"] == parameter and row["averaging"] == averaging
    )
