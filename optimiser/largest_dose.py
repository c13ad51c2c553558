"""The most of a precipitant that plans look at, from what the feed can bind of it."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from chemistry.system import System

FloatArray = NDArray[np.float64]

USUAL_MOL_PER_L = 0.02
"""Most of a precipitant that is looked at where the feed cannot bind as much. Common practice, no
source."""

EXCESS = 1.5  # over what the feed can bind, for what has to stay dissolved beside the solid


def largest_dose_mol_per_l(
    system: System, totals_mol_per_l: FloatArray, components: Mapping[str, float]
) -> float:
    """Largest dose of a precipitant worth trying in a feed. [mol/L]

    Parameters
    ----------
    system
        Candidate solids of the feed.
    totals_mol_per_l
        The feed's totals, (components,). [mol/L]
    components
        Moles of each component per mole of the reagent.

    Notes
    -----
    Each component of the feed binds at most as much as the solid richest in the reagent's
    components takes; the sum over the feed's components, with an excess, is the largest dose.
    Components that the reagent brings itself bind nothing.
    """
    brings = {system.index[c]: n for c, n in components.items() if n > 0.0 and c != "H+"}
    bound = np.zeros(len(system.components))
    for formed in system.solid_formation:
        taken = max((formed[c] / n for c, n in brings.items()), default=0.0)
        partners = np.flatnonzero(formed > 0.0)
        for c in partners if taken > 0.0 else ():
            if c not in brings and system.components[c] != "H+":
                bound[c] = max(bound[c], totals_mol_per_l[c] * taken / formed[c])
    return max(USUAL_MOL_PER_L, EXCESS * float(bound.sum()))
