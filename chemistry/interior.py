"""A start for every water: continued fractions, then a primal-dual interior-point method.

Owns finding which solids form, to a loose tolerance; `chemistry.newton` makes the state exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from chemistry.batch import Batch, BoolArray, FloatArray, IntArray, proton_coupling
from chemistry.kernel import Kernel
from chemistry.linear import solve_batch

START_ROUNDS = 40
INTERIOR_ROUNDS = 90


def start(kernel: Kernel, batch: Batch, rounds: int = START_ROUNDS) -> None:
    """Damped continued fractions on the balances without solids, in place."""
    totals = np.where(batch.present, batch.totals, 0.0)
    held = np.zeros_like(batch.present)
    ph = ~np.isnan(batch.ph_ln)
    if kernel.proton >= 0:
        batch.ln_activity[ph, kernel.proton] = batch.ph_ln[ph]
        held[ph, kernel.proton] = True
    move = batch.present & ~held
    dosed = np.flatnonzero(ph & (np.count_nonzero(batch.titrant, axis=1) > 1))
    for turn in range(rounds):
        m = kernel.molalities(batch.ln_activity, batch.surroundings)
        if dosed.size:
            totals[dosed] = _with_titrant(kernel, batch.take(dosed), m[dosed])
        gain = m @ kernel.positive + np.maximum(-totals, 0.0)
        loss = m @ kernel.negative + np.maximum(totals, 0.0)
        ratio = np.log(np.maximum(loss, 1e-300) / np.maximum(gain, 1e-300)) / kernel.largest
        _open_to_gas(kernel, batch, m, ratio)
        if dosed.size:
            _drive_by_protons(kernel, batch, ratio, dosed)
        small = np.exp(-np.abs(ratio))
        theta = 0.9 - 0.5 * (1.0 - small) * (turn % 3 != 0)
        step = np.where(move, theta * np.clip(ratio, -30.0, 30.0), 0.0)
        batch.ln_activity += step
        _hold_start(kernel, batch)
        seen = np.minimum(kernel.surroundings(m), 5.0)
        batch.surroundings = 0.5 * (batch.surroundings + seen)
        if np.max(np.abs(np.where(move, ratio, 0.0)), initial=0.0) < 0.02:
            break


def _open_to_gas(kernel: Kernel, batch: Batch, m: FloatArray, ratio: FloatArray) -> None:
    """Where a CO2 pressure is held, protons less twice the carbonate balance, in place."""
    open_rows = np.flatnonzero(~np.isnan(batch.co2_ln))
    if not open_rows.size:
        return
    h, c = kernel.proton, kernel.carbonate
    count = kernel.formation[:, h] - 2.0 * kernel.formation[:, c]
    total = batch.totals[open_rows, h] - 2.0 * batch.totals[open_rows, c]
    gain = m[open_rows] @ np.maximum(count, 0.0) + np.maximum(-total, 0.0)
    loss = m[open_rows] @ np.maximum(-count, 0.0) + np.maximum(total, 0.0)
    change = np.log(np.maximum(loss, 1e-300) / np.maximum(gain, 1e-300))
    ratio[open_rows, h] = change / max(float(np.abs(count).max()), 1.0)
    ratio[open_rows, c] = 0.0


def _with_titrant(kernel: Kernel, part: Batch, m: FloatArray) -> FloatArray:
    """Totals with the titrant that the species so far call for; other components stay positive."""
    filled = part.totals + kernel.added(part, m @ kernel.formation)
    least = np.where(part.present, 1e-3 * part.totals + 1e-12, 0.0)
    filled = np.maximum(filled, least)
    filled[:, kernel.proton] = part.totals[:, kernel.proton]
    return np.asarray(filled, dtype=float)


def _drive_by_protons(kernel: Kernel, batch: Batch, ratio: FloatArray, dosed: IntArray) -> None:
    """Let the proton balance move the pivot of a titrant that carries no protons, in place."""
    pivot = batch.pivot[dosed]
    rows, pivot = dosed[pivot != kernel.proton], pivot[pivot != kernel.proton]
    if rows.size:
        sign = np.sign(proton_coupling(kernel.system))[pivot]
        ratio[rows, pivot] = np.clip(sign * ratio[rows, kernel.proton], -2.0, 2.0)


def _hold_start(kernel: Kernel, batch: Batch) -> None:
    co2 = ~np.isnan(batch.co2_ln)
    if co2.any():
        h, c = kernel.proton, kernel.carbonate
        batch.ln_activity[co2, c] = batch.co2_ln[co2] - 2.0 * batch.ln_activity[co2, h]


@dataclass(slots=True)
class Barrier:
    """Amounts of solids scaled by the most that could form, and their slacks, (n, solids)."""

    amount: FloatArray
    slack: FloatArray
    most: FloatArray
    possible: BoolArray

    def take(self, rows: IntArray) -> Barrier:
        """Return the barrier of some rows (copies)."""
        return Barrier(self.amount[rows], self.slack[rows], self.most[rows], self.possible[rows])

    def put(self, rows: IntArray, part: Barrier) -> None:
        """Write the iterate of a part back into these rows."""
        self.amount[rows], self.slack[rows] = part.amount, part.slack


def interior(kernel: Kernel, batch: Batch, *, target: float = 1e-6, shrink: float = 0.15) -> None:
    """Primal-dual interior point with slacks on the solids, in place; stops loose.

    ``active`` is set to the solids whose scaled amount exceeds their slack.
    """
    if not kernel.solid_ln_k.size:
        batch.active[:] = False
        return
    barrier = _barrier(kernel, batch)
    rows = np.arange(batch.totals.shape[0])
    for _ in range(INTERIOR_ROUNDS):
        part, edge = batch.take(rows), barrier.take(rows)
        gap = np.sum(edge.amount * edge.slack * edge.possible, axis=1)
        mu = np.maximum(shrink * gap / np.maximum(edge.possible.sum(1), 1), 0.3 * target)
        done = _interior_step(kernel, part, edge, mu, target)
        batch.put(rows, part)
        barrier.put(rows, edge)
        rows = rows[~done]
        if rows.size == 0:
            break
    batch.active[:] = barrier.possible & (barrier.amount > barrier.slack)
    batch.solids[:] = np.where(batch.active, barrier.amount * barrier.most, 0.0)


def _barrier(kernel: Kernel, batch: Batch) -> Barrier:
    most = _most(kernel, batch)
    possible = most > 0.0
    saturation = kernel.saturation_ln(batch.ln_activity, batch.surroundings)
    slack = np.where(possible, np.maximum(-saturation, 1.0), 1.0)
    amount = np.where(possible, np.where(saturation > 0, 0.3, 0.05 / slack), 0.0)
    return Barrier(amount, slack, np.where(possible, most, 1.0), possible)


def _most(kernel: Kernel, batch: Batch) -> FloatArray:
    """Largest amount of each solid that the totals allow, 0 where it cannot form."""
    room = np.maximum(batch.totals, 0.0)
    open_ph = ~np.isnan(batch.ph_ln)
    if open_ph.any():
        extra = np.maximum(kernel.added(batch, _sums(kernel, batch)), 0.0)
        room = np.where(open_ph[:, None], room + extra, room)
    if kernel.carbonate >= 0:
        co2 = ~np.isnan(batch.co2_ln)
        room[co2, kernel.carbonate] = np.maximum(room[co2, kernel.carbonate], 1.0)
    most = np.full((room.shape[0], kernel.solid_ln_k.size), np.inf)
    for component in range(room.shape[1]):
        if component == kernel.proton:
            continue
        need = kernel.solid_formation[:, component]
        uses = need > 0
        if uses.any():
            most[:, uses] = np.minimum(most[:, uses], room[:, component, None] / need[uses])
    gone = (~batch.present).astype(float) @ kernel.solid_absolute.T > 0
    return np.where(gone | ~np.isfinite(most), 0.0, most)


def _sums(kernel: Kernel, batch: Batch) -> FloatArray:
    return kernel.molalities(batch.ln_activity, batch.surroundings) @ kernel.formation


def _interior_step(
    kernel: Kernel, part: Batch, edge: Barrier, mu: FloatArray, target: float
) -> BoolArray:
    x, s, pos = edge.amount, edge.slack, edge.possible
    ln_m = kernel.ln_molalities(part.ln_activity, part.surroundings)
    m = np.exp(ln_m)
    sums, scale = kernel.amounts(m, x * edge.most)
    off = np.where(pos, -(kernel.saturation_ln(part.ln_activity, part.surroundings) + s), 0.0)
    weight = np.where(pos, x * edge.most / s, 0.0)
    matrix = kernel.gram(m, weight)
    pull = np.where(pos, (mu[:, None] / s - x) * edge.most, 0.0)
    rhs = part.totals - sums - (pull - weight * off) @ kernel.solid_formation
    miss = np.abs(kernel.misses(part, sums)) / np.maximum(scale, 1e-300)
    done: BoolArray = (
        (miss.max(axis=1) < 1e-3)
        & (np.abs(off).max(axis=1) < 1e-6)
        & ((x * s * pos).max(axis=1) < target)
    )
    kernel.hold(part, matrix, rhs)
    dl = _scaled_solve(part, matrix, rhs)
    ds = np.where(pos, off - dl @ kernel.solid_formation.T, 0.0)
    dx = np.where(pos, (mu[:, None] - x * s - x * ds) / s, 0.0)
    primal = np.minimum(kernel.step_cap(part, ln_m, dl, scale), _to_boundary(s, ds))
    dual = np.minimum(_to_boundary(x, dx), np.maximum(primal * 4.0, 0.1))
    go = (~done)[:, None]
    part.ln_activity += np.where(go, primal[:, None] * dl, 0.0)
    edge.slack = np.where(go, s + primal[:, None] * ds, s)
    edge.amount = np.where(go, np.minimum(x + dual[:, None] * dx, 1e6), x)
    seen, before = np.minimum(kernel.surroundings(m), 5.0), part.surroundings
    blended = np.clip(seen, 0.5 * before, 2.0 * before + 1e-9)
    part.surroundings = np.where(done[:, None], before, blended)
    return done


def _to_boundary(value: FloatArray, step: FloatArray) -> FloatArray:
    """Largest part of a step, 1 at most, that keeps positive values positive, (n,)."""
    room = np.where(step < 0, -0.95 * value / np.minimum(step, -1e-300), np.inf)
    part: FloatArray = np.minimum(room.min(axis=1), 1.0)
    return part


def _scaled_solve(part: Batch, matrix: FloatArray, rhs: FloatArray) -> FloatArray:
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
    step: FloatArray = solve_batch(matrix, rhs / row) / column
    return step
