"""Carbon dioxide that leaves: how much carbonate a vented water keeps, anywhere in a cell.

Owns the interval of that amount; the state it belongs to is a state like any other.

Notes
-----
`Plant` mixes the feed with the carbonate reagents of a row, lets it come to rest at the site's CO2
pressure without solids, and takes what is gone (never less than nothing) with two protons per mole
out of the totals. At a held CO2 pressure the carbonate that stays rises with the alkalinity, and
every carbonate reagent adds alkalinity or none; so over a box of paced doses it lies between its
values at the least and the largest doses. `MARGIN` widens that interval for the slight change of
the activity coefficients along the box. Recipes whose controller brings carbonate are left out,
and where a resting water cannot be found nothing is assumed of it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.gas import CO2_SPECIES
from chemistry.state import equilibrate
from optimiser.plant import Plant
from optimiser.recipes import Recipe

FloatArray = NDArray[np.float64]

MARGIN = 0.05
LEAST_MARGIN_MOL_PER_L = 1e-6


@dataclass(frozen=True, slots=True)
class Vent:
    """Carbonate before and after venting, mol/L: ranges over a box of doses."""

    mixed_low: float
    mixed_high: float
    kept_low: float
    kept_high: float


def can_vent(plant: Plant, recipe: Recipe) -> bool:
    """Whether the vented end of a recipe can be bounded."""
    own = recipe.controller
    paced = bool(plant.is_carbonate[list(recipe.paced)].any())
    held = own is not None and bool(plant.is_carbonate[own])
    return paced and not held and CO2_SPECIES in plant.system.species_names


def vent_range(plant: Plant, low: FloatArray, high: FloatArray) -> Vent:
    """Ranges over paced doses from ``low`` to ``high``, mg/L fed, (reagents,)."""
    carbonate = plant.system.index["CO3-2"]
    doses = np.stack([low, high]) * plant.is_carbonate
    mixed = plant.totals + doses @ plant.reacting
    state = equilibrate(
        plant.liquid_system, mixed, pco2_atm=plant.treatment.vent_pco2_atm, on_failure="flag"
    )
    before, after = mixed[:, carbonate], state.totals[:, carbonate]
    if not state.converged.all():
        after = np.array([0.0, np.inf])
    kept = np.minimum(before, after)
    least = kept[0] * (1.0 - MARGIN) - LEAST_MARGIN_MOL_PER_L
    most = kept[1] * (1.0 + MARGIN) + LEAST_MARGIN_MOL_PER_L
    return Vent(
        float(before[0]), float(before[1]), max(float(least), 0.0),
        min(float(most), float(before[1])),
    )  # fmt: skip
