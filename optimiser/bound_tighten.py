"""Tighter intervals of a cell from its own linear relaxation: the ends of one variable at a time.

Owns the linear models behind it, kept warm by one solver, and the proof of every end.

Notes
-----
Minimise ``c x`` over ``L <= A x <= U``, ``l <= x <= u`` with the integers made continuous and one
more row: the cost does not exceed that of the plan. For any row prices ``y``, with ``r = c - A'y``,
weak duality gives ``c x >= sum_i (y_i L_i if y_i > 0 else y_i U_i) + sum_j (r_j l_j if r_j > 0 else
r_j u_j)``. The prices that the solver returns are put into that sum, so an end never rests on the
solver's tolerances.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optimiser.backend import LinearProgram
from optimiser.linear_model import Model, Sense
from optimiser.solver import open_warm_linear

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Ends:
    """Least and largest values of single variables over the linear relaxation of a model."""

    def __init__(self, model: Model, most_cost: float) -> None:
        self.index = {key: j for j, key in enumerate(model.variables)}
        self.low = np.array([v.low for v in model.variables.values()])
        self.high = np.array([v.high for v in model.variables.values()])
        rows = [(row.terms, row.sense, row.rhs) for row in model.rows.values()]
        total = model.objective
        # what a variable may cost is what the others leave at their least
        room = max(most_cost - self._least_cost(total.terms) - total.constant, 0.0)
        for key, price in total.terms.items():
            j = self.index[key]
            if price > 0.0 and math.isinf(self.high[j]) and math.isfinite(room):
                self.high[j] = self.low[j] + room / price
        size = max(abs(most_cost), 1.0)
        rows.append(
            ({k: a / size for k, a in total.terms.items()}, Sense.AT_MOST,
             (most_cost - total.constant) / size)
        )  # fmt: skip
        self._matrix(rows)
        self.solver = open_warm_linear(
            LinearProgram(
                low=self.low, high=self.high, row_low=self.row_low, row_high=self.row_high,
                start=self.start, column=self.column, value=self.value,
            )
        )  # fmt: skip
        self.solves = 0

    def _least_cost(self, terms: Any) -> float:
        total = 0.0
        for key, price in terms.items():
            j = self.index[key]
            total += price * (self.low[j] if price > 0.0 else self.high[j])
        return float(total) if math.isfinite(total) else -math.inf

    def _matrix(self, rows: Sequence[tuple[Any, Sense, float]]) -> None:
        count = [len(terms) for terms, _, _ in rows]
        self.start = np.concatenate([[0], np.cumsum(count)]).astype(np.int32)
        self.row = np.repeat(np.arange(len(rows)), count)
        self.column = np.array([self.index[k] for terms, _, _ in rows for k in terms], np.int32)
        self.value = np.array([a for terms, _, _ in rows for a in terms.values()], dtype=float)
        self.row_low = np.array([b if s is not Sense.AT_MOST else -np.inf for _, s, b in rows])
        self.row_high = np.array([b if s is not Sense.AT_LEAST else np.inf for _, s, b in rows])

    def ends(self, key: str) -> tuple[float, float]:
        """Least and largest value of a variable that the relaxation allows."""
        j = self.index[key]
        low, high = self._least(j, 1.0), -self._least(j, -1.0)
        return max(low, float(self.low[j])), min(high, float(self.high[j]))

    def _least(self, column: int, cost: float) -> float:
        """Proven least value of ``cost x_j``."""
        self.solves += 1
        prices = self.solver.row_prices(column, cost)
        if prices is None:
            return -math.inf
        c = np.zeros(self.low.size)
        c[column] = cost
        return self.proven(c, prices)

    def proven(self, cost: FloatArray, prices: FloatArray) -> float:
        """Lower bound of ``cost x`` by weak duality from any row prices."""
        side = np.where(prices > 0.0, self.row_low, self.row_high)
        used = np.isfinite(side) & (prices != 0.0)
        y = np.where(used, prices, 0.0)
        reduced = cost.copy()
        np.subtract.at(reduced, self.column, self.value * y[self.row])
        end = np.where(reduced > 0.0, self.low, self.high)
        counted = np.abs(reduced) > 0.0
        total = float(y[used] @ side[used]) + float(reduced[counted] @ end[counted])
        return total if math.isfinite(total) else -math.inf
