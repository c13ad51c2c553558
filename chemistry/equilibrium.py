"""Equilibrium of a batch of waters: the convex problem, solved for every state at once.

For given activity coefficients the state minimises ``sum m_s(l) - T.l`` over the log activities
``l`` subject to ``G l + g <= 0`` for every candidate solid; the multipliers are the amounts
precipitated (the dual of minimising Gibbs energy). Three steps, each over the whole batch:

1. damped continued fractions without solids give a start;
2. a primal-dual interior-point method with a slack for every solid finds which solids form;
3. an active-set Newton method on log activities, amounts and ionic strength makes it exact.

This module owns steps 1 to 3 and their certificate; `chemistry.state` owns what callers see.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from chemistry.system import LN10, System

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

CHUNK_STATES = 1024
START_ROUNDS = 40
INTERIOR_ROUNDS = 90
NEWTON_ROUNDS = 30
EXCHANGE_ROUNDS = 60
ABSENT_LN = -1.0e3  # log activity of a component that a water does not contain
LN_MOLALITY_CAP = 30.0
MASS_TOLERANCE = 1e-12  # mass balance at which the Newton step stops
MASS_TOLERANCE_LAST = 5e-11  # accepted in the last round, where rounding allows no more
SATURATION_TOLERANCE = 1e-11  # |SI| (natural log) of present solids at which it stops


@dataclass(slots=True)
class Batch:
    """Waters being solved: totals, what is held fixed, and the current iterate.

    ``ph_ln`` is ln a(H+) where pH is held, else nan; ``co2_ln`` is ln a(CO3) + 2 ln a(H) where
    pCO2 is held, else nan; ``titrant`` is what is added to hold the pH, per mole.
    """

    totals: FloatArray
    ph_ln: FloatArray
    co2_ln: FloatArray
    titrant: FloatArray
    present: BoolArray
    ln_activity: FloatArray
    ionic_strength: FloatArray
    solids: FloatArray
    active: BoolArray
    converged: BoolArray

    def take(self, rows: IntArray | BoolArray) -> Batch:
        """Return the batch of some rows (copies)."""
        return Batch(*(getattr(self, f)[rows] for f in self.__slots__))

    def put(self, rows: IntArray | BoolArray, part: Batch) -> None:
        """Write the iterate of a part back into these rows."""
        for name in ("ln_activity", "ionic_strength", "solids", "active", "converged"):
            getattr(self, name)[rows] = getattr(part, name)


class Kernel:
    """The arrays of one system and the three solution steps."""

    def __init__(self, system: System) -> None:
        self.system = system
        self.formation = system.formation
        self.formation_t = np.ascontiguousarray(system.formation.T)
        self.ln_k = system.ln_k
        self.solid_formation = system.solid_formation
        self.solid_ln_k = system.solid_ln_k
        self.model = system.activity_model
        self.z2 = self.model.squared_charges
        count = len(system.components)
        self.upper = np.triu_indices(count)
        self.pairs = self.formation[:, self.upper[0]] * self.formation[:, self.upper[1]]
        self.solid_pairs = (
            self.solid_formation[:, self.upper[0]] * self.solid_formation[:, self.upper[1]]
        )
        self.absolute = np.abs(self.formation)
        self.solid_absolute = np.abs(self.solid_formation)
        self.positive = np.maximum(self.formation, 0.0)
        self.negative = np.maximum(-self.formation, 0.0)
        self.largest = np.maximum(self.absolute.max(axis=0), 1.0)
        self.proton = system.index.get("H+", -1)
        self.carbonate = system.index.get("CO3-2", -1)

    # -- shared evaluations -------------------------------------------------------------------

    def molalities(self, ln_activity: FloatArray, ionic_strength: FloatArray) -> FloatArray:
        """Species concentrations by mass action, (n, species). [mol/L]"""
        screening, _ = self.model.screening(ionic_strength)
        ln_m = ln_activity @ self.formation_t
        ln_m += self.ln_k
        ln_m += screening[:, None] * self.z2
        return np.exp(np.minimum(ln_m, LN_MOLALITY_CAP))

    def saturation_ln(self, ln_activity: FloatArray) -> FloatArray:
        """Natural-log saturation index of every candidate solid, (n, solids)."""
        return ln_activity @ self.solid_formation.T + self.solid_ln_k

    def gram(self, m: FloatArray, solids_weight: FloatArray | None = None) -> FloatArray:
        """A^T diag(m) A (+ G^T diag(w) G), (n, components, components)."""
        packed = m @ self.pairs
        if solids_weight is not None and self.solid_ln_k.size:
            packed = packed + solids_weight @ self.solid_pairs
        count = len(self.system.components)
        full = np.empty((m.shape[0], count, count))
        full[:, self.upper[0], self.upper[1]] = packed
        full[:, self.upper[1], self.upper[0]] = packed
        return full

    def amounts(self, m: FloatArray, solids: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Sum of each component over species and solids, and the same with |stoichiometry|."""
        total = m @ self.formation + solids @ self.solid_formation
        scale = m @ self.absolute + solids @ self.solid_absolute
        return total, scale

    # -- held pH and pCO2 ----------------------------------------------------------------------

    def added(self, batch: Batch, total: FloatArray) -> FloatArray:
        """What must be added to the totals to hold pH and pCO2, (n, components). [mol/L]"""
        gap = total - batch.totals
        result = np.zeros_like(gap)
        held_ph, held_co2 = ~np.isnan(batch.ph_ln), ~np.isnan(batch.co2_ln)
        h, c = self.proton, self.carbonate
        if held_co2.any():
            both = held_co2 & held_ph
            only = held_co2 & ~held_ph
            result[only, c] = gap[only, c]
            result[only, h] = 2.0 * gap[only, c]
            v = batch.titrant[both]
            # gap_h = d v_h + 2 e, gap_c = d v_c + e
            pivot = v[:, h] - 2.0 * v[:, c]
            d = (gap[both, h] - 2.0 * gap[both, c]) / pivot
            e = gap[both, c] - d * v[:, c]
            filled = d[:, None] * v
            filled[:, c] += e
            filled[:, h] += 2.0 * e
            result[both] = filled
        plain = held_ph & ~held_co2
        if plain.any():
            v = batch.titrant[plain]
            result[plain] = (gap[plain, h] / v[:, h])[:, None] * v
        return result

    def misses(self, batch: Batch, total: FloatArray) -> FloatArray:
        """Error of the balances that nothing held opens, (n, components). [mol/L]"""
        miss = np.where(batch.present, batch.totals + self.added(batch, total) - total, 0.0)
        if self.proton >= 0:
            miss[~np.isnan(batch.ph_ln), self.proton] = 0.0
        if self.carbonate >= 0:
            miss[~np.isnan(batch.co2_ln), self.carbonate] = 0.0
        return miss

    def hold(self, batch: Batch, matrix: FloatArray, rhs: FloatArray) -> None:
        """Replace the balances that a held pH or pCO2 opens, in place.

        ``matrix`` (n, components or more, k) and ``rhs`` (n, components or more) hold the
        linearised balances in their first rows. A row of the titrant is eliminated with the proton
        row, then the proton (carbonate) row becomes the condition itself.
        """
        h, c = self.proton, self.carbonate
        co2 = np.flatnonzero(~np.isnan(batch.co2_ln))
        if co2.size:
            matrix[co2, h] -= 2.0 * matrix[co2, c]
            rhs[co2, h] -= 2.0 * rhs[co2, c]
        ph = np.flatnonzero(~np.isnan(batch.ph_ln))
        if ph.size:
            v = batch.titrant[ph].copy()
            opened = ~np.isnan(batch.co2_ln[ph])
            if c >= 0:
                v[opened, h] -= 2.0 * v[opened, c]
            factor = v / v[:, h : h + 1]
            factor[:, h] = 0.0
            if np.any(factor):
                count = factor.shape[1]
                matrix[ph, :count] -= factor[:, :, None] * matrix[ph, h][:, None, :]
                rhs[ph, :count] -= factor * rhs[ph, h][:, None]
            matrix[ph, h] = 0.0
            matrix[ph, h, h] = 1.0
            rhs[ph, h] = batch.ph_ln[ph] - batch.ln_activity[ph, h]
        if co2.size:
            matrix[co2, c] = 0.0
            matrix[co2, c, c] = 1.0
            matrix[co2, c, h] = 2.0
            here = batch.ln_activity[co2, c] + 2.0 * batch.ln_activity[co2, h]
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

    # -- step 1: continued fractions -----------------------------------------------------------

    def start(self, batch: Batch, rounds: int = START_ROUNDS) -> None:
        """Damped continued fractions on the balances without solids, in place."""
        totals = np.where(batch.present, batch.totals, 0.0)
        held = np.zeros_like(batch.present)
        ph = ~np.isnan(batch.ph_ln)
        if self.proton >= 0:
            batch.ln_activity[ph, self.proton] = batch.ph_ln[ph]
            held[ph, self.proton] = True
        move = batch.present & ~held
        for turn in range(rounds):
            m = self.molalities(batch.ln_activity, batch.ionic_strength)
            gain = m @ self.positive + np.maximum(-totals, 0.0)
            loss = m @ self.negative + np.maximum(totals, 0.0)
            ratio = np.log(np.maximum(loss, 1e-300) / np.maximum(gain, 1e-300)) / self.largest
            small = np.exp(-np.abs(ratio))
            theta = 0.9 - 0.5 * (1.0 - small) * (turn % 3 != 0)
            step = np.where(move, theta * np.clip(ratio, -30.0, 30.0), 0.0)
            batch.ln_activity += step
            self._hold_start(batch)
            strength = np.minimum(0.5 * (m @ self.z2), 5.0)
            batch.ionic_strength = 0.5 * (batch.ionic_strength + strength)
            if np.max(np.abs(np.where(move, ratio, 0.0)), initial=0.0) < 0.02:
                break

    def _hold_start(self, batch: Batch) -> None:
        co2 = ~np.isnan(batch.co2_ln)
        if co2.any():
            h, c = self.proton, self.carbonate
            batch.ln_activity[co2, c] = batch.co2_ln[co2] - 2.0 * batch.ln_activity[co2, h]

    # -- step 2: interior point ----------------------------------------------------------------

    def interior(self, batch: Batch, *, target: float = 1e-6, shrink: float = 0.15) -> None:
        """Primal-dual interior point with slacks on the solids, in place; stops loose.

        ``active`` is set to the solids whose scaled amount exceeds their slack.
        """
        if not self.solid_ln_k.size:
            batch.active[:] = False
            return
        most = self._most(batch)
        possible = most > 0.0
        scale_x = np.where(possible, most, 1.0)
        saturation = self.saturation_ln(batch.ln_activity)
        slack = np.where(possible, np.maximum(-saturation, 1.0), 1.0)
        x = np.where(possible, np.where(saturation > 0, 0.3, 0.05 / slack), 0.0)
        rows = np.arange(batch.totals.shape[0])
        for _ in range(INTERIOR_ROUNDS):
            part = batch.take(rows)
            pos, top = possible[rows], scale_x[rows]
            mu = np.maximum(
                shrink * np.sum(x[rows] * slack[rows] * pos, axis=1) / np.maximum(pos.sum(1), 1),
                0.3 * target,
            )
            done = self._interior_step(part, x, slack, rows, pos, top, mu, target)
            batch.put(rows, part)
            rows = rows[~done]
            if rows.size == 0:
                break
        batch.active[:] = possible & (x > slack)
        batch.solids[:] = np.where(batch.active, x * scale_x, 0.0)

    def _most(self, batch: Batch) -> FloatArray:
        """Largest amount of each solid that the totals allow, 0 where it cannot form."""
        room = np.maximum(batch.totals, 0.0)
        open_ph = ~np.isnan(batch.ph_ln)
        if open_ph.any():
            extra = np.maximum(self.added(batch, self._sums(batch)), 0.0)
            room = np.where(open_ph[:, None], room + extra, room)
        if self.carbonate >= 0:
            co2 = ~np.isnan(batch.co2_ln)
            room[co2, self.carbonate] = np.maximum(room[co2, self.carbonate], 1.0)
        most = np.full((room.shape[0], self.solid_ln_k.size), np.inf)
        for component in range(room.shape[1]):
            if component == self.proton:
                continue
            need = self.solid_formation[:, component]
            uses = need > 0
            if uses.any():
                most[:, uses] = np.minimum(most[:, uses], room[:, component, None] / need[uses])
        gone = (~batch.present).astype(float) @ self.solid_absolute.T > 0
        return np.where(gone | ~np.isfinite(most), 0.0, most)

    def _sums(self, batch: Batch) -> FloatArray:
        return self.molalities(batch.ln_activity, batch.ionic_strength) @ self.formation

    def _interior_step(
        self, part: Batch, x: FloatArray, slack: FloatArray, rows: IntArray, pos: BoolArray,
        top: FloatArray, mu: FloatArray, target: float,
    ) -> BoolArray:  # fmt: skip
        xr, sr = x[rows], slack[rows]
        m = self.molalities(part.ln_activity, part.ionic_strength)
        sums, scale = self.amounts(m, xr * top)
        gap = part.totals - sums
        off = -(self.saturation_ln(part.ln_activity) + sr)
        off = np.where(pos, off, 0.0)
        weight = np.where(pos, xr * top / sr, 0.0)
        matrix = self.gram(m, weight)
        pull = np.where(pos, mu[:, None] * top / sr, 0.0) - np.where(pos, xr * top, 0.0)
        rhs = gap - (pull - weight * off) @ self.solid_formation
        miss = np.abs(self.misses(part, sums)) / np.maximum(scale, 1e-300)
        done = (
            (miss.max(axis=1) < 1e-3)
            & (np.abs(off).max(axis=1) < 1e-6)
            & ((xr * sr * pos).max(axis=1) < target)
        )
        self.hold(part, matrix, rhs)
        dl = self._scaled_solve(part, matrix, rhs, scale)
        ds = np.where(pos, off - dl @ self.solid_formation.T, 0.0)
        dx = np.where(pos, (mu[:, None] - xr * sr - xr * ds) / sr, 0.0)
        primal = self._cap(part, m, dl, scale)
        shrink_s = np.where(ds < 0, -0.95 * sr / np.minimum(ds, -1e-300), np.inf).min(axis=1)
        shrink_x = np.where(dx < 0, -0.95 * xr / np.minimum(dx, -1e-300), np.inf).min(axis=1)
        primal = np.minimum(primal, np.minimum(shrink_s, 1.0))
        dual = np.minimum(np.minimum(shrink_x, 1.0), np.maximum(primal * 4.0, 0.1))
        go = (~done)[:, None]
        part.ln_activity += np.where(go, primal[:, None] * dl, 0.0)
        slack[rows] = np.where(go, sr + primal[:, None] * ds, sr)
        x[rows] = np.where(go, np.minimum(xr + dual[:, None] * dx, 1e6), xr)
        strength = np.minimum(0.5 * (m @ self.z2), 2.0)
        blended = np.clip(strength, 0.5 * part.ionic_strength, 2.0 * part.ionic_strength + 1e-9)
        part.ionic_strength = np.where(done, part.ionic_strength, blended)
        return done

    def _cap(self, part: Batch, m: FloatArray, dl: FloatArray, scale: FloatArray) -> FloatArray:
        """Step length so that no species outgrows the water's inventory, (n,)."""
        inventory = np.abs(part.totals).sum(axis=1) + scale.min(axis=1) + 1e-7
        rise = dl @ self.formation_t
        room = np.log(10.0 * inventory)[:, None] - np.log(np.maximum(m, 1e-300))
        room = np.maximum(room, 1.0)
        with np.errstate(divide="ignore"):
            limit = np.where(rise > room, room / np.maximum(rise, 1e-300), 1.0).min(axis=1)
        biggest = np.abs(dl).max(axis=1)
        return np.minimum(np.minimum(limit, 20.0 / np.maximum(biggest, 1e-300)), 1.0)

    def _scaled_solve(
        self, part: Batch, matrix: FloatArray, rhs: FloatArray, scale: FloatArray
    ) -> FloatArray:
        gone = ~part.present
        rhs = np.where(gone, 0.0, rhs)
        diagonal = np.einsum("nii->ni", matrix)
        diagonal[gone] = 1.0
        row = np.where(gone, 1.0, np.maximum(np.abs(matrix).max(axis=2), 1e-300))
        matrix = matrix / row[:, :, None]
        column = np.maximum(np.abs(matrix).max(axis=1), 1e-300)
        matrix /= column[:, None, :]
        count = matrix.shape[1]
        matrix[:, range(count), range(count)] += 1e-15
        return solve_batch(matrix, rhs / row) / column

    # -- step 3: active-set Newton ---------------------------------------------------------------

    def finish(self, batch: Batch) -> None:
        """Exact state by Newton steps with exchange of solids, in place."""
        rows = np.arange(batch.totals.shape[0])
        self._make_independent(batch)
        batch.converged[:] = False
        for turn in range(EXCHANGE_ROUNDS):
            part = batch.take(rows)
            solved = self._newton(part)
            settled = self._exchange(part, solved, turn)
            part.converged = solved & settled
            batch.put(rows, part)
            rows = rows[solved & ~settled]
            if rows.size == 0:
                break

    def _slots(self, active: BoolArray) -> tuple[IntArray, BoolArray]:
        """Indices of active solids padded to the largest count, and which slots are used."""
        width = int(active.sum(axis=1).max(initial=0))
        order = np.argsort(~active, axis=1, kind="stable")[:, :width]
        return order, np.take_along_axis(active, order, axis=1)

    def _newton(self, part: Batch) -> BoolArray:
        slots, used = self._slots(part.active)
        part.solids[:] = np.where(part.active, part.solids, 0.0)
        solved = np.zeros(part.totals.shape[0], dtype=bool)
        rows = np.arange(part.totals.shape[0])
        for turn in range(NEWTON_ROUNDS):
            here = part.take(rows)
            last = turn == NEWTON_ROUNDS - 1
            tolerance = MASS_TOLERANCE_LAST if last else MASS_TOLERANCE
            done = self._newton_step(here, slots[rows], used[rows], tolerance)
            part.put(rows, here)
            solved[rows] = done
            rows = rows[~done]
            if rows.size == 0:
                break
        return solved

    def linearise(self, part: Batch, slots: IntArray, used: BoolArray) -> Linearised:
        """Balances and saturation of the present solids with their Jacobian."""
        m = self.molalities(part.ln_activity, part.ionic_strength)
        sums, scale = self.amounts(m, part.solids)
        _, slope = self.model.screening(part.ionic_strength)
        q = 0.5 * m * self.z2
        gain = (q * self.z2) @ np.ones(q.shape[1])  # q.z^2
        denominator = 1.0 - slope * gain  # F = -z^2 D', and d ln m = A dl + z^2 D' dI
        spread = m * self.z2 * slope[:, None]  # dm/dI at fixed l
        to_strength = q @ self.formation  # dI/dl at fixed I
        strength_gap = 0.5 * (m @ self.z2) - part.ionic_strength
        matrix = self.gram(m)
        side = spread @ self.formation
        matrix += side[:, :, None] * (to_strength / denominator[:, None])[:, None, :]
        rhs = part.totals - sums - side * (strength_gap / denominator)[:, None]
        g = self.solid_formation[slots] * used[:, :, None] * part.present[:, None, :]
        si = np.take_along_axis(self.saturation_ln(part.ln_activity), slots, axis=1)
        return Linearised(
            m=m, sums=sums, scale=scale, matrix=matrix, rhs=rhs, g=g,
            saturation=np.where(used, si, 0.0), to_strength=to_strength,
            denominator=denominator, strength_gap=strength_gap,
        )  # fmt: skip

    def _newton_step(
        self, part: Batch, slots: IntArray, used: BoolArray, tolerance: float
    ) -> BoolArray:
        lin = self.linearise(part, slots, used)
        miss = self.misses(part, lin.sums)
        relative = np.abs(miss) / np.maximum(lin.scale, 1e-300)
        held = self._held_miss(part)
        strength = np.abs(lin.strength_gap) / np.maximum(part.ionic_strength, 1e-12)
        done = (
            (relative.max(axis=1) < tolerance)
            & (np.abs(lin.saturation).max(axis=1, initial=0.0) < SATURATION_TOLERANCE)
            & (strength < 1e-12)
            & (held < 1e-12)
        )
        system = self.assemble(part, lin, used)
        step = solve_equilibrated(system.matrix, system.rhs)
        count = part.totals.shape[1]
        dl, dx = step[:, :count], step[:, count:]
        d_strength = (np.einsum("nc,nc->n", lin.to_strength, dl) + lin.strength_gap) / (
            lin.denominator
        )
        alpha = self._cap(part, lin.m, dl, lin.scale)
        alpha = np.minimum(alpha, 6.0 / np.maximum(np.abs(dl).max(axis=1), 1e-300))
        bad = ~np.isfinite(step).all(axis=1)
        alpha = np.where(done | bad, 0.0, alpha)
        step_l = np.where(np.isfinite(dl), dl, 0.0)
        part.ln_activity += alpha[:, None] * step_l
        moved = np.where(np.isfinite(d_strength), alpha * d_strength, 0.0)
        part.ionic_strength = np.clip(
            part.ionic_strength + moved,
            0.2 * part.ionic_strength,
            5.0 * part.ionic_strength + 1e-9,
        )
        change = np.where(used & np.isfinite(dx), alpha[:, None] * dx, 0.0)
        if change.shape[1]:
            amounts = np.take_along_axis(part.solids, slots, axis=1) + change
            np.put_along_axis(part.solids, slots, np.where(used, amounts, 0.0), axis=1)
        return done

    def _held_miss(self, part: Batch) -> FloatArray:
        miss = np.zeros(part.totals.shape[0])
        ph = ~np.isnan(part.ph_ln)
        if ph.any():
            miss[ph] = np.abs(part.ph_ln[ph] - part.ln_activity[ph, self.proton])
        co2 = ~np.isnan(part.co2_ln)
        if co2.any():
            value = part.ln_activity[co2, self.carbonate] + 2.0 * part.ln_activity[co2, self.proton]
            miss[co2] = np.maximum(miss[co2], np.abs(part.co2_ln[co2] - value))
        return miss

    def assemble(self, part: Batch, lin: Linearised, used: BoolArray) -> Assembled:
        """The bordered system of balances and saturation conditions."""
        n, count = part.totals.shape
        width = used.shape[1]
        matrix = np.zeros((n, count + width, count + width))
        matrix[:, :count, :count] = lin.matrix
        matrix[:, :count, count:] = np.swapaxes(lin.g, 1, 2)
        matrix[:, count:, :count] = lin.g
        rhs = np.zeros((n, count + width))
        rhs[:, :count] = lin.rhs
        rhs[:, count:] = -lin.saturation
        self.hold(part, matrix, rhs)
        gone = ~part.present
        matrix[:, :count][gone] = 0.0
        rhs[:, :count][gone] = 0.0
        diagonal = np.einsum("nii->ni", matrix)
        diagonal[:, :count][gone] = 1.0
        diagonal[:, count:][~used] = 1.0
        return Assembled(matrix, rhs)

    def _make_independent(self, batch: Batch) -> None:
        """Keep a linearly independent subset of the active solids, largest amounts first."""
        if not batch.active.any():
            return
        size = np.where(batch.active, batch.solids, -1.0)
        order = np.argsort(-size, axis=1, kind="stable")
        width = int(batch.active.sum(axis=1).max())
        rows_of = self.independent_columns(batch)
        basis = np.zeros((batch.totals.shape[0], 0, batch.totals.shape[1]))
        take = np.arange(batch.totals.shape[0])
        for k in range(width):
            pick = order[:, k]
            wanted = batch.active[take, pick]
            vector = rows_of[take, pick]
            length = np.maximum(np.linalg.norm(vector, axis=1), 1e-300)
            rest = vector - np.einsum("nk,nkc->nc", np.einsum("nkc,nc->nk", basis, vector), basis)
            rest -= np.einsum("nk,nkc->nc", np.einsum("nkc,nc->nk", basis, rest), basis)
            norm = np.linalg.norm(rest, axis=1)
            good = wanted & (norm > 1e-9 * length)
            batch.active[take, pick] = good
            batch.solids[take, pick] = np.where(good, batch.solids[take, pick], 0.0)
            unit = np.where(good[:, None], rest / np.maximum(norm, 1e-300)[:, None], 0.0)
            basis = np.concatenate([basis, unit[:, None, :]], axis=1)

    def _exchange(self, part: Batch, solved: BoolArray, turn: int) -> BoolArray:
        """Drop the most negative solid, else add the most supersaturated one; True if settled."""
        n = part.totals.shape[0]
        if not self.solid_ln_k.size:
            return np.ones(n, dtype=bool)
        take = np.arange(n)
        negative = np.where(part.active, part.solids, 0.0)
        worst = np.argmin(negative, axis=1)
        drop = solved & (negative[take, worst] < 0.0)
        si = np.where(part.active, -np.inf, self.saturation_ln(part.ln_activity))
        best = np.argmax(si, axis=1)
        add = solved & ~drop & (si[take, best] > 0.5e-8 * LN10)
        part.active[take[drop], worst[drop]] = False
        part.solids[take[drop], worst[drop]] = 0.0
        if add.any():
            self._add(part, take[add], best[add])
        return ~(drop | add)

    def _add(self, part: Batch, rows: IntArray, chosen: IntArray) -> None:
        """Add one solid per row; where it depends on those present, drop the one it displaces."""
        some = part.take(rows)
        free = self.independent_columns(some)
        slots, used = self._slots(some.active)
        basis = np.take_along_axis(free, slots[:, :, None], axis=1) * used[:, :, None]
        vector = free[np.arange(rows.size), chosen]
        weights = np.einsum("nkc,nc->nk", _left_inverse(basis), vector)
        rest = vector - np.einsum("nk,nkc->nc", weights, basis)
        depends = np.linalg.norm(rest, axis=1) < 1e-8 * np.maximum(
            np.linalg.norm(vector, axis=1), 1e-300
        )
        amounts = np.take_along_axis(some.solids, slots, axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(used & (weights > 1e-9), np.maximum(amounts, 0.0) / weights, np.inf)
        for i in np.flatnonzero(depends):
            if ratio.shape[1] and np.isfinite(ratio[i]).any():
                k = int(np.argmin(ratio[i]))
                part.active[rows[i], slots[i, k]] = False
                part.solids[rows[i], slots[i, k]] = 0.0
        part.active[rows, chosen] = True
        part.solids[rows, chosen] = 0.0


@dataclass(slots=True)
class Linearised:
    """Balances and their first derivatives at an iterate."""

    m: FloatArray
    sums: FloatArray
    scale: FloatArray
    matrix: FloatArray
    rhs: FloatArray
    g: FloatArray
    saturation: FloatArray
    to_strength: FloatArray
    denominator: FloatArray
    strength_gap: FloatArray


@dataclass(slots=True)
class Assembled:
    """The bordered linear system of one Newton step."""

    matrix: FloatArray
    rhs: FloatArray


def _left_inverse(basis: FloatArray) -> FloatArray:
    """Rows w with w.v = weights of v on the basis rows, (n, k, components)."""
    return np.swapaxes(np.linalg.pinv(basis), 1, 2)


def solve_batch(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    """Solve a batch of small systems; singular ones are regularised, not raised."""
    try:
        return np.linalg.solve(matrix, rhs[:, :, None])[:, :, 0]
    except np.linalg.LinAlgError:
        count = matrix.shape[1]
        nudged = matrix.copy()
        nudged[:, range(count), range(count)] += 1e-12
        try:
            return np.linalg.solve(nudged, rhs[:, :, None])[:, :, 0]
        except np.linalg.LinAlgError:
            return np.einsum("nij,nj->ni", np.linalg.pinv(nudged), rhs)


def solve_equilibrated(matrix: FloatArray, rhs: FloatArray) -> FloatArray:
    """Solve with rows and columns scaled to unit largest entries, one refinement step."""
    scaled, row, column = equilibrate_matrix(matrix)
    target = rhs / row
    answer = solve_batch(scaled, target)
    rest = target - np.einsum("nij,nj->ni", scaled, answer)
    answer = answer + solve_batch(scaled, rest)
    return answer / column


def equilibrate_matrix(matrix: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Row- and column-scaled copy with the scales."""
    row = np.maximum(np.abs(matrix).max(axis=2), 1e-300)
    scaled = matrix / row[:, :, None]
    column = np.maximum(np.abs(scaled).max(axis=1), 1e-300)
    scaled = scaled / column[:, None, :]
    return scaled, row, column


def new_batch(
    system: System, totals: FloatArray, ph: FloatArray, ln_co2: FloatArray, titrant: FloatArray
) -> Batch:
    """Set up a batch: which components are present and a first guess of their activities."""
    n = totals.shape[0]
    proton = system.index.get("H+", -1)
    present = totals != 0.0
    ph_ln = -LN10 * ph
    held = ~np.isnan(ph_ln)
    present |= held[:, None] & (titrant != 0.0)
    if proton >= 0:
        present[:, proton] = True
    if "CO3-2" in system.index:
        present[:, system.index["CO3-2"]] |= ~np.isnan(ln_co2)
    guess = np.log(np.maximum(np.abs(totals), 1e-12)) - 1.0
    guess = np.where(present, guess, ABSENT_LN)
    if proton >= 0:
        proton_total = totals[:, proton]
        acid = np.log(np.maximum(proton_total, 1e-7))
        base = -14.0 * LN10 - np.log(np.maximum(-proton_total, 1e-7))
        guess[:, proton] = np.where(held, ph_ln, np.where(proton_total > 0, acid, base))
    strength = np.clip(0.5 * np.abs(totals) @ system.component_charges**2, 1e-7, 1.0)
    p = len(system.solids)
    return Batch(
        totals=totals, ph_ln=ph_ln, co2_ln=ln_co2, titrant=titrant, present=present,
        ln_activity=guess, ionic_strength=strength, solids=np.zeros((n, p)),
        active=np.zeros((n, p), dtype=bool), converged=np.zeros(n, dtype=bool),
    )  # fmt: skip


def solve(kernel: Kernel, batch: Batch) -> None:
    """Solve a batch in place: cold start, then slower settings for the rows that failed."""
    # a row that overflows is caught by its certificate, so numpy need not warn of it
    with np.errstate(all="ignore"):
        for begin in range(0, batch.totals.shape[0], CHUNK_STATES):
            rows = np.arange(begin, min(begin + CHUNK_STATES, batch.totals.shape[0]))
            part = batch.take(rows)
            kernel.start(part)
            kernel.interior(part)
            kernel.finish(part)
            batch.put(rows, part)
            _retry(kernel, batch, rows[~part.converged])


RETRIES = (
    {"target": 1e-9, "shrink": 0.3},
    {"target": 1e-4, "shrink": 0.5},
    {"target": 1e-11, "shrink": 0.6},
)


def _retry(kernel: Kernel, batch: Batch, rows: IntArray) -> None:
    for number, settings in enumerate(RETRIES):
        if rows.size == 0:
            return
        part = batch.take(rows)
        fresh = new_batch(kernel.system, part.totals, -part.ph_ln / LN10, part.co2_ln, part.titrant)
        part = replace(fresh, ln_activity=fresh.ln_activity)
        kernel.start(part, rounds=START_ROUNDS * (2 + 4 * number))
        kernel.interior(part, **settings)
        kernel.finish(part)
        batch.put(rows, part)
        rows = rows[~part.converged]


def solve_warm(kernel: Kernel, batch: Batch) -> None:
    """Solve from the iterate already in the batch; rows that fail start cold."""
    with np.errstate(all="ignore"):
        kernel.finish(batch)
    rows = np.flatnonzero(~batch.converged)
    if rows.size:
        part = batch.take(rows)
        cold = new_batch(kernel.system, part.totals, -part.ph_ln / LN10, part.co2_ln, part.titrant)
        solve(kernel, cold)
        batch.put(rows, cold)
