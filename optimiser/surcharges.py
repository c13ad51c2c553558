"""Surcharges per kilogram: what a sewer charges on a metal, a sum or a burden instead of a cap.

Owns what is charged and its slopes; which limits carry a surcharge is `optimiser.site`, the yearly
total by cause `optimiser.costing`.

Notes
-----
With ``c`` the predicted mean at the nominal state (dissolved and carried, never below its practical
floor), ``c0`` what is free, ``p`` the rate and ``Q`` the yearly volume, a year costs

    Q max(0, c - c0) p

added up over the surcharges of a site at the end (scale formed or held back, carbon dioxide kept or
vented) where the sum is largest.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from chemistry.burden import BURDENS
from optimiser.quality_slopes import burden_slope
from optimiser.site import Limit

if TYPE_CHECKING:
    from optimiser.evaluation import Evaluation, Evaluator
    from optimiser.quality import Judge, Judged

FloatArray = NDArray[np.float64]
Data = dict[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Surcharge:
    """A rate on what is discharged of some metals, or of a burden, above what is free."""

    label: str
    rate_per_kg: float
    free_mg_per_l: float
    metals: tuple[int, ...] = ()
    burden: str = ""
    source: str = ""

    def value(self, judged: Judged) -> FloatArray:
        """What is charged, at every row of a block, (rows,). [mg/L]"""
        if self.burden:
            return np.asarray(np.maximum(judged.burden[self.burden], 0.0))
        total = np.maximum(judged.residual + judged.carried, judged.floor)
        return np.asarray(total[:, list(self.metals)].sum(axis=1))

    def slope(self, judge: Judge, judged: Judged, row: int) -> FloatArray:
        """Change of the value at one row with set point and paced doses, (1 + reagents,)."""
        if self.burden:
            moved = burden_slope(judge, self.burden, judged, judged.effluent_slope)
            return np.asarray(moved[row])
        return np.asarray(judged.metal_slope[row, list(self.metals)].sum(axis=0))


def surcharges_of(limits: Sequence[Limit], metals: Sequence[str]) -> tuple[Surcharge, ...]:
    """Surcharges among a site's limits; ``metals`` are those that predictions are made for."""
    return tuple(
        Surcharge(
            label=limit.label, rate_per_kg=limit.surcharge_per_kg,
            free_mg_per_l=limit.free_mg_per_l, source=limit.source,
            metals=tuple(metals.index(m) for m in (limit.of or (limit.parameter,)) if m in metals),
            burden=limit.parameter if limit.parameter in BURDENS else "",
        )
        for limit in limits
        if limit.surcharge_per_kg is not None
    )  # fmt: skip


def surcharge_per_year(
    surcharges: Sequence[Surcharge], judged: Judged, kg_per_mg_per_l: float
) -> FloatArray:
    """Yearly surcharges at every row of a block, (rows,). [currency/year]

    Parameters
    ----------
    surcharges
        What is charged.
    judged
        The block's predictions.
    kg_per_mg_per_l
        Mass in the volume of a year per concentration. [kg/year per mg/L]
    """
    cost = np.zeros(judged.residual.shape[0])
    for one in surcharges:
        above = np.maximum(one.value(judged) - one.free_mg_per_l, 0.0)
        cost += one.rate_per_kg * kg_per_mg_per_l * above
    return cost


def surcharge_rows(evaluator: Evaluator, seen: Evaluation, point: int) -> list[Data]:
    """Surcharges of one point at its dearest end, as plain data."""
    known, per = evaluator.judge.surcharges, evaluator.pricing.kg_per_mg_per_l
    feeds = evaluator.plant.feeds
    means, charged = np.zeros(len(known)), np.zeros(len(known))
    for sample in np.flatnonzero(feeds.counted) if known else ():
        found = _dearest(evaluator, seen, point, int(sample))
        if found is None:
            return []
        part, k = found
        values = np.array([float(one.value(part)[k]) for one in known])
        free = np.array([one.free_mg_per_l for one in known])
        means += feeds.weight[sample] * values
        charged += feeds.weight[sample] * per * np.maximum(values - free, 0.0)
    return [
        {
            "parameter": one.label, "mean_mg_per_l": float(mean),
            "free_mg_per_l": one.free_mg_per_l, "charged_kg_per_year": float(kg),
            "rate_per_kg": one.rate_per_kg, "cost_per_year": one.rate_per_kg * float(kg),
            "source": one.source,
        }
        for one, mean, kg in zip(known, means, charged, strict=True)
    ]  # fmt: skip


def _dearest(
    evaluator: Evaluator, seen: Evaluation, point: int, sample: int
) -> tuple[Judged, int] | None:
    """The end that costs a sample most: its block and the row in it."""
    known, per = evaluator.judge.surcharges, evaluator.pricing.kg_per_mg_per_l
    best: tuple[float, Judged, int] | None = None
    for part in seen.judged:
        k = seen.nominal_row(part.block, point, sample)
        if k is None:
            continue
        cost = float(surcharge_per_year(known, part, per)[k])
        if best is None or cost > best[0]:
            best = (cost, part, k)
    return None if best is None else (best[1], best[2])
