"""The mixed-integer model of one polish step: linearised checks, the purchasing block, disposal.

Owns the rows and costs of the model; moving along its solutions is `optimiser.polish`.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optimiser.costing import BURDEN, DISPOSAL, FEES, POLYMER, SURCHARGES
from optimiser.evaluation import Evaluation, Evaluator
from optimiser.linear_model import Expression, Model, Sense
from optimiser.local_purchase import add_local_purchase
from optimiser.points import CLOSED_FORMED, VENTED_FORMED, NominalRows, Points
from optimiser.quality_slopes import burden_charge
from optimiser.yearly_caps import dry_slope

FloatArray = NDArray[np.float64]

BACK_OFF = 2e-6  # ratios are brought to minus this, so that rounding does not break a limit
ROWS_PER_STEP = 40
ROWS_PER_SAMPLE = 10  # rows more for every sample beyond the first
NEAR_RATIO = -1.5
NEAR_WORST = 0.7  # rows of a check further than this below its worst are left out
MOST_MISSED = 60.0
PENALTY = 20.0  # cost of a unit of ratio, as a multiple of the point's cost
SET_POINT_STEP = 0.6  # pH per unit of radius


@dataclass(frozen=True, eq=False)
class Bounds:
    """Where set points and doses may lie, and until when they may move (`time.perf_counter`)."""

    ph_low: Callable[[int, FloatArray], float]
    ph_high: Callable[[int, FloatArray], float]
    dose_low: FloatArray
    dose_high: FloatArray
    deadline: float = np.inf

    @property
    def late(self) -> bool:
        """Whether the time is over."""
        return time.perf_counter() > self.deadline


def build_step(
    evaluator: Evaluator, seen: Evaluation, row: int, radius: float, bounds: Bounds,
    *, inward: float = 0.0, miss_only: bool = False,
) -> Model:  # fmt: skip
    """Build the mixed-integer model of one step.

    Notes
    -----
    With moves ``v`` of set point and paced doses, every near check asks
    ``ratio + slope . v <= -back-off + miss``; the controller's, the trim's and the sludge's amounts
    are at least their linearised values at every end. Costs are the purchasing block, disposal by
    the tariff of the point's sludge class, charges per kilogram and a penalty on ``miss``; with
    ``miss_only`` nothing but the miss counts.
    """
    model = Model("polish step")
    moves = _add_moves(model, evaluator, seen.points, row, radius, bounds)
    model.add_variable("miss", high=MOST_MISSED)
    most = ROWS_PER_STEP + ROWS_PER_SAMPLE * (len(evaluator.plant.feeds) - 1)
    _add_checks(model, seen, row, moves, BACK_OFF + inward, most)
    if miss_only:
        model.add_cost("miss", Expression({"miss": 1.0}))
        return model
    total = float(seen.total[row])
    scale = total if np.isfinite(total) else 1e6
    model.add_cost("miss", Expression({"miss": PENALTY * scale}))
    demand = _add_amounts(model, evaluator, seen, row, moves)
    _add_purchases(model, evaluator, seen, row, radius, demand)
    _add_disposal(model, evaluator, seen, row, moves)
    _add_burden(model, evaluator, seen, row, moves)
    _add_surcharges(model, evaluator, seen, row, moves)
    return model


def cost_unit(seen: Evaluation, row: int) -> float:
    """A thousandth of the point's cost: costs in this unit are of a size that solvers like."""
    total = float(seen.total[row])
    return total / 1000.0 if np.isfinite(total) and total > 0.0 else 1.0


def in_cost_units(model: Model, unit: float) -> Model:
    """Count a model's costs in another unit, in place; returns the model."""
    for cause, amount in model.costs.items():
        model.costs[cause] = amount.times(1.0 / unit)
    return model


def _add_moves(
    model: Model, evaluator: Evaluator, points: Points, row: int, radius: float, bounds: Bounds
) -> dict[int, tuple[str, float]]:
    """Variables of a step: column of the slopes -> (variable, value at the point)."""
    moves: dict[int, tuple[str, float]] = {}
    doses = points.doses[row]
    if points.controller[row] >= 0:
        here = float(points.ph[row])
        controller = int(points.controller[row])
        low = max(bounds.ph_low(controller, doses), here - SET_POINT_STEP * radius)
        high = min(bounds.ph_high(controller, doses), here + SET_POINT_STEP * radius)
        low, high = min(low, here), max(high, here)
        model.add_variable("set point", low=low, high=high)
        moves[0] = ("set point", here)
    for j in np.flatnonzero(doses > 0.0):
        here = float(doses[j])
        low = max(float(bounds.dose_low[j]), here / (1.0 + 1.5 * radius))
        high = min(float(bounds.dose_high[j]), here * (1.0 + 1.5 * radius))
        key = f"dose {evaluator.plant.names[j]}"
        model.add_variable(key, low=min(low, here), high=max(high, here))
        moves[1 + int(j)] = (key, here)
    return moves


