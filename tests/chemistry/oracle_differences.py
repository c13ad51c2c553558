"""Derivatives of the oracle's waters by central differences in 50 digits."""

from __future__ import annotations

import numpy as np
from mpmath import mp, mpf
from numpy.typing import NDArray

from tests.chemistry.oracle import DIGITS, GUARD_DIGITS, Exact, Factors, Water, solve_exact

FloatArray = NDArray[np.float64]

STEP = mpf(10) ** -18  # of a difference, as a share of the total


class Difference:
    """Central differences of a water's exact solution along one component's total.

    ``unknowns`` solve the water as it is, ``factors`` belong to a place close by.
    """

    def __init__(self, water: Water, unknowns: list[mpf], component: str, factors: Factors) -> None:
        self.factors = factors
        before = water.totals[component]
        with mp.workdps(DIGITS + GUARD_DIGITS):
            self.step = STEP * max(abs(before), mpf("1e-6"))
            self.low, self.high = (
                self._at(water, unknowns, component, before + sign * self.step) for sign in (-1, 1)
            )
        water.totals[component] = before

    def _at(self, water: Water, unknowns: list[mpf], component: str, total: mpf) -> Exact:
        water.totals[component] = total
        return solve_exact(water, unknowns, factors=self.factors)[0]

    def slope(self, low: mpf, high: mpf) -> float:
        with mp.workdps(DIGITS + GUARD_DIGITS):
            return float((high - low) / (2 * self.step))

    def dissolved(self, names: tuple[str, ...]) -> FloatArray:
        low, high = self.low.dissolved, self.high.dissolved
        return np.array([self.slope(low[c], high[c]) for c in names])

    def solids(self, names: tuple[str, ...]) -> FloatArray:
        low, high = self.low.solids, self.high.solids
        return np.array([self.slope(low.get(n, mpf(0)), high.get(n, mpf(0))) for n in names])

    def ph(self) -> float:
        with mp.workdps(DIGITS + GUARD_DIGITS):
            ln_low, ln_high = self.low.ln_activity["H+"], self.high.ln_activity["H+"]
            return self.slope(-ln_low / mp.log(10), -ln_high / mp.log(10))

    def titrant(self) -> float:
        return self.slope(self.low.titrant, self.high.titrant)
