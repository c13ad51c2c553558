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
from chemistry.linear import solve_batch, solve_equilibrated

NEWTON_ROUNDS = 30
EXCHANGE_ROUNDS = 60
MASS_TOLERANCE = 1e-12  # mass balance at which the Newton step stops
MASS_TOLERANCE_LAST = 5e-11  # accepted in the last round, where rounding allows no more
LARGEST_STEP_LN = 6.0  # of a log activity in one step
SURROUNDINGS_TOLERANCE = 1e-12  # of the ionic strength, others of the largest of them
SATURATION_TOLERANCE = 1e-11  # |SI| (natural log) of present solids at which it stops


@dataclass(slots=True)
class Linearised:
    """Balances and their first derivatives at an iterate.

    ``columns`` are the surroundings that move with Newton; ``follow`` (n, columns, components) is
    their change with the log activities and ``follow_gap`` what they are off by themselves;
    ``off`` (n, width) is by how much the species contradict every surrounding.
    """

    m: FloatArray
    sums: FloatArray
    scale: FloatArray
    matrix: FloatArray
    rhs: FloatArray
    stoichiometry: FloatArray
    g: FloatArray
    saturation: FloatArray
    miss: FloatArray
    columns: IntArray
    follow: FloatArray
    follow_gap: FloatArray
    off: FloatArray


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


def linearise(
    kernel: Kernel, part: Batch, slots: IntArray, used: BoolArray, *, columns: IntArray
) -> Linearised:
    """Balances and saturation of the present solids with their Jacobian.

    Notes
    -----
    With ``y = m L`` and ``d ln m = A dl + O dy`` the surroundings follow the log activities by
    ``(1 - L'MO) dy = (m L - y) + L'MA dl``, which is eliminated.
    """
    y = part.surroundings
    m = kernel.molalities(part.ln_activity, y)
    sums, scale = kernel.amounts(m, part.solids)
    seen = kernel.surroundings(m)
    off = seen - y
    coupled = kernel.coupling.at(m, y, seen, columns)
    known = np.concatenate([coupled.by_activity, off[:, columns, None]], axis=2)
    alone = columns.size == 1
    followed = known / coupled.held_back if alone else solve_batch(coupled.held_back, known)
    follow, follow_gap = followed[:, :, :-1], followed[:, :, -1]
    matrix = kernel.gram(m) + np.swapaxes(coupled.side, 1, 2) @ follow
    rhs = part.totals - sums - (follow_gap[:, None, :] @ coupled.side)[:, 0]
    g = kernel.solid_formation[slots]
    si = np.take_along_axis(kernel.saturation_ln(part.ln_activity, y), slots, axis=1)
    saturation = si
    if coupled.water is not None:
        water, moles = coupled.water[:, None, :], kernel.solid_water[slots]
        g = g + moles[:, :, None] * (water @ follow)
        saturation = si + moles * (water @ follow_gap[:, :, None])[:, 0]
    stoichiometry = kernel.solid_formation[slots] * used[:, :, None] * part.present[:, None, :]
    return Linearised(
        m=m, sums=sums, scale=scale, matrix=matrix, rhs=rhs, stoichiometry=stoichiometry,
        g=g * used[:, :, None] * part.present[:, None, :],
        saturation=np.where(used, saturation, 0.0), miss=np.where(used, si, 0.0),
        columns=columns, follow=follow, follow_gap=follow_gap, off=off,
    )  # fmt: skip


