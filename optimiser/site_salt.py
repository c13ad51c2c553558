"""Which activity model a site gets: how salty its water can become, and what the model rests on.

One model serves every state of a site, so that no two of them disagree where one model gives way
to the other. It is chosen once, from the feed and the largest doses; a site may name it instead.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from catalogs.interactions import InteractionInfo, missing_pairs
from catalogs.reagents import Reagent
from chemistry.feed import FeedWater
from chemistry.state import equilibrate
from chemistry.system import System
from optimiser.largest_dose import largest_dose_mol_per_l
from optimiser.site import Treatment

FloatArray = NDArray[np.float64]

AUTO = "auto"
ACTIVITY_CHOICES = (AUTO, "davies", "sit")
"""What the key ``activity`` of a site file may say."""

CAUSTIC = {"Na+": 1.0, "H+": -1.0}
MAJOR_MOL_PER_L = 1e-3  # an ion of the feed above this counts as a major one
MODEL_TEXT = {"davies": "the Davies equation", "sit": "specific ion interaction", "ideal": "none"}


def saltiest_mol_per_l(
    feed: FeedWater, treatment: Treatment, reagents: Mapping[str, Reagent]
) -> float:
    """Ionic strength of the saltiest water that the doses of a site make. [mol/L]

    Notes
    -----
    Waters: the feed, the feed at the highest set point by caustic (of all alkalis the one that
    leaves most salt), and the same with the largest dose of each precipitant. A plan may take
    several precipitants, so the rises of the largest few are added up, one fewer than the reagents
    that a plan may have.
    """
    system = feed.system
    doses = [np.zeros(len(system.components))]
    doses += [
        _largest_dose(feed, reagents[name], treatment)
        for name in treatment.reagents
        if reagents[name].family not in ("hydroxide", "acid")
    ]
    waters = np.maximum(feed.totals_mol_per_l + np.array(doses), _least(system))
    strength = np.fmax(_strength(system, waters, None), _at_set_point(system, waters, treatment))
    rises = np.sort(np.nan_to_num(strength[1:] - strength[0]))[::-1]
    several = float(np.maximum(rises[: max(treatment.most_reagents - 1, 1)], 0.0).sum())
    return max(feed.ionic_strength, float(np.nan_to_num(strength[0])) + several)


def _largest_dose(feed: FeedWater, reagent: Reagent, treatment: Treatment) -> FloatArray:
    """Moles of each component in the largest dose of a reagent, (components,). [mol/L]"""
    system = feed.system
    amount = largest_dose_mol_per_l(system, feed.totals_mol_per_l, reagent.components)
    ceiling = treatment.dose_ceilings_mg_per_l.get(reagent.reagent)
    if ceiling is not None:
        amount = min(amount, ceiling / (1000.0 * reagent.molar_mass_g_per_mol))
    vector = np.zeros(len(system.components))
    for component, moles in reagent.components.items():
        vector[system.index[component]] = moles * amount
    return vector


def _least(system: System) -> FloatArray:
    return np.array([-np.inf if c == "H+" else 0.0 for c in system.components])


def _at_set_point(system: System, waters: FloatArray, treatment: Treatment) -> FloatArray:
    vector = np.array([CAUSTIC.get(c, 0.0) for c in system.components])
    return _strength(system, waters, treatment.ph_set_point.high, vector)


def _strength(
    system: System, waters: FloatArray, ph: float | None, titrant: FloatArray | None = None
) -> FloatArray:
    """Ionic strength of waters, nan where there is none such, (n,). [mol/L]"""
    state = equilibrate(system, waters, ph=ph, titrant=titrant, on_failure="flag")
    sound = state.converged & (state.titrant_mol_per_l >= 0.0)
    return np.where(sound, state.ionic_strength, np.nan)


def pairs_by_rule(feed: FeedWater) -> tuple[InteractionInfo, ...]:
    """Pairs among the feed's major ions whose interaction follows a rule; none without SIT."""
    system = feed.system
    major = feed.state.species_mol_per_l[0] > MAJOR_MOL_PER_L
    names = [n for n, big in zip(system.species_names, major, strict=True) if big]
    return missing_pairs(system, names)


def activity_notes(feed: FeedWater, asked: str, saltiest: float) -> list[str]:
    """Say which model a salty site got and why, and which pairs it estimates."""
    name = feed.system.activity_model.name
    if name == "davies" and asked in (AUTO, "davies"):
        return []
    why = "as the site asks"
    if asked == AUTO:
        why = f"since the water may reach an ionic strength of {saltiest:.2f} mol/L"
    text = f"activity coefficients by {MODEL_TEXT[name]}, {why}"
    pairs = pairs_by_rule(feed)
    if pairs:
        listed = ", ".join(f"{p.one} with {p.other}" for p in pairs)
        text += f"; interaction estimated by rule for {listed}"
    return [text]
