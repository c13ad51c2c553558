"""`assess`: verify and cost any doses by the same evaluation that plans are made with."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from os import PathLike
from typing import TYPE_CHECKING

import numpy as np

from optimiser.describe import describe
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.outcome import Assessment
from optimiser.planning import refuse_salty
from optimiser.points import Points
from optimiser.recipes import make_recipe, trim_for
from optimiser.sample_search import on_every_sample
from optimiser.separators import separator_sites
from optimiser.site import Offer, Site

if TYPE_CHECKING:
    import pandas as pd

TRIMS = ("auto", "none")
TRIM_STAGE = "trim"
SECANT_STEPS = 20
SAME_DOSE = 1e-10  # relative; a mean dose is the one given when it is this close


def assess(
    site: Site,
    doses: Mapping[str, float],
    offers: str | PathLike[str] | pd.DataFrame | Sequence[Offer] | None = None,
    trim: str = "auto",
) -> Assessment:
    """Verify and cost doses.

    Parameters
    ----------
    site
        A problem from `optimiser.load_site`.
    doses
        mg/L of pure compound fed, per m3 of feed; keys ``reagent`` or ``reagent@trim``.
    offers
        Offers to buy from instead of the site's: a price book, a frame or offers.
    trim
        ``auto`` adds the final trim that the pH window needs where the doses name none; ``none``
        discharges the water as it leaves the separator.

    Raises
    ------
    ValueError
        Unknown reagents or stages, doses that are no amounts, an unknown ``trim``.
    FeedRefused
        The water is too salty for the activity model and the site does not say to go on.

    Notes
    -----
    Of the reagents that can control a pH the one of best rank is taken to do so. Its dose brings
    the water at the dearest end (gypsum and calcite formed or not, CO2 kept or vented) to a pH:
    that is the set point, around which every corner is checked. Where the site may choose its
    separator, the doses are assessed with the cheapest one that complies. Where the feed is many
    samples the doses are means of the volume, and every sample is judged at that set point.
    """
    if trim not in TRIMS:
        raise ValueError(f"trim is {trim!r}: use 'auto' or 'none'")
    if offers is not None:
        from optimiser.purchasing import read_offers

        site = replace(site, offers=read_offers(offers))
    site = _with_reagents(site, doses)
    if site.treatment.separator_options:
        found = [_assess(option, doses, trim) for option in separator_sites(site)]
        return min(found, key=lambda one: (not one.compliant, one.cost["total"]))
    return _assess(site, doses, trim)


def _assess(site: Site, doses: Mapping[str, float], trim: str) -> Assessment:
    """Verify and cost doses with the separator that the site names."""
    evaluator = Evaluator(site)
    tank, trimmed = _read_doses(evaluator, doses)
    refuse_salty(site, evaluator.plant.feed.ionic_strength, "the feed")
    points = _points(evaluator, tank, trimmed, trim)
    evaluator = on_every_sample(evaluator)
    if evaluator.plant.feeds.many:
        points = _at_mean_dose(evaluator, points, tank)
    seen = evaluator.evaluate(points)
    strength = max(float(b.state.ionic_strength.max()) for b in seen.blocks)
    refuse_salty(site, strength, "the dosed water")
    proof = {
        "kind": "verified",
        "statement": "these doses were verified and priced; no other was looked for",
        "recipes_examined": 1, "cells_examined": 1,
        "states_examined": evaluator.plant.states_solved, "smallest_step_percent": None,
        "stopped_early": False, "seconds": {},
    }  # fmt: skip
    data = describe(evaluator, seen, 0, proof=proof)
    return Assessment(
        doses=data["doses"], cost=data["cost"], compliant=data["compliant"], data=data
    )


def _with_reagents(site: Site, doses: Mapping[str, float]) -> Site:
    """The site with every dosed reagent allowed where it is dosed."""
    treatment = site.treatment
    main, trims = list(treatment.reagents), list(treatment.trim_reagents)
    for key in doses:
        reagent, _, stage = key.partition("@")
        if reagent not in site.reagents:
            raise ValueError(f"unknown reagent {reagent!r} in doses")
        if stage not in ("", TRIM_STAGE):
            raise ValueError(f"unknown stage in {key!r}: a dose is REAGENT or REAGENT@trim")
        home = trims if stage else main
        if reagent not in home:
            home.append(reagent)
    inside = set(site.system.components)
    needed = {c for name in (*main, *trims) for c in site.reagents[name].components}
    system = site.system
    if not needed <= inside:
        from catalogs.constants import load_system

        system = load_system(
            temperature_degc=system.temperature_degc, components=[*inside, *sorted(needed)],
            activity=system.activity,
        )  # fmt: skip
    return replace(
        site, system=system,
        treatment=replace(treatment, reagents=tuple(main), trim_reagents=tuple(trims)),
    )  # fmt: skip


def _read_doses(
    evaluator: Evaluator, doses: Mapping[str, float]
) -> tuple[np.ndarray, tuple[int, float] | None]:
    plant = evaluator.plant
    tank = np.zeros(len(plant.names))
    trimmed: tuple[int, float] | None = None
    for key, dose in doses.items():
        if not (np.isfinite(dose) and dose >= 0.0):
            raise ValueError(f"dose of {key} is {dose!r}: expected mg/L, 0 or more")
        reagent, _, stage = key.partition("@")
        if stage:
            if trimmed is not None and trimmed[0] != plant.index[reagent]:
                raise ValueError("doses name two trim reagents: name one")
            trimmed = (plant.index[reagent], float(dose))
        else:
            tank[plant.index[reagent]] = dose
    return tank, trimmed


def _points(
    evaluator: Evaluator, tank: np.ndarray, trimmed: tuple[int, float] | None, trim: str
) -> Points:
    """The operating point that these doses make."""
    plant = evaluator.plant
    recipe = make_recipe(plant, [int(i) for i in np.flatnonzero(tank > 0.0)])
    free = Points(tank[None, :].copy(), np.array([-1]), np.array([plant.feed.ph]), np.array([-1]))
    seen = evaluator.evaluate(free, full=False)
    low, high = _ph_range(seen)
    up = recipe.controller is None or plant.reagents[recipe.controller].ph_control == "up"
    set_point = low if up else high
    paced = tank.copy()
    controller = -1
    if recipe.controller is not None:
        controller = recipe.controller
        paced[controller] = 0.0
    if trimmed is not None:
        reagent, dose = trimmed
    elif trim == "auto":
        reagent, dose = trim_for(evaluator, set_point), np.nan
    else:
        reagent, dose = -1, np.nan
    point = Points(
        paced[None, :], np.array([controller]), np.array([set_point]), np.array([reagent]),
        np.array([dose]),
    )  # fmt: skip
    if trimmed is not None and trim == "auto":
        point = _as_controlled(evaluator, point)
    return point


def _as_controlled(evaluator: Evaluator, point: Points) -> Points:
    """Let the trim be driven by its controller where the dose given is the one it would give."""
    driven = replace(point, trim_dose=np.array([np.nan]))
    seen = evaluator.evaluate(driven, full=False)
    would = float(seen.priced.trim_doses[0, point.trim[0]])
    given = float(point.trim_dose[0])
    return driven if abs(would - given) <= 1e-6 * max(given, 1e-9) else point


def _at_mean_dose(evaluator: Evaluator, point: Points, tank: np.ndarray) -> Points:
    """The set point at which the controller's mean dose over the samples is the one given."""
    controller = int(point.controller[0])
    if controller < 0:
        return point
    given = float(tank[controller])

    def miss(ph: float) -> float:
        tried = replace(point, ph=np.array([ph]))
        seen = evaluator.evaluate(tried, full=False)
        return float(seen.priced.doses[0, controller]) / given - 1.0

    before, here = float(point.ph[0]), float(point.ph[0]) + 0.01
    value_before, value = miss(before), miss(here)
    for _ in range(SECANT_STEPS):
        if abs(value) <= SAME_DOSE or value == value_before:
            break
        move = float(np.clip(value * (here - before) / (value - value_before), -0.5, 0.5))
        before, value_before, here = here, value, here - move
        value = miss(here)
    return replace(point, ph=np.array([here]))


def _ph_range(seen: Evaluation) -> tuple[float, float]:
    ph = np.concatenate([block.state.ph for block in seen.blocks])
    return float(ph.min()), float(ph.max())
