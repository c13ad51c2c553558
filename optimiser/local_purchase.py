"""What a demand costs near a point: the least-cost curve of a reagent as part of a model.

Owns the small twin of the purchasing block that a polish step uses: the same least cost, already
minimised over offers (`optimiser.cost_curve`), so that most steps need no binaries.
"""

from __future__ import annotations

import math

import numpy as np

from optimiser.cost_curve import CostCurve
from optimiser.errors import ModelError, unbounded_demand
from optimiser.linear_model import Expression, Model, Sense
from optimiser.offer_cost import GOODS


def add_local_purchase(
    model: Model, reagent: str, demand: Expression, curve: CostCurve,
    low_kg: float, high_kg: float,
) -> None:  # fmt: skip
    """Charge the least cost of a demand that stays near a range.

    Parameters
    ----------
    model
        Holds the variables of the demand.
    reagent
        Names the variables that are added.
    demand
        What is needed. [kg pure/year]
    curve
        Its least cost.
    low_kg, high_kg
        The range that the step is meant for; the pieces at its ends are taken to go on beyond.

    Notes
    -----
    On one piece the cost is its line. On several, with ``x_k`` the demand if it lies on piece ``k``
    and ``z_k`` telling which, ``sum z = 1``, ``sum x = demand`` and ``start_k z_k <= x_k <= end_k
    z_k``; without binaries where the pieces are convex.
    """
    first, last = (
        min(int(k), curve.high_kg.size - 1) for k in curve.piece(np.array([low_kg, high_kg]))
    )
    pieces = range(first, last + 1)
    if first == last:
        line = demand.times(float(curve.slope[first]))
        model.add_cost(GOODS, line.plus(Expression({}, float(curve.fixed[first]))))
        return
    most_kg = model.highest(demand)
    if not math.isfinite(most_kg):
        raise ModelError(unbounded_demand(reagent, reagent))
    ends = [float(curve.high_kg[k]) for k in pieces]
    ends[-1] = max(most_kg, ends[-2])
    starts = [0.0, *ends[:-1]]
    if _is_convex(curve, first, last):
        _add_lines(model, reagent, demand, curve, pieces)
        return
    parts, uses, cost = {}, {}, Expression()
    for k, start, end in zip(pieces, starts, ends, strict=True):
        part = model.add_variable(f"needed {reagent} piece {k}", high=end)
        use = model.add_variable(f"on {reagent} piece {k}", high=1.0, integer=True)
        model.add_row(f"end of {reagent} {k}", {part: 1.0, use: -end}, Sense.AT_MOST, 0.0)
        model.add_row(f"start of {reagent} {k}", {part: 1.0, use: -start}, Sense.AT_LEAST, 0.0)
        parts[part], uses[use] = 1.0, 1.0
        cost = cost.plus(Expression({part: float(curve.slope[k]), use: float(curve.fixed[k])}))
    model.add_row(f"one piece of {reagent}", uses, Sense.EQUAL, 1.0)
    terms = Expression(parts).plus(demand.times(-1.0)).terms
    model.add_row(f"cover {reagent}", terms, Sense.AT_LEAST, demand.constant)
    model.add_cost(GOODS, cost)


def _add_lines(
    model: Model, reagent: str, demand: Expression, curve: CostCurve, pieces: range
) -> None:
    """A convex cost is the highest of its lines."""
    cost = model.add_variable(f"cost of {reagent}")
    for k in pieces:
        row = Expression({cost: 1.0}).plus(demand.times(-float(curve.slope[k])))
        rhs = float(curve.fixed[k]) - row.constant
        model.add_row(f"cost of {reagent} {k}", row.terms, Sense.AT_LEAST, rhs)
    model.add_cost(GOODS, Expression({cost: 1.0}))


def _is_convex(curve: CostCurve, first: int, last: int) -> bool:
    """Whether slopes rise and the cost does not jump between pieces."""
    for k in range(first, last):
        at = float(curve.high_kg[k])
        left = curve.fixed[k] + curve.slope[k] * at
        right = curve.fixed[k + 1] + curve.slope[k + 1] * at
        if curve.slope[k + 1] < curve.slope[k] or abs(right - left) > 1e-9 * max(1.0, abs(left)):
            return False
    return True
