"""What a plan's cost may be traded against: TDS, sludge, design margin, pH set point.

Owns how each of them is measured on a plan, and what a cap on it makes of the site; solving the
capped sites is `optimiser.trade_curve`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from optimiser.evaluation import Evaluator, Place
from optimiser.site import PhWindow, Site
from optimiser.yearly_caps import mean_burden_mg_per_l, wet_sludge_t_per_year

FloatArray = NDArray[np.float64]

TDS, SLUDGE, MARGIN, PH = "TDS", "sludge", "margin", "ph"
# What a charge on TDS or sludge weighs against all other costs, where the least is looked for.
LEAST_WEIGHT = 1e4


@dataclass(frozen=True, kw_only=True)
class Axis:
    """One thing that cost is traded against.

    Attributes
    ----------
    column
        Its name in frames and data, with the unit.
    capped
        The site with a cap, a margin or a set point in place.
    costly
        The site with so dear a charge on it that the least of it costs least, given the yearly cost
        of a plan and its value there; None where a search for the least makes no sense.
    digits
        Significant digits that it is printed with.
    """

    key: str
    what: str
    unit: str
    column: str
    capped: Callable[[Site, float], Site]
    costly: Callable[[Site, float, float], Site] | None = None
    digits: int = 4

    def named(self, value: float) -> str:
        """Its name with a value and the unit."""
        return f"{self.what} {value:.{self.digits}g} {self.unit}".rstrip()


def measures(evaluator: Evaluator, place: Place) -> dict[str, float]:
    """What a plan is on every axis, by column; None is not among them.

    The set point of a plan without a controller is left out.
    """
    seen, row = place.seen, place.point
    wet = float(wet_sludge_t_per_year(evaluator, seen)[row])
    found = {
        AXES[TDS].column: float(mean_burden_mg_per_l(evaluator, seen, TDS)[row]),
        AXES[SLUDGE].column: wet,
        "sludge_dry_t_per_year": wet * evaluator.site.disposal.cake_solids_fraction,
        AXES[MARGIN].column: evaluator.site.design_margin,
    }
    if seen.points.controller[row] >= 0:
        found[AXES[PH].column] = float(seen.points.ph[row])
    return found


def _tds_capped(site: Site, cap: float) -> Site:
    return replace(site, mean_caps_mg_per_l={**site.mean_caps_mg_per_l, TDS: cap})


def _tds_costly(site: Site, total: float, value: float) -> Site:
    kg = max(value, 1.0) * site.flow_m3_per_year / 1000.0
    charges = dict(site.burden_charges_per_kg)
    charges[TDS] = charges.get(TDS, 0.0) + LEAST_WEIGHT * total / kg
    return replace(site, burden_charges_per_kg=charges)


def _sludge_capped(site: Site, cap: float) -> Site:
    known = site.disposal.most_wet_t_per_year
    most = cap if known is None else min(cap, known)
    return replace(site, disposal=replace(site.disposal, most_wet_t_per_year=most))


def _sludge_costly(site: Site, total: float, value: float) -> Site:
    extra = LEAST_WEIGHT * total / max(value, 1e-3)
    rules = tuple(
        replace(rule, tariff_per_wet_t=rule.tariff_per_wet_t + extra)
        for rule in site.disposal.rules
    )
    return replace(site, disposal=replace(site.disposal, rules=rules))


def _at_margin(site: Site, margin: float) -> Site:
    return replace(site, design_margin=margin)


def _at_set_point(site: Site, ph: float) -> Site:
    window = PhWindow(low=ph, high=ph, source="trade-off")
    return replace(site, treatment=replace(site.treatment, ph_set_point=window))


AXES: Mapping[str, Axis] = {
    TDS: Axis(
        key=TDS, what="TDS of the mean discharge", unit="mg/L", column="tds_mg_per_l",
        capped=_tds_capped, costly=_tds_costly,
    ),
    SLUDGE: Axis(
        key=SLUDGE, what="wet sludge", unit="t/year", column="sludge_wet_t_per_year",
        capped=_sludge_capped, costly=_sludge_costly,
    ),
    MARGIN: Axis(
        key=MARGIN, what="design margin", unit="", column="design_margin", capped=_at_margin,
        digits=3,
    ),
    PH: Axis(
        key=PH, what="pH set point", unit="", column="ph_set_point", capped=_at_set_point,
    ),
}  # fmt: skip