def _newton_step(
    kernel: Kernel, part: Batch, slots: IntArray, used: BoolArray, tolerance: float
) -> BoolArray:
    columns = kernel.model.leading(part.surroundings)
    lin = linearise(kernel, part, slots, used, columns=columns)
    done = _is_exact(kernel, part, lin, tolerance)
    system = assemble(kernel, part, lin, used)
    step = solve_equilibrated(system.matrix, system.rhs)
    count = part.totals.shape[1]
    dl, dx = step[:, :count], step[:, count:]
    dy = np.einsum("nyc,nc->ny", lin.follow, dl) + lin.follow_gap
    alpha = kernel.step_cap(part, lin.m, dl, lin.scale)
    alpha = np.minimum(alpha, LARGEST_STEP_LN / np.maximum(np.abs(dl).max(axis=1), 1e-300))
    bad = ~np.isfinite(step).all(axis=1)
    alpha = np.where(done | bad, 0.0, alpha)
    part.ln_activity += alpha[:, None] * np.where(np.isfinite(dl), dl, 0.0)
    _move_surroundings(part, lin, alpha, dy)
    change = np.where(used & np.isfinite(dx), alpha[:, None] * dx, 0.0)
    if change.shape[1]:
        amounts = np.take_along_axis(part.solids, slots, axis=1) + change
        np.put_along_axis(part.solids, slots, np.where(used, amounts, 0.0), axis=1)
    return done


def _move_surroundings(part: Batch, lin: Linearised, alpha: FloatArray, dy: FloatArray) -> None:
    """Move the surroundings of Newton's matrix with the step, the others to the species, in place.

    Rows with a step of 0 keep theirs.
    """
    before, columns = part.surroundings, lin.columns
    seen = before + np.where((alpha > 0.0)[:, None], lin.off, 0.0)
    seen[:, columns] = before[:, columns] + np.where(np.isfinite(dy), alpha[:, None] * dy, 0.0)
    part.surroundings = np.clip(seen, 0.2 * before, 5.0 * before + 1e-9)


def _is_exact(kernel: Kernel, part: Batch, lin: Linearised, tolerance: float) -> BoolArray:
    relative = np.abs(kernel.misses(part, lin.sums)) / np.maximum(lin.scale, 1e-300)
    strength = np.abs(lin.off[:, 0]) / np.maximum(part.surroundings[:, 0], 1e-12)
    most = np.maximum(part.surroundings.max(axis=1), 1e-12)
    off = np.maximum(strength, np.abs(lin.off).max(axis=1) / most)
    exact: BoolArray = (
        (relative.max(axis=1) < tolerance)
        & (np.abs(lin.miss).max(axis=1, initial=0.0) < SATURATION_TOLERANCE)
        & (off < SURROUNDINGS_TOLERANCE)
        & (kernel.held_misses(part) < 1e-12)
    )
    return exact


def assemble(kernel: Kernel, part: Batch, lin: Linearised, used: BoolArray) -> Assembled:
    """The bordered system of balances and saturation conditions."""
    n, count = part.totals.shape
    width = used.shape[1]
    matrix = np.zeros((n, count + width, count + width))
    matrix[:, :count, :count] = lin.matrix
    matrix[:, :count, count:] = np.swapaxes(lin.stoichiometry, 1, 2)
    matrix[:, count:, :count] = lin.g
    rhs = np.zeros((n, count + width))
    rhs[:, :count] = lin.rhs
    rhs[:, count:] = -lin.saturation
    kernel.hold(part, matrix, rhs)
    _hold_through_water(kernel, part, lin, matrix, rhs)
    gone = ~part.present
    matrix[:, :count][gone] = 0.0
    rhs[:, :count][gone] = 0.0
    diagonal = np.einsum("nii->ni", matrix)
    diagonal[:, :count][gone] = 1.0
    diagonal[:, count:][~used] = 1.0
    return Assembled(matrix, rhs)


def _hold_through_water(
    kernel: Kernel, part: Batch, lin: Linearised, matrix: FloatArray, rhs: FloatArray
) -> None:
    """Let a held CO2 pressure see that the activity of water moves too, in place."""
    opened = np.flatnonzero(~np.isnan(part.co2_ln))
    if not opened.size or kernel.model.name != "sit":
        return
    c, count = kernel.carbonate, part.totals.shape[1]
    water = kernel.model.ln_water_slope(part.surroundings[opened])[:, lin.columns]
    follow, gap = lin.follow[opened], lin.follow_gap[opened]
    matrix[opened, c, :count] += kernel.co2_water * np.einsum("ny,nyc->nc", water, follow)
    rhs[opened, c] -= kernel.co2_water * np.einsum("ny,ny->n", water, gap)
