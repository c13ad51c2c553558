"""What a solver's numbers are worth: settling values, and the bound that row prices prove.

Owns the arithmetic behind the checks of `optimiser.solver`; knows no solver.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

from optimiser.linear_model import (
    FEASIBILITY_TOLERANCE,
    INTEGRALITY_TOLERANCE,
    Model,
    Row,
    Sense,
    Variable,
)

OPTIMALITY_TOLERANCE = 1e-6
"""Slack between a proven bound and the objective, relative to the sum of the cost terms' sizes."""


def settled_values(model: Model, raw: Mapping[str, float]) -> dict[str, float]:
    """Round whole numbers and clip to ranges where a solver's own tolerance explains the miss.

    Anything further off is kept as it is, for `Model.violations` to find; a missing value is NaN.
    """
    settled = {}
    for key, variable in model.variables.items():
        x = float(raw.get(key, math.nan))
        if math.isfinite(x):
            if variable.integer and abs(x - round(x)) <= INTEGRALITY_TOLERANCE:
                x = float(round(x))
            x = _clipped(x, variable)
        settled[key] = x
    return settled


def reduced_costs(model: Model, prices: Mapping[str, float]) -> dict[str, float]:
    """Cost coefficients less the row prices: ``d = c - A' y``."""
    reduced = dict.fromkeys(model.variables, 0.0)
    for key, cost in model.objective.terms.items():
        reduced[key] += cost
    for row in model.rows.values():
        price = prices.get(row.key, 0.0)
        if price != 0.0:
            for key, coefficient in row.terms.items():
                reduced[key] -= coefficient * price
    return reduced


def dual_bound(
    model: Model,
    values: Mapping[str, float],
    prices: Mapping[str, float],
    reduced: Mapping[str, float],
) -> float:
    """Lower bound on the least cost that row prices prove, for a model without integers.

    Returns minus infinity where the prices prove nothing.

    Notes
    -----
    For prices ``y`` of the right sign (>= 0 on rows of at least, <= 0 on rows of at most) every
    solution costs at least ``y b + sum_j min(d_j x_j over the range of x_j)`` with
    ``d = c - A' y`` (weak duality). Within rounding of 0, a price of the wrong sign is charged at
    the row's own value and a reduced cost at the variable's own value, so the bound is certified
    to that rounding: `OPTIMALITY_TOLERANCE` of the terms that make up the number.
    """
    costs = model.objective
    floor = min(1.0, max(map(abs, costs.terms.values()), default=0.0))
    sizes = dict.fromkeys(model.variables, floor)
    for key, cost in costs.terms.items():
        sizes[key] = max(sizes[key], abs(cost))
    bound = costs.constant
    for row in model.rows.values():
        price = prices.get(row.key, 0.0)
        for key, coefficient in row.terms.items():
            sizes[key] = max(sizes[key], abs(coefficient * price))
        bound += _row_share(row, price, values, floor)
    for key, variable in model.variables.items():
        d = reduced[key]
        if abs(d) <= OPTIMALITY_TOLERANCE * sizes[key]:
            bound += d * values[key]
        else:
            bound += d * (variable.low if d > 0 else variable.high)
    return bound


def _row_share(row: Row, price: float, values: Mapping[str, float], floor: float) -> float:
    wrong_sign = (row.sense is Sense.AT_LEAST and price < 0) or (
        row.sense is Sense.AT_MOST and price > 0
    )
    if not wrong_sign:
        return price * row.rhs
    if abs(price) * row.largest_coefficient > OPTIMALITY_TOLERANCE * floor:
        return -math.inf
    return price * math.fsum(a * values[key] for key, a in row.terms.items())


def _clipped(x: float, variable: Variable) -> float:
    reach = FEASIBILITY_TOLERANCE * max(1.0, abs(x))
    if variable.low - reach <= x < variable.low:
        return variable.low
    if variable.high < x <= variable.high + reach:
        return variable.high
    return x
