"""What is drawn beside curves: what the mean may be under each limit, and envelopes of residuals.

Owns these figures alone; the curves come from `optimiser.curves`, drawing is
`optimiser.chart_curves`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES
from chemistry.feed import feed_water
from chemistry.response import Response, linearise, response
from optimiser.curves import Curve
from optimiser.feeds import SUMMED_STATES
from optimiser.plant import Plant
from optimiser.quality import LOADS, Judge
from optimiser.site import Site

FloatArray = NDArray[np.float64]

TOLERANCE_LN = 0.25


@dataclass(frozen=True, slots=True, kw_only=True)
class Ceiling:
    """The tightest limit of a metal: ``target_mg_per_l`` is what the mean must not exceed.

    ``text`` names the limit as the permit writes it.
    """

    target_mg_per_l: float
    text: str


@dataclass(frozen=True, eq=False, kw_only=True)
class Band:
    """Two lines around a residual, one never above it and one never below, (doses,). [mg/L]"""

    dose_mg_per_l: FloatArray
    optimistic_mg_per_l: FloatArray
    safe_mg_per_l: FloatArray


def ceilings(site: Site) -> dict[str, Ceiling]:
    """The tightest limit of every metal that has one of its own, by metal.

    The target is the limit times the design margin over the ratio of a bad day or month to the
    mean. A sum of metals has no line in a chart of single metals.
    """
    found: dict[str, Ceiling] = {}
    for check in Judge(Plant(site)).checks:
        if len(check.metals) != 1:
            continue
        unit = check.unit if check.averaging in LOADS else "mg/L"
        text = f"{check.averaging} limit {check.limit:g} {unit}"
        for metal in SUMMED_STATES.get(check.label, (check.label,)):
            known = found.get(metal)
            if known is None or check.target < known.target_mg_per_l:
                found[metal] = Ceiling(target_mg_per_l=check.target, text=text)
    return found


def bands(
    site: Site, curve: Curve, metals: Sequence[str], *, tolerance_ln: float = TOLERANCE_LN
) -> dict[str, Band]:
    """Envelopes of the residuals along one reagent's dose, by metal.

    Parameters
    ----------
    site
        The site whose curve it is.
    curve
        One of its curves against a dose.
    metals
        Which residuals to enclose.
    tolerance_ln
        Largest distance of the two lines in the natural log of the residual.

    Notes
    -----
    Where controllers hold the pH along a curve, the envelope holds it too, in a water with the
    controller's ions at the curve's first dose. Those that it adds later are left out: on the demo
    sites that moves no residual by more than 0.2 %.
    """
    doses = np.array([p.dose_mg_per_l for p in curve.points if p.dose_mg_per_l > 0.0])
    if doses.size < 2:
        return {}
    feed = feed_water(site.analysis, site.system)
    names = feed.system.components
    totals = np.array(feed.totals_mol_per_l, dtype=float)
    first = curve.points[0]
    if first.controller:
        moles = first.controller_dose_mg_per_l * _moles_per_mg(site, first.controller)
        totals += moles * _vector(site, first.controller, names)
    per_mg = _moles_per_mg(site, curve.reagent)
    along = response(
        feed.system, totals, _vector(site, curve.reagent, names), doses * per_mg, ph=curve.held_ph
    )
    return {metal: _band(along, metal, per_mg, tolerance_ln) for metal in metals}


def _band(along: Response, metal: str, per_mg: float, tolerance_ln: float) -> Band:
    analyte = ANALYTES[metal]
    around = linearise(along, analyte.component, tolerance_ln)
    per_mole = 1000.0 * analyte.molar_mass_g_per_mol
    return Band(
        dose_mg_per_l=around.doses_mol_per_l / per_mg,
        optimistic_mg_per_l=per_mole * np.exp(around.optimistic_ln),
        safe_mg_per_l=per_mole * np.exp(around.safe_ln),
    )


def _moles_per_mg(site: Site, reagent: str) -> float:
    """Moles that react per mg fed. [mol/mg]"""
    entry = site.reagents[reagent]
    factor = site.treatment.dose_factors.get(reagent, entry.dose_factor)
    return float(1.0 / (1000.0 * entry.molar_mass_g_per_mol * factor))


def _vector(site: Site, reagent: str, components: Sequence[str]) -> FloatArray:
    """Moles of each component per mole of a reagent, (components,)."""
    parts = site.reagents[reagent].components
    return np.array([float(parts.get(name, 0.0)) for name in components])
