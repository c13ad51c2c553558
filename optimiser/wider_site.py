"""Sites that allow more than they do: other reagents, set points, trims, separators.

Owns what changes in the problem; whether a plan opens is for `optimiser.openers`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from catalogs.constants import load_system
from catalogs.reagents import load_reagents
from optimiser.evaluation import Evaluator
from optimiser.points import Points
from optimiser.site import Offer, PhWindow, Site
from optimiser.site_constants import OwnBlock

UNPRICED = "unpriced "
"""Opens the id of an offer that nobody made: it lets chemistry be tried, its price says nothing."""


def other_reagents(site: Site) -> tuple[str, ...]:
    """Catalogued reagents that the site does not allow in the tank."""
    return tuple(name for name in load_reagents() if name not in site.treatment.reagents)


def is_sold(site: Site, reagent: str) -> bool:
    """Whether the price book holds an offer of a reagent."""
    return any(offer.reagent == reagent for offer in site.offers)


def is_unpriced(site: Site, reagent: str) -> bool:
    """Whether the only offer of a reagent is one that nobody made."""
    mine = [offer.offer for offer in site.offers if offer.reagent == reagent]
    return mine == [f"{UNPRICED}{reagent}"]


def with_reagents(site: Site, extra: Sequence[str]) -> Site:
    """The site with more reagents allowed, and with the species and solids that come with them.

    A reagent that nobody offers gets the dearest price per kg of the book, so that a search doses
    no more of it than it needs; that price must not be reported.
    """
    catalog = load_reagents()
    known = {**{name: catalog[name] for name in extra}, **site.reagents}
    wanted = dict.fromkeys(site.system.components)
    for name in extra:
        wanted |= dict.fromkeys(catalog[name].components)
    system = site.system
    if len(wanted) > len(system.components):
        system = OwnBlock(constants=site.own_constants, switches=site.solid_switches).applied_to(
            load_system(
                system.temperature_degc, components=tuple(wanted),
                activity=system.activity_model.name,
            )
        )  # fmt: skip
    missing = tuple(_unpriced(site, name) for name in extra if not is_sold(site, name))
    reagents = (*site.treatment.reagents, *extra)
    return replace(
        site, system=system, reagents=known, offers=(*site.offers, *missing),
        treatment=replace(site.treatment, reagents=reagents),
    )  # fmt: skip


def _unpriced(site: Site, reagent: str) -> Offer:
    dearest = max(
        ((o.price_per_t + o.freight_per_t) / o.strength_fraction for o in site.offers), default=1.0
    )
    return Offer(
        offer=f"{UNPRICED}{reagent}", supplier="", reagent=reagent, product=reagent, form="",
        strength_fraction=1.0, density_kg_per_l=1.0, price=max(dearest, 1.0), price_per="t",
    )  # fmt: skip


def with_window(site: Site, low: float, high: float) -> Site:
    """The site with another window of set points."""
    window = PhWindow(low=low, high=high, source=site.treatment.ph_set_point.source)
    return replace(site, treatment=replace(site.treatment, ph_set_point=window))


def with_trim(site: Site, reagent: str) -> Site:
    """The site with one more trim reagent."""
    catalog = load_reagents()
    missing = () if is_sold(site, reagent) else (_unpriced(site, reagent),)
    trims = (*site.treatment.trim_reagents, reagent)
    wider = site
    if any(c not in site.system.index for c in catalog[reagent].components):
        wider = replace(with_reagents(site, [reagent]), offers=site.offers)
    return replace(
        wider, reagents={**site.reagents, reagent: catalog[reagent]},
        offers=(*site.offers, *missing),
        treatment=replace(site.treatment, trim_reagents=trims),
    )  # fmt: skip


def with_separator(site: Site, tss_mg_per_l: float) -> Site:
    """The site with less solids slipping past the separator."""
    separator = replace(site.treatment.separator, tss_mg_per_l=tss_mg_per_l)
    return replace(site, treatment=replace(site.treatment, separator=separator))


def moved(points: Points, old: Evaluator, new: Evaluator) -> Points:
    """The same points in the columns of a site that allows other reagents beside theirs."""
    places = np.array([*(new.plant.index.get(name, -1) for name in old.plant.names), -1])
    known = np.flatnonzero(places[:-1] >= 0)
    doses = np.zeros((len(points), len(new.plant.names)))
    doses[:, places[known]] = points.doses[:, known]
    return replace(
        points, doses=doses, controller=places[points.controller], trim=places[points.trim]
    )
