"""The arrays of one system and what every solution step evaluates with them.

Owns mass action, saturation, balances, and the rows that a held pH or pCO2 replaces; the steps
themselves are in `chemistry.interior` and `chemistry.newton`.
"""

from __future__ import annotations

import numpy as np

from chemistry.batch import Batch, FloatArray, IntArray
from chemistry.coupling import Coupling
from chemistry.gas import CO2_SPECIES
from chemistry.system import System

LN_MOLALITY_CAP = 30.0
BYTES_AT_ONCE = 4_000_000  # of a batch's matrices, so that any number of waters fits in memory


class Kernel:
    """The arrays of one system with what is evaluated from them."""

    def __init__(self, system: System) -> None:
        self.system = system
        self.formation = system.formation
        self.formation_t = np.ascontiguousarray(system.formation.T)
        self.ln_k = system.ln_k
        self.solid_formation = system.solid_formation
        self.solid_ln_k = system.solid_ln_k
        self.model = system.activity_model
        self.functionals = self.model.functionals
        self.solid_water = system.solid_water
        count = len(system.components)
        size = count + 0.5 * min(count, len(system.solids))  # of a matrix with its present solids
        self.rows_at_once = max(8, int(BYTES_AT_ONCE / (8.0 * size**2)))
        self.upper = np.triu_indices(count)
        self.pairs, self.pair_cells = _pairs(self.formation, self.upper)
        self.solid_pairs, self.solid_cells = _pairs(self.solid_formation, self.upper)
        self.absolute = np.abs(self.formation)
        self.solid_absolute = np.abs(self.solid_formation)
        self.both = np.ascontiguousarray(np.concatenate([self.formation, self.absolute], axis=1))
        self.solid_both = np.concatenate([self.solid_formation, self.solid_absolute], axis=1)
        self.positive = np.maximum(self.formation, 0.0)
        self.negative = np.maximum(-self.formation, 0.0)
        self.largest = np.maximum(self.absolute.max(axis=0), 1.0)
        self.proton = system.index.get("H+", -1)
        self.carbonate = system.index.get("CO3-2", -1)
        self.coupling = Coupling(self.model, self.formation)
        known = CO2_SPECIES in system.species_names
        self.co2_water = (
            float(system.water[system.species_names.index(CO2_SPECIES)]) if known else 0.0
        )

    # -- shared evaluations -------------------------------------------------------------------

    def molalities(self, ln_activity: FloatArray, surroundings: FloatArray) -> FloatArray:
        """Species concentrations by mass action, (n, species). [mol/L]"""
        return np.exp(self.ln_molalities(ln_activity, surroundings))

    def ln_molalities(self, ln_activity: FloatArray, surroundings: FloatArray) -> FloatArray:
        """Natural log of `molalities`, (n, species)."""
        ln_m = ln_activity @ self.formation_t
        ln_m += self.ln_k
        ln_m += self.model.offset(surroundings)
        return np.minimum(ln_m, LN_MOLALITY_CAP, out=ln_m)

    def surroundings(self, m: FloatArray) -> FloatArray:
        """What the activity model sees of the species, (n, width), ionic strength first."""
        return m @ self.functionals

    def saturation_ln(self, ln_activity: FloatArray, surroundings: FloatArray) -> FloatArray:
        """Natural-log saturation index of every candidate solid, (n, solids)."""
        index = ln_activity @ self.solid_formation.T
        index += self.solid_ln_k
        index += self.model.ln_water(surroundings)[:, None] * self.solid_water
        return index

    def gram(self, m: FloatArray, solids_weight: FloatArray | None = None) -> FloatArray:
        """A^T diag(m) A (+ G^T diag(w) G), (n, components, components)."""
        count = len(self.system.components)
        full = np.zeros((m.shape[0], count * count))
        packed = m @ self.pairs
        for cells in self.pair_cells:
            full[:, cells] = packed
        if solids_weight is not None and self.solid_ln_k.size:
            packed = solids_weight @ self.solid_pairs
            upper, lower = self.solid_cells
            full[:, upper] += packed
            off = upper != lower
            full[:, lower[off]] += packed[:, off]
        return full.reshape(m.shape[0], count, count)

    def amounts(self, m: FloatArray, solids: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Sum of each component over species and solids, and the same with |stoichiometry|."""
        summed = m @ self.both
        if solids.shape[1]:
            summed += solids @ self.solid_both
        count = self.formation.shape[1]
        return summed[:, :count], summed[:, count:]

    # -- held pH and pCO2 ----------------------------------------------------------------------

    def co2_product_ln(self, ln_activity: FloatArray, surroundings: FloatArray) -> FloatArray:
        """What a held CO2 pressure holds: ln a(CO3) + 2 ln a(H), less ln of the water, (n,)."""
        product = ln_activity[:, self.carbonate] + 2.0 * ln_activity[:, self.proton]
        return np.asarray(product + self.co2_water * self.model.ln_water(surroundings), dtype=float)

    def doses(self, batch: Batch, gap: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Titrant and carbon dioxide that fill a gap in the balances, each (n,). [mol/L]

        Notes
        -----
        ``gap = d v + e w`` with the titrant ``v`` and ``w`` = 1 carbonate + 2 protons. The
        carbonate row gives ``e``, the row ``batch.pivot`` gives ``d`` once ``e`` is eliminated.
        """
        titrant, co2 = np.zeros(gap.shape[0]), np.zeros(gap.shape[0])
        h, c = self.proton, self.carbonate
        ph = np.flatnonzero(~np.isnan(batch.ph_ln))
        if ph.size:
            v = self.reduced_titrant(batch, ph)
            rest = gap[ph].copy()
            if c >= 0:
                rest[:, h] -= np.where(np.isnan(batch.co2_ln[ph]), 0.0, 2.0 * rest[:, c])
            p = batch.pivot[ph, None]
            titrant[ph] = (np.take_along_axis(rest, p, 1) / np.take_along_axis(v, p, 1))[:, 0]
        opened = np.flatnonzero(~np.isnan(batch.co2_ln))
        if opened.size:
            co2[opened] = gap[opened, c] - titrant[opened] * batch.titrant[opened, c]
        return titrant, co2

    def reduced_titrant(self, batch: Batch, rows: IntArray) -> FloatArray:
        """Titrant of some rows less the carbon dioxide that a held pressure removes, (k, comps)."""
        v = batch.titrant[rows].copy()
        if self.carbonate >= 0:
            opened = ~np.isnan(batch.co2_ln[rows])
            v[opened, self.proton] -= 2.0 * v[opened, self.carbonate]
            v[opened, self.carbonate] = 0.0
        return v

    def added(self, batch: Batch, total: FloatArray) -> FloatArray:
        """What must be added to the totals to hold pH and pCO2, (n, components). [mol/L]"""
        titrant, co2 = self.doses(batch, total - batch.totals)
        result = titrant[:, None] * batch.titrant
        if self.carbonate >= 0:
            result[:, self.carbonate] += co2
            result[:, self.proton] += 2.0 * co2
        return result

    def misses(self, batch: Batch, total: FloatArray) -> FloatArray:
        """Error of the balances that nothing held opens, (n, components). [mol/L]"""
        miss = np.where(batch.present, batch.totals + self.added(batch, total) - total, 0.0)
        ph = np.flatnonzero(~np.isnan(batch.ph_ln))
        miss[ph, batch.pivot[ph]] = 0.0
        if self.carbonate >= 0:
            miss[~np.isnan(batch.co2_ln), self.carbonate] = 0.0
        return miss

    def hold(self, batch: Batch, matrix: FloatArray, rhs: FloatArray) -> None:
        """Replace the balances that a held pH or pCO2 opens, in place.

        ``matrix`` (n, components or more, k) and ``rhs`` (n, components or more) hold the
        linearised balances in their first rows. The titrant's other rows are eliminated with its
        pivot row, then the pivot (carbonate) row becomes the condition itself.
        """
        h, c = self.proton, self.carbonate
        co2 = np.flatnonzero(~np.isnan(batch.co2_ln))
        if co2.size:
            matrix[co2, h] -= 2.0 * matrix[co2, c]
            rhs[co2, h] -= 2.0 * rhs[co2, c]
        ph = np.flatnonzero(~np.isnan(batch.ph_ln))
        if ph.size:
            p = batch.pivot[ph]
            v = self.reduced_titrant(batch, ph)
            factor = v / np.take_along_axis(v, p[:, None], 1)
            factor[np.arange(ph.size), p] = 0.0
            if np.any(factor):
                count = factor.shape[1]
                matrix[ph, :count] -= factor[:, :, None] * matrix[ph, p][:, None, :]
                rhs[ph, :count] -= factor * rhs[ph, p][:, None]
            matrix[ph, p] = 0.0
            matrix[ph, p, h] = 1.0
            rhs[ph, p] = batch.ph_ln[ph] - batch.ln_activity[ph, h]
        if co2.size:
            matrix[co2, c] = 0.0
            matrix[co2, c, c] = 1.0
            matrix[co2, c, h] = 2.0
            here = self.co2_product_ln(batch.ln_activity[co2], batch.surroundings[co2])
            rhs[co2, c] = batch.co2_ln[co2] - here

    def independent_columns(self, batch: Batch) -> FloatArray:
        """Solids' stoichiometry on the directions that are free to move, (n, solids, comps)."""
        free = np.broadcast_to(
            self.solid_formation, (batch.totals.shape[0], *self.solid_formation.shape)
        ).copy()
        h, c = self.proton, self.carbonate
        co2 = ~np.isnan(batch.co2_ln)
        if co2.any():
            free[co2, :, h] -= 2.0 * free[co2][:, :, c]
            free[co2, :, c] = 0.0
        ph = ~np.isnan(batch.ph_ln)
        if ph.any():
            free[ph, :, h] = 0.0
        free *= batch.present[:, None, :]
        return free

    def held_misses(self, part: Batch) -> FloatArray:
        """Largest error of a held ln a(H+) or ln CO2 product, (n,)."""
        miss = np.zeros(part.totals.shape[0])
        ph = ~np.isnan(part.ph_ln)
        if ph.any():
            miss[ph] = np.abs(part.ph_ln[ph] - part.ln_activity[ph, self.proton])
        co2 = ~np.isnan(part.co2_ln)
        if co2.any():
            value = self.co2_product_ln(part.ln_activity[co2], part.surroundings[co2])
            miss[co2] = np.maximum(miss[co2], np.abs(part.co2_ln[co2] - value))
        return miss

    # -- steps ---------------------------------------------------------------------------------

    def step_cap(
        self, part: Batch, ln_m: FloatArray, dl: FloatArray, scale: FloatArray
    ) -> FloatArray:
        """Step length so that no species outgrows the water's inventory, (n,)."""
        inventory = np.abs(part.totals).sum(axis=1) + scale.min(axis=1) + 1e-7
        rise = dl @ self.formation_t
        room = np.maximum(np.log(10.0 * inventory)[:, None] - ln_m, 1.0)
        steepest = np.maximum((rise / room).max(axis=1), 1.0)
        biggest = np.maximum(np.abs(dl).max(axis=1) / 20.0, 1.0)
        cap: FloatArray = 1.0 / np.maximum(steepest, biggest)
        return cap


def _pairs(
    formation: FloatArray, upper: tuple[IntArray, IntArray]
) -> tuple[FloatArray, tuple[IntArray, IntArray]]:
    """Products of two components' stoichiometry where any species has both, and their cells.

    Cells are positions in the flattened matrix of components, above and below its diagonal.
    """
    first, second = upper
    products = formation[:, first] * formation[:, second]
    some = products.any(axis=0)
    count = formation.shape[1]
    first, second = first[some], second[some]
    return np.ascontiguousarray(products[:, some]), (first * count + second, second * count + first)
