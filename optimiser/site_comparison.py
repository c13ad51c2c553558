"""Comparing a site's offers at today's doses, at the plan's, or at volumes that are given.

Owns where the demand comes from; the comparison itself is `optimiser.offer_comparison`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from catalogs.reagents import load_reagents
from chemistry.feed import ANALYTES
from optimiser.offer_comparison import OfferComparison, compare_offers
from optimiser.site import Site

GIVEN, TODAY, PLAN = "volumes given", "today's doses", "the plan's doses"
_KG_PER_G = 1e-3


def compare_site_offers(
    site: Site, demand: Mapping[str, float] | None = None, *, of_plan: bool = False
) -> OfferComparison:
    """Rank a site's offers at given volumes.

    Parameters
    ----------
    site
        The site, with its offers.
    demand
        Demand per reagent; left out: that of the doses under `today` in the site file, or of the
        plan where there are none. [kg pure/year]
    of_plan
        Take the plan's demand even where the site file gives today's doses.

    Raises
    ------
    NoPurchase
        The offers cannot cover the demand.
    NoPlan
        The plan's demand is wanted and there is no plan.
    """
    removed = None
    if demand:
        basis, wanted = GIVEN, dict(demand)
    elif site.today and not of_plan:
        basis, wanted = TODAY, _yearly(site, site.today)
    else:
        basis = PLAN
        wanted, removed = _of_plan(site)
    found = compare_offers(site.offers, wanted, load_reagents(), solver=site.solver.name)
    return replace(
        found, site=site.name, currency=site.currency, basis=basis,
        metal_removed_kg_per_year=removed,
        notes=tuple(note for note in site.notes if note.startswith("offer ")),
    )  # fmt: skip


def _yearly(site: Site, doses_mg_per_l: Mapping[str, float]) -> dict[str, float]:
    """Doses in mg/L pure as kg pure a year."""
    per = site.flow_m3_per_year * _KG_PER_G
    return {key: dose * per for key, dose in doses_mg_per_l.items()}


def _of_plan(site: Site) -> tuple[dict[str, float], float]:
    """The demand of the plan, and the metals with limits that it takes out. [kg/year]"""
    from optimiser.planning import plan

    data = plan(site).to_dict()
    doses: dict[str, float] = data["doses"]
    removed = 0.0
    for row in {row["parameter"]: row for row in data["limits"]}.values():
        measured = site.analysis.measurements.get(row["parameter"])
        if measured is not None and ANALYTES[row["parameter"]].is_metal:
            removed += measured.total_mg_per_l - row["residual"] - row["carry_over"]
    return _yearly(site, doses), removed * site.flow_m3_per_year * _KG_PER_G
