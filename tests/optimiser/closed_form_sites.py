"""Sites whose optimum follows by hand: one metal, one reagent, nothing that blurs the closed form.

Peak feed, margin 1, no tolerances, a separator that keeps everything, floors out of the way. Owns
writing and reading such sites, and pricing their recipes by hand. Waters and prices are invented.
"""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest
import yaml

from optimiser import assess, load_site, plan
from optimiser.outcome import Plan
from optimiser.site import Site
from tests.optimiser.hand_chemistry import Answer
from tests.optimiser.small_sites import Tree, merged, price_book

FLOW_M3_PER_D, DAYS = 4000.0, 250.0
M3_PER_YEAR = FLOW_M3_PER_D * DAYS
TARIFF, CAKE, BOUND_WATER, SEPARATOR = 145.0, 0.32, 1.25, 900.0

# reagent: strength %, density, price per t of product, freight per t of product (invented)
PRICES: Mapping[str, tuple[float, float, float, float]] = {
    "caustic_soda": (50, 1.525, 380, 31),
    "hydrated_lime": (95, 0.5, 230, 27),
    "quicklime": (90, 0.95, 205, 27),
    "potassium_hydroxide": (45, 1.45, 830, 31),
    "magnesium_hydroxide": (61, 1.5, 395, 29),
    "soda_ash": (99, 1.0, 340, 23),
    "sodium_chloride": (99, 1.1, 110, 21),
    "sodium_sulfate": (98, 1.3, 190, 22),
    "calcium_chloride": (36, 1.36, 160, 26),
    "sodium_sulfide": (60, 1.1, 690, 34),
}

BASE: Tree = {
    "site": "Closed form",
    "currency": "EUR",
    "feed": {
        "stands_for": "peak", "flow_m3_per_d": FLOW_M3_PER_D, "operating_days_per_year": DAYS,
        "temperature_degc": 25, "close_charge_with": "Cl",
    },
    "limits": {"design_margin": 1, "ph": {"low": 4, "high": 11, "source": "invented"}},
    "treatment": {
        "ph_tolerance": 0, "dose_tolerance_fraction": 0, "scale_supersaturation_si": 0,
        "separator": {
            "name": "tight filter", "tss_mg_per_l": 0, "capture_fraction": 1,
            "cost_per_year": SEPARATOR,
        },
    },
    "disposal": {
        "cake_solids_fraction": CAKE, "bound_water_factor": BOUND_WATER,
        "rules": [{"sludge_class": "any", "tariff_per_wet_t": TARIFF}],
    },
    "activity": "davies",
    "offers": "offers.csv",
}  # fmt: skip


def closed_site(
    reagents: tuple[str, ...], limit: tuple[str, float], *changes: Tree,
    prices: Mapping[str, tuple[float, float, float, float]] = PRICES,
) -> Site:  # fmt: skip
    """Write, read and return a site with one limit and these reagents at a dose factor of 1."""
    metal, mg_per_l = limit
    tree = merged(BASE, {
        "limits": {
            "own": [{"parameter": metal, "daily_mg_per_l": mg_per_l, "source": "invented"}],
        },
        "treatment": {
            "reagents": list(reagents), "most_reagents": len(reagents),
            "dose_factors": dict.fromkeys(reagents, 1.0),
        },
    })  # fmt: skip
    for change in changes:
        tree = merged(tree, change)
    offers = tuple(
        (f"O-{name}", name, strength, density, price, "t", freight, 0)
        for name, (strength, density, price, freight) in prices.items()
        if name in reagents
    )
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "offers.csv").write_text(price_book(offers), encoding="utf-8")
        path = folder / "site.yaml"
        path.write_text(yaml.safe_dump(tree, sort_keys=False), encoding="utf-8")
        return load_site(path)


def feed(ph: float | None = None, closing: str = "Cl", acidity: float | None = None,
         **mg_per_l: float) -> Tree:  # fmt: skip
    """The change that gives a site this water; a titrated one with its acid to pH 6.5, meq/L."""
    acid: dict[str, Any] = {"ph": ph} if acidity is None else {}
    if acidity is not None:
        acid = {"acidity_meq_per_l": acidity, "acidity_end_ph": 6.5}
    analysis = {name: f"{value!r} mg/L" for name, value in mg_per_l.items()}
    return {"feed": {**acid, "close_charge_with": closing, "analysis": analysis}}


def window(low: float, high: float) -> Tree:
    """The change that lets set point and discharge lie in a window."""
    return {
        "limits": {"ph": {"low": low, "high": high, "source": "invented"}},
        "treatment": {"ph_set_point": {"low": low, "high": high}},
    }


def costly_plant(cost_per_year: float) -> Tree:
    """The change that gives a site a plant of this fixed cost."""
    return {"treatment": {"separator": {"cost_per_year": cost_per_year}}}


def floor(metal: str, family: str) -> Tree:
    """The change that takes a practical floor out of the way."""
    return {"limits": {"floors": {metal: {family: 1e-6}}}}


def by_hand(
    doses_mg_per_l: Mapping[str, float], dry_mg_per_l: float,
    prices: Mapping[str, tuple[float, float, float, float]] = PRICES,
    separator: float = SEPARATOR,
) -> float:  # fmt: skip
    """Yearly cost: dose x flow x days / strength x (price + freight), wet cake, separator."""
    tonnes = M3_PER_YEAR / 1e6  # per mg/L
    total = separator + TARIFF * tonnes * dry_mg_per_l / CAKE
    for name, dose in doses_mg_per_l.items():
        strength_percent, _, price, freight = prices[name]
        total += tonnes * dose / (strength_percent / 100.0) * (price + freight)
    return total


def mol_per_l(mg_per_l: float, mass_g_per_mol: float) -> float:
    """Concentration of a mass."""
    return mg_per_l / 1000.0 / mass_g_per_mol


def priced_right(
    site: Site, made: Plan, dry_mg_per_l: float,
    prices: Mapping[str, tuple[float, float, float, float]] = PRICES,
) -> None:  # fmt: skip
    """The plan costs what its recipe costs by hand, and `assess` says so too."""
    doses = dict(made.doses)
    separator = site.treatment.separator.cost_per_year
    expected = by_hand(doses, dry_mg_per_l, prices, separator)
    assert made.cost["total"] == pytest.approx(expected, rel=1e-5)
    again = assess(site, doses)
    assert again.compliant
    assert again.cost["total"] == pytest.approx(made.cost["total"], rel=1e-9)


def held(
    site: Site, reagent: str, mass: float, answer: Answer, solid_mass: float,
    prices: Mapping[str, tuple[float, float, float, float]] = PRICES,
) -> Plan:  # fmt: skip
    """Plan a site and hold dose, solid and cost against an answer by hand."""
    made = plan(site)
    assert dict(made.doses) == pytest.approx({reagent: 1000.0 * mass * answer.dose}, rel=1e-4)
    dry = 1000.0 * solid_mass * answer.solid
    tonnes = dry * M3_PER_YEAR / 1e6
    assert made.sludge["dry_t_per_year"] == pytest.approx(tonnes, rel=1e-4, abs=1e-3)
    expected = by_hand(
        {reagent: 1000.0 * mass * answer.dose}, dry, prices,
        site.treatment.separator.cost_per_year,
    )  # fmt: skip
    assert made.cost["total"] == pytest.approx(expected, rel=1e-4)
    priced_right(site, made, dry, prices)
    return made