def _linear(
    slope: FloatArray, moves: dict[int, tuple[str, float]]
) -> tuple[dict[str, float], float]:
    """Terms and constant of ``slope . (variable - here)``."""
    terms = {key: float(slope[column]) for column, (key, _) in moves.items()}
    constant = -sum(float(slope[column]) * here for column, (_, here) in moves.items())
    return terms, constant


def _add_checks(
    model: Model, seen: Evaluation, row: int, moves: dict[int, tuple[str, float]], back_off: float,
    most: int,
) -> None:  # fmt: skip
    ratio, slope, labels = _near_checks(seen, row)
    order = np.argsort(-ratio, kind="stable")[:most]
    finite = np.asarray(np.isfinite(slope).all(axis=1), dtype=bool)
    # what no move inside the trust region brings to its limit is left out
    highest = ratio + np.abs(np.where(finite[:, None], slope, 0.0)) @ _reach(model, moves, slope)
    for number, k in enumerate(order):
        if ratio[k] < NEAR_RATIO or not finite[k] or highest[k] < -back_off:
            continue
        terms, constant = _linear(np.clip(slope[k], -1e6, 1e6), moves)
        terms["miss"] = -1.0
        model.add_row(
            f"{labels[k]} row {number}",
            terms,
            Sense.AT_MOST,
            -back_off - min(float(ratio[k]), MOST_MISSED - back_off) - constant,
        )


def _near_checks(seen: Evaluation, row: int) -> tuple[FloatArray, FloatArray, list[str]]:
    """Ratios, slopes and names of what a point comes near to, every corner and end apart."""
    width = 1 + seen.points.doses.shape[1]
    ratios, slopes, labels = [np.zeros(0)], [np.zeros((0, width))], []
    parts = []
    for part in seen.judged:
        mine = np.flatnonzero((seen.rows.point[part.block.rows] == row) & part.block.reached)
        if mine.size and part.ratio.shape[1]:
            parts.append((part.ratio[mine], part.slope[mine]))
    if parts:
        worst = np.max([ratio.max(axis=0) for ratio, _ in parts], axis=0)
        for ratio, slope in parts:
            near = ratio > np.maximum(worst - NEAR_WORST, NEAR_RATIO)
            ratios.append(ratio[near])
            slopes.append(slope[near])
            labels += [f"check {number}" for number in np.nonzero(near)[1]]
    for number, rule in enumerate(seen.rules):
        if np.isfinite(rule.ratio[row]):
            labels.append(f"rule {number}")
            ratios.append(rule.ratio[row : row + 1])
            slopes.append(rule.slope[row : row + 1])
    return np.concatenate(ratios), np.concatenate(slopes), labels


def _reach(model: Model, moves: dict[int, tuple[str, float]], slope: FloatArray) -> FloatArray:
    """Farthest move of each column that the variables' ranges allow, (1 + reagents,)."""
    reach = np.zeros(slope.shape[1])
    for column, (key, here) in moves.items():
        variable = model.variables[key]
        reach[column] = max(here - variable.low, variable.high - here)
    return reach


def _add_amounts(
    model: Model, evaluator: Evaluator, seen: Evaluation, row: int,
    moves: dict[int, tuple[str, float]],
) -> dict[str, Expression]:  # fmt: skip
    """Controller and trim doses at every end; returns the demand in kg pure per year."""
    plant, points = evaluator.plant, seen.points
    per = evaluator.pricing.kg_per_mg_per_l
    demand: dict[str, Expression] = {}

    def buy(reagent: int, amount: Expression) -> None:
        name = plant.names[reagent]
        demand[name] = demand.get(name, Expression()).plus(amount.times(per))

    for column, (key, _) in moves.items():
        if column > 0:
            buy(column - 1, Expression({key: 1.0}))
    for kind, reagent in (
        ("controller", int(points.controller[row])), ("trim", int(points.trim[row])),
    ):  # fmt: skip
        if reagent < 0:
            continue
        for sample in np.flatnonzero(plant.feeds.counted):
            rows = _amount_rows(seen, row, kind, int(sample))
            if rows:
                tag = f"{kind} dose{_of_sample(plant.feeds.many, int(sample))}"
                key = _at_least(model, tag, rows, moves, 10.0 * max(h for h, _ in rows) + 100.0)
                buy(reagent, Expression({key: float(plant.feeds.weight[sample])}))
    return demand


def _of_sample(many: bool, sample: int) -> str:
    return f" of sample {sample}" if many else ""


def _at_least(
    model: Model, name: str, ends: list[tuple[float, FloatArray]],
    moves: dict[int, tuple[str, float]], high: float,
) -> str:  # fmt: skip
    """Add an amount that is at least its linearised value at every end; returns its name."""
    key = model.add_variable(name, high=high)
    for number, (here, slope) in enumerate(ends):
        terms, constant = _linear(slope, moves)
        terms = {name: -value for name, value in terms.items()}
        terms[key] = 1.0
        model.add_row(f"{key} at end {number}", terms, Sense.AT_LEAST, here + constant)
    return key


