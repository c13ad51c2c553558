"""Caps on figures of the year: wet sludge, and the mean burden of the discharge, with slopes.

Owns these two figures as plans print them (nominal doses and set point, the end that gives most)
and the rule that a cap makes of each. Limits, which hold in every state, are `optimiser.quality`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from chemistry.sludge import dry_masses_mg_per_l
from optimiser.points import CLOSED_FORMED, VENTED_FORMED, NominalRows
from optimiser.quality_slopes import burden_slope

if TYPE_CHECKING:
    from optimiser.evaluation import Evaluation, Evaluator

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
    for block in seen.blocks:
        if block.end not in (CLOSED_FORMED, VENTED_FORMED):
            continue
        nominal = NominalRows.at(block.end, seen.rows, seen.blocks, len(seen.points))
        point = np.flatnonzero(nominal.known)
        weight = evaluator.plant.feeds.weight
        solids = nominal.mean([b.state.solids_mol_per_l for b in seen.blocks], weight)
        made = pricing.weigh(solids[point], unreacted[point])
        moved = per_dry * dry_slope(evaluator, seen, nominal)[point]
        _keep_most(value, slope, point, scale * made.wet_mg_per_l, moved)
    return value, slope


def dry_slope(evaluator: Evaluator, seen: Evaluation, nominal: NominalRows) -> FloatArray:
    """Change of each point's mean dry sludge at an end, (points, 1 + reagents). [mg/L]"""
    plant, site = evaluator.plant, evaluator.site
    if not seen.judged[0].solid_slope.shape[2]:
        return np.zeros((len(seen.points), 1 + len(plant.names)))
    weight = dry_masses_mg_per_l(
        np.eye(len(plant.system.solids)), plant.system,
        bound_water_factor=site.disposal.bound_water_factor,
    ).sum(axis=1)  # fmt: skip
    share = plant.feeds.weight
    solids = nominal.mean([part.solid_slope for part in seen.judged], share)
    slope = np.einsum("p,npk->nk", weight, solids)
    slope[:, 1:] += plant.unreacted * (seen.points.doses > 0.0)
    controller = seen.points.controller
    own = np.where(controller >= 0, plant.unreacted[np.maximum(controller, 0)], 0.0)
    slope += own[:, None] * nominal.mean([part.dose_slope for part in seen.judged], share)
    return np.asarray(slope * (1.0 + plant.treatment.polymer_g_per_kg_solids / 1000.0), dtype=float)


def _burden(
    evaluator: Evaluator, seen: Evaluation, burden: str
) -> tuple[FloatArray, FloatArray]:  # fmt: skip
    """Burden of the mean discharge and its slopes. [mg/L]"""
    n, samples, width = len(seen.points), len(evaluator.plant.feeds), 1 + len(evaluator.plant.names)
    value, slope = np.zeros(n * samples), np.zeros((n * samples, width))
    for part in seen.judged:
        block = part.block
        rows = np.flatnonzero(seen.rows.nominal[block.rows] & block.reached)
        if not rows.size:
            continue
        some = block.rows[rows]
        moved = np.zeros((rows.size, width))
        if part.effluent_slope.shape[2]:
            moved = burden_slope(evaluator.judge, burden, part, part.effluent_slope)[rows]
        place = seen.rows.point[some] * samples + seen.rows.sample[some]
        _keep_most(value, slope, place, part.burden[burden][rows], moved)
    mean = evaluator.pricing.mean
    return mean(value.reshape(n, samples)), mean(slope.reshape(n, samples, width))


def _empty(evaluator: Evaluator, seen: Evaluation) -> tuple[FloatArray, FloatArray]:
    n = len(seen.points)
    return np.zeros(n), np.zeros((n, 1 + len(evaluator.plant.names)))


def _keep_most(
    value: FloatArray, slope: FloatArray, point: IntArray, here: FloatArray, moved: FloatArray
) -> None:
    more = here > value[point]
    value[point[more]], slope[point[more]] = here[more], moved[more]
