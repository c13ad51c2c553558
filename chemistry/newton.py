"""Newton's method on log activities, amounts of solids and ionic strength, with exchange of solids.

Owns the linearised system (also that of the derivatives) and the exact state; which solids enter
and leave is decided in `chemistry.active_set`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from chemistry.active_set import exchange, keep_independent, slots_of
from chemistry.batch import Batch, BoolArray, FloatArray, IntArray
from chemistry.kernel import Kernel
from chemistry.linear import solve_equilibrated

NEWTON_ROUNDS = 30
EXCHANGE_ROUNDS = 60
MASS_TOLERANCE = 1e-12  # mass balance at which the Newton step stops
MASS_TOLERANCE_LAST = 5e-11  # accepted in the last round, where rounding allows no more
LARGEST_STEP_LN = 6.0  # of a log activity in one step
SATURATION_TOLERANCE = 1e-11  # |SI| (natural log) of present solids at which it stops


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


def finish(
    kernel: Kernel, batch: Batch, *, newton_rounds: int = NEWTON_ROUNDS,
    exchange_rounds: int = EXCHANGE_ROUNDS,
) -> None:  # fmt: skip
    """Exact state by Newton steps with exchange of solids, in place."""
    rows = np.arange(batch.totals.shape[0])
    keep_independent(kernel, batch)
    batch.converged[:] = False
    for _ in range(exchange_rounds):
        part = batch.take(rows)
        solved = _newton(kernel, part, newton_rounds)
        settled = exchange(kernel, part, solved)
        part.converged = solved & settled
        batch.put(rows, part)
        rows = rows[solved & ~settled]
        if rows.size == 0:
            break


def _newton(kernel: Kernel, part: Batch, rounds: int) -> BoolArray:
    slots, used = slots_of(part.active)
    part.solids[:] = np.where(part.active, part.solids, 0.0)
    solved = np.zeros(part.totals.shape[0], dtype=bool)
    rows = np.arange(part.totals.shape[0])
    for turn in range(rounds):
        here = part.take(rows)
        last = turn == rounds - 1
        tolerance = MASS_TOLERANCE_LAST if last else MASS_TOLERANCE
        done = _newton_step(kernel, here, slots[rows], used[rows], tolerance)
        part.put(rows, here)
        solved[rows] = done
        rows = rows[~done]
        if rows.size == 0:
            break
    return solved


def linearise(kernel: Kernel, part: Batch, slots: IntArray, used: BoolArray) -> Linearised:
    """Balances and saturation of the present solids with their Jacobian."""
    m = kernel.molalities(part.ln_activity, part.ionic_strength)
    sums, scale = kernel.amounts(m, part.solids)
    _, slope = kernel.model.screening(part.ionic_strength)
    q = 0.5 * m * kernel.z2
    gain = (q * kernel.z2) @ np.ones(q.shape[1])  # q.z^2
    denominator = 1.0 - slope * gain  # F = -z^2 D', and d ln m = A dl + z^2 D' dI
    spread = m * kernel.z2 * slope[:, None]  # dm/dI at fixed l
    to_strength = q @ kernel.formation  # dI/dl at fixed I
    strength_gap = 0.5 * (m @ kernel.z2) - part.ionic_strength
    matrix = kernel.gram(m)
    side = spread @ kernel.formation
    matrix += side[:, :, None] * (to_strength / denominator[:, None])[:, None, :]
    rhs = part.totals - sums - side * (strength_gap / denominator)[:, None]
    g = kernel.solid_formation[slots] * used[:, :, None] * part.present[:, None, :]
    si = np.take_along_axis(kernel.saturation_ln(part.ln_activity), slots, axis=1)
    return Linearised(
        m=m, sums=sums, scale=scale, matrix=matrix, rhs=rhs, g=g,
        saturation=np.where(used, si, 0.0), to_strength=to_strength,
        denominator=denominator, strength_gap=strength_gap,
    )  # fmt: skip


def _newton_step(
    kernel: Kernel, part: Batch, slots: IntArray, used: BoolArray, tolerance: float
) -> BoolArray:
    lin = linearise(kernel, part, slots, used)
    done = _is_exact(kernel, part, lin, tolerance)
    system = assemble(kernel, part, lin, used)
    step = solve_equilibrated(system.matrix, system.rhs)
    count = part.totals.shape[1]
    dl, dx = step[:, :count], step[:, count:]
    d_strength = (np.einsum("nc,nc->n", lin.to_strength, dl) + lin.strength_gap) / lin.denominator
    alpha = kernel.step_cap(part, lin.m, dl, lin.scale)
    alpha = np.minimum(alpha, LARGEST_STEP_LN / np.maximum(np.abs(dl).max(axis=1), 1e-300))
    bad = ~np.isfinite(step).all(axis=1)
    alpha = np.where(done | bad, 0.0, alpha)
    part.ln_activity += alpha[:, None] * np.where(np.isfinite(dl), dl, 0.0)
    moved = np.where(np.isfinite(d_strength), alpha * d_strength, 0.0)
    part.ionic_strength = np.clip(
        part.ionic_strength + moved, 0.2 * part.ionic_strength, 5.0 * part.ionic_strength + 1e-9
    )
    change = np.where(used & np.isfinite(dx), alpha[:, None] * dx, 0.0)
    if change.shape[1]:
        amounts = np.take_along_axis(part.solids, slots, axis=1) + change
        np.put_along_axis(part.solids, slots, np.where(used, amounts, 0.0), axis=1)
    return done


def _is_exact(kernel: Kernel, part: Batch, lin: Linearised, tolerance: float) -> BoolArray:
    relative = np.abs(kernel.misses(part, lin.sums)) / np.maximum(lin.scale, 1e-300)
    strength = np.abs(lin.strength_gap) / np.maximum(part.ionic_strength, 1e-12)
    exact: BoolArray = (
        (relative.max(axis=1) < tolerance)
        & (np.abs(lin.saturation).max(axis=1, initial=0.0) < SATURATION_TOLERANCE)
        & (strength < 1e-12)
        & (kernel.held_misses(part) < 1e-12)
    )
    return exact


def assemble(kernel: Kernel, part: Batch, lin: Linearised, used: BoolArray) -> Assembled:
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
    kernel.hold(part, matrix, rhs)
    gone = ~part.present
    matrix[:, :count][gone] = 0.0
    rhs[:, :count][gone] = 0.0
    diagonal = np.einsum("nii->ni", matrix)
    diagonal[:, :count][gone] = 1.0
    diagonal[:, count:][~used] = 1.0
    return Assembled(matrix, rhs)