def _add_purchases(
    model: Model, evaluator: Evaluator, seen: Evaluation, row: int, radius: float,
    demand: Mapping[str, Expression],
) -> None:  # fmt: skip
    """The least cost of every demand by the price book's curves, near where it is now."""
    pricing = evaluator.pricing
    fed = seen.priced.doses[row] + seen.priced.trim_doses[row]
    for name, needed in demand.items():
        here = fed[evaluator.plant.index[name]] * pricing.kg_per_mg_per_l
        add_local_purchase(
            model, name, needed, pricing.book.curve(name),
            here / (1.0 + radius), here * (1.0 + radius),
        )  # fmt: skip


def _amount_rows(
    seen: Evaluation, row: int, kind: str, sample: int
) -> list[tuple[float, FloatArray]]:
    found = []
    for part in seen.judged:
        k = seen.nominal_row(part.block, row, sample)
        if k is None or not part.block.reached[k]:
            continue
        if kind == "controller":
            found.append((float(part.block.dose[k]), part.dose_slope[k]))
        elif part.block.trimmed[k]:
            found.append((float(part.block.trim_dose[k]), part.trim_slope[k]))
    return found


def _add_disposal(
    model: Model, evaluator: Evaluator, seen: Evaluation, row: int,
    moves: dict[int, tuple[str, float]],
) -> None:  # fmt: skip
    chosen = seen.priced.sludges[row]
    if chosen is None:
        return
    made, position, rule = chosen
    plant, site = evaluator.plant, evaluator.site
    polymer = plant.treatment.polymer_g_per_kg_solids / 1000.0
    here = float(made.dry_mg_per_l[position])
    ends = []
    for end in (CLOSED_FORMED, VENTED_FORMED):
        nominal = NominalRows.at(end, seen.rows, seen.blocks, len(seen.points))
        if nominal.known[row]:
            ends.append((here, dry_slope(evaluator, seen, nominal)[row]))
    key = _at_least(model, "dry sludge", ends, moves, 1e7)
    wet_t = evaluator.pricing.kg_per_mg_per_l / 1000.0 / site.disposal.cake_solids_fraction
    model.add_cost(DISPOSAL, Expression({key: wet_t * rule.tariff_per_wet_t}))
    pickup = rule.pickup_fee / rule.tonnes_per_pickup
    model.add_cost(FEES, Expression({key: wet_t * pickup}, rule.yearly_fee))
    price = plant.treatment.polymer_price_per_kg * evaluator.pricing.kg_per_mg_per_l
    model.add_cost(POLYMER, Expression({key: price * polymer / (1.0 + polymer)}))


def _add_burden(
    model: Model, evaluator: Evaluator, seen: Evaluation, row: int,
    moves: dict[int, tuple[str, float]],
) -> None:  # fmt: skip
    charges = evaluator.site.burden_charges_per_kg
    if not charges:
        return
    per, feeds = evaluator.pricing.kg_per_mg_per_l, evaluator.plant.feeds
    cost = Expression()
    for sample in np.flatnonzero(feeds.counted):
        ends = []
        for part in seen.judged:
            k = seen.nominal_row(part.block, row, int(sample))
            if k is not None and part.block.reached[k]:
                slope, here = burden_charge(evaluator.judge, part, k, charges)
                ends.append((per * here, per * slope))
        tag = f"burden charges{_of_sample(feeds.many, int(sample))}"
        key = _at_least(model, tag, ends, moves, 1e12)
        cost = cost.plus(Expression({key: float(feeds.weight[sample])}))
    model.add_cost(BURDEN, cost)


def _add_surcharges(
    model: Model, evaluator: Evaluator, seen: Evaluation, row: int,
    moves: dict[int, tuple[str, float]],
) -> None:  # fmt: skip
    """Each surcharge at each end at least 0 and its linearised value; the dearest end counts."""
    known, per = evaluator.judge.surcharges, evaluator.pricing.kg_per_mg_per_l
    if not known:
        return
    feeds, cost = evaluator.plant.feeds, Expression()
    for sample in np.flatnonzero(feeds.counted):
        tag = _of_sample(feeds.many, int(sample))
        total = model.add_variable(f"surcharges{tag}", high=1e12)
        for number, part in enumerate(seen.judged):
            k = seen.nominal_row(part.block, row, int(sample))
            if k is None or not part.block.reached[k]:
                continue
            spent = {total: 1.0}
            for i, one in enumerate(known):
                scale = per * one.rate_per_kg
                slope = scale * one.slope(evaluator.judge, part, k)
                here = scale * (float(one.value(part)[k]) - one.free_mg_per_l)
                name = f"surcharge {i} at end {number}{tag}"
                spent[_at_least(model, name, [(here, slope)], moves, 1e12)] = -1.0
            model.add_row(f"surcharges at end {number}{tag}", spent, Sense.AT_LEAST, 0.0)
        cost = cost.plus(Expression({total: float(feeds.weight[sample])}))
    model.add_cost(SURCHARGES, cost)
