"""Caps on figures of the year: wet sludge, and the mean burden of the discharge, with slopes.

Owns these two figures as plans print them (nominal doses and set point, the end that gives most)
and the rule that a cap makes of each. Limits, which hold in every state, are `optimiser.quality`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.sludge import dry_masses_mg_per_l
from optimiser.points import CLOSED_FORMED, VENTED_FORMED
from optimiser.quality_slopes import burden_slope

if TYPE_CHECKING:
    from optimiser.evaluation import Evaluation, Evaluator
    from optimiser.quality import Judged

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
CapRule = tuple[str, FloatArray, FloatArray]

_LEAST = 1e-12


def cap_rules(evaluator: Evaluator, seen: Evaluation) -> list[CapRule]:
    """Rules of the site's caps: what is capped, ``ln(value / cap)`` (points,) and its slopes."""
    rules: list[CapRule] = []
    most = evaluator.site.disposal.most_wet_t_per_year
    if most is not None:
        value, slope = _sludge(evaluator, seen)
        rules.append(_rule(f"sludge of the year, at most {most:g} t wet", value, slope, most))
    for burden, cap in evaluator.site.mean_caps_mg_per_l.items():
        value, slope = _burden(evaluator, seen, burden)
        rules.append(_rule(f"mean {burden} of the discharge, at most {cap:g} mg/L", value,
                           slope, cap))  # fmt: skip
    return rules


def wet_sludge_t_per_year(evaluator: Evaluator, seen: Evaluation) -> FloatArray:
    """Wet sludge of each point, the end that makes most, (points,). [t/year]"""
    return _sludge(evaluator, seen)[0]


def mean_burden_mg_per_l(evaluator: Evaluator, seen: Evaluation, burden: str) -> FloatArray:
    """Burden of each point's mean discharge, the end that holds most, (points,). [mg/L]"""
    return _burden(evaluator, seen, burden)[0]


def _rule(label: str, value: FloatArray, slope: FloatArray, cap: float) -> CapRule:
    known = value > _LEAST
    ratio = np.where(known, np.log(np.maximum(value, _LEAST) / cap), -np.inf)
    return label, ratio, slope / np.maximum(value, _LEAST)[:, None]


def _sludge(evaluator: Evaluator, seen: Evaluation) -> tuple[FloatArray, FloatArray]:
    """Wet sludge and its slopes with set point and paced doses. [t/year]"""
    pricing = evaluator.pricing
    value, slope = _empty(evaluator, seen)
    unreacted = pricing.unreacted_mg_per_l(seen.priced.doses)
    scale = pricing.kg_per_mg_per_l / 1000.0
    per_dry = scale / evaluator.site.disposal.cake_solids_fraction
    for part in seen.judged:
        rows, point = _nominal(seen, part)
        if not rows.size or part.block.end not in (CLOSED_FORMED, VENTED_FORMED):
            continue
        made = pricing.weigh(part.block, rows, unreacted[point])
        moved = per_dry * _dry_slope(evaluator, seen, part, rows)
        _keep_most(value, slope, point, scale * made.wet_mg_per_l, moved)
    return value, slope


def _dry_slope(evaluator: Evaluator, seen: Evaluation, part: Judged, rows: IntArray) -> FloatArray:
    """Change of the dry sludge of some rows, (rows, 1 + reagents). [mg/L]"""
    plant, site = evaluator.plant, evaluator.site
    if not part.solid_slope.shape[2]:
        return np.zeros((rows.size, 1 + len(plant.names)))
    weight = dry_masses_mg_per_l(
        np.eye(len(plant.system.solids)), plant.system,
        bound_water_factor=site.disposal.bound_water_factor,
    ).sum(axis=1)  # fmt: skip
    point = seen.rows.point[part.block.rows[rows]]
    slope = np.einsum("p,npk->nk", weight, part.solid_slope[rows])
    slope[:, 1:] += plant.unreacted * (seen.points.doses[point] > 0.0)
    controller = seen.points.controller[point]
    own = np.where(controller >= 0, plant.unreacted[np.maximum(controller, 0)], 0.0)
    slope += own[:, None] * part.dose_slope[rows]
    return np.asarray(slope * (1.0 + plant.treatment.polymer_g_per_kg_solids / 1000.0), dtype=float)


def _burden(
    evaluator: Evaluator, seen: Evaluation, burden: str
) -> tuple[FloatArray, FloatArray]:  # fmt: skip
    """Burden of the mean discharge and its slopes. [mg/L]"""
    value, slope = _empty(evaluator, seen)
    for part in seen.judged:
        rows, point = _nominal(seen, part)
        if not rows.size:
            continue
        moved = np.zeros((rows.size, slope.shape[1]))
        if part.effluent_slope.shape[2]:
            moved = burden_slope(evaluator.judge, burden, part, part.effluent_slope)[rows]
        _keep_most(value, slope, point, part.burden[burden][rows], moved)
    return value, slope


def _empty(evaluator: Evaluator, seen: Evaluation) -> tuple[FloatArray, FloatArray]:
    n = len(seen.points)
    return np.zeros(n), np.zeros((n, 1 + len(evaluator.plant.names)))


def _nominal(seen: Evaluation, part: Judged) -> tuple[IntArray, IntArray]:
    """Nominal rows of a block that reach their set point, and their points."""
    block = part.block
    rows = np.flatnonzero(seen.rows.nominal[block.rows] & block.reached)
    return rows, seen.rows.point[block.rows[rows]]


def _keep_most(
    value: FloatArray, slope: FloatArray, point: IntArray, here: FloatArray, moved: FloatArray
) -> None:
    more = here > value[point]
    value[point[more]], slope[point[more]] = here[more], moved[more]
