"""What a batch holds fixed, prepared once for all its Newton steps.

Owns the balances that a held pH or CO2 pressure replaces, and which rows and columns are present;
the rules themselves are those of `chemistry.kernel`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from chemistry.batch import Batch, BoolArray, FloatArray, IntArray
from chemistry.kernel import Kernel


@dataclass(slots=True)
class Held:
    """What does not change while a batch is solved.

    ``ph`` and ``co2`` are the rows whose pH or pressure is held; ``factor`` (rows of ``ph``,
    components) what a unit of the pivot's balance takes from the others, 0 at the pivot itself,
    None where nothing but the pivot is dosed. ``gone`` marks components that a water lacks.
    """

    ph: IntArray
    co2: IntArray
    pivot: IntArray
    factor: FloatArray | None
    gone: BoolArray | None

    @classmethod
    def of(cls, kernel: Kernel, batch: Batch) -> Held:
        """Prepare a batch."""
        ph = np.flatnonzero(~np.isnan(batch.ph_ln))
        co2 = np.flatnonzero(~np.isnan(batch.co2_ln))
        pivot, factor = batch.pivot[ph], None
        if ph.size:
            v = kernel.reduced_titrant(batch, ph)
            take = np.arange(ph.size)
            shares = v / v[take, pivot][:, None]
            shares[take, pivot] = 0.0
            factor = shares if shares.any() else None
        gone = ~batch.present
        return cls(ph, co2, pivot, factor, gone if gone.any() else None)

    def take(self, kernel: Kernel, batch: Batch, kept: BoolArray) -> Held:
        """What some rows hold; ``batch`` is already the batch of these rows."""
        if not self.ph.size and not self.co2.size:
            gone = None if self.gone is None else self.gone[kept]
            return Held(self.ph, self.co2, self.pivot, None, gone)
        return Held.of(kernel, batch)

    def misses(self, kernel: Kernel, batch: Batch, sums: FloatArray) -> FloatArray:
        """Error of the balances that nothing held opens, as `Kernel.misses`, (n, components)."""
        if self.co2.size:
            return kernel.misses(batch, sums)
        miss: FloatArray = batch.totals - sums
        if self.ph.size:
            if self.factor is not None:
                miss[self.ph] -= self.factor * miss[self.ph, self.pivot][:, None]
            miss[self.ph, self.pivot] = 0.0
        if self.gone is not None:
            miss[self.gone] = 0.0
        return miss

    def hold(self, kernel: Kernel, batch: Batch, matrix: FloatArray, rhs: FloatArray) -> None:
        """Replace the balances that something held opens, as `Kernel.hold`, in place."""
        if self.co2.size:
            kernel.hold(batch, matrix, rhs)
            return
        ph, p = self.ph, self.pivot
        if not ph.size:
            return
        count = batch.totals.shape[1]
        if self.factor is not None:
            matrix[ph, :count] -= self.factor[:, :, None] * matrix[ph, p][:, None, :]
            rhs[ph, :count] -= self.factor * rhs[ph, p][:, None]
        matrix[ph, p] = 0.0
        matrix[ph, p, kernel.proton] = 1.0
        rhs[ph, p] = batch.ph_ln[ph] - batch.ln_activity[ph, kernel.proton]

    def held_misses(self, kernel: Kernel, batch: Batch) -> FloatArray | None:
        """Largest error of what is held, (n,); None where nothing is."""
        if not self.ph.size and not self.co2.size:
            return None
        return kernel.held_misses(batch)
