"""Newton's method on log activities, amounts of solids and ionic strength, with exchange of solids.

Owns the steps to the exact state; the linear system of a step is `chemistry.linearised`, which
solids enter and leave is decided in `chemistry.active_set`.
"""

from __future__ import annotations

import numpy as np

from chemistry.active_set import exchange, keep_independent
from chemistry.batch import Batch, BoolArray, FloatArray
from chemistry.held import Held
from chemistry.kernel import Kernel
from chemistry.linear import solve_equilibrated
from chemistry.linearised import Border, Linearised, assemble, linearise

NEWTON_ROUNDS = 30
EXCHANGE_ROUNDS = 60
MASS_TOLERANCE = 1e-12  # mass balance at which the Newton step stops
MASS_TOLERANCE_LAST = 5e-11  # accepted in the last round, where rounding allows no more
LARGEST_STEP_LN = 6.0  # of a log activity in one step
SURROUNDINGS_TOLERANCE = 1e-12  # of the ionic strength, others of the largest of them
SATURATION_TOLERANCE = 1e-11  # |SI| (natural log) of present solids at which it stops
STUCK = 1_000_000  # turns of a row that cannot move
# Solids are exchanged before a water is exact where its balances and saturation are met to this and
# an amount is negative or a solid supersaturated beyond doubt; so many times at most.
NEARLY, NEARLY_SATURATED, EARLY_EXCHANGES = 1e-3, 1e-2, 12
REFINED_AFTER = 8  # steps without refining the linear solution; a slow water gets it


class _Work:
    """The rows of a batch still being solved, with what their steps share.

    Rows leave as they are finished; each counts its own Newton steps since its solids last changed
    and its exchanges, so that no water waits for another's exchange. ``looked`` tells which were
    near since, so that their solids need no second look before they are exact.
    """

    def __init__(self, kernel: Kernel, batch: Batch) -> None:
        self.kernel = kernel
        self.rows = np.arange(batch.totals.shape[0])
        self.part = batch.take(self.rows)
        self.part.solids[:] = np.where(self.part.active, self.part.solids, 0.0)
        self.held = Held.of(kernel, self.part)
        self.turns = np.zeros(self.rows.size, dtype=np.int64)
        self.exchanges = np.zeros(self.rows.size, dtype=np.int64)
        self.looked = np.zeros(self.rows.size, dtype=bool)
        self.border = Border.of(kernel, self.part)

    def keep(self, kept: BoolArray) -> None:
        """Go on with these rows alone."""
        self.rows, self.part = self.rows[kept], self.part.take(kept)
        self.turns, self.exchanges = self.turns[kept], self.exchanges[kept]
        self.looked = self.looked[kept]
        self.held = self.held.take(self.kernel, self.part, kept)


def finish(
    kernel: Kernel, batch: Batch, *, newton_rounds: int = NEWTON_ROUNDS,
    exchange_rounds: int = EXCHANGE_ROUNDS,
) -> None:  # fmt: skip
    """Exact state by Newton steps with exchange of solids, in place."""
    count = batch.totals.shape[0]
    for begin in range(0, count, kernel.rows_at_once):
        rows = np.arange(begin, min(begin + kernel.rows_at_once, count))
        part = batch.take(rows)
        _finish(kernel, part, newton_rounds, exchange_rounds)
        batch.put(rows, part)


def _finish(kernel: Kernel, batch: Batch, newton_rounds: int, exchange_rounds: int) -> None:
    keep_independent(kernel, batch)
    batch.converged[:] = False
    work = _Work(kernel, batch)
    while work.rows.size:
        last = work.turns >= newton_rounds - 1
        exact, near = _newton_step(work, np.where(last, MASS_TOLERANCE_LAST, MASS_TOLERANCE))
        work.turns += 1
        over = last & ~exact
        near &= (work.exchanges < EARLY_EXCHANGES) & ~over & ~work.looked
        if not (exact | near | over).any():
            continue
        work.looked |= near
        part = work.part
        unsettled = exchange(kernel, part, exact, near)
        part.converged = exact & ~unsettled
        work.exchanges += unsettled
        work.turns[unsettled], work.looked[unsettled] = 0, False
        over |= part.converged | (unsettled & (work.exchanges >= exchange_rounds))
        if over.any():
            batch.put(work.rows[over], part.take(over))
            work.keep(~over)
        if unsettled.any():
            work.border = Border.of(kernel, work.part)
        elif over.any():
            work.border = work.border.keep(~over)


def _newton_step(work: _Work, tolerance: FloatArray) -> tuple[BoolArray, BoolArray]:
    """Tell which rows are exact and which near, and move those not exact by one step, in place."""
    kernel, part, border = work.kernel, work.part, work.border
    columns = kernel.model.leading(part.surroundings)
    lin = linearise(kernel, part, border, columns=columns)
    exact, near = _is_exact(work, lin, tolerance)
    if exact.all():
        return exact, near
    system = assemble(kernel, part, lin, border, held=work.held)
    refined = bool(work.turns.max() >= REFINED_AFTER)
    step = solve_equilibrated(system.matrix, system.rhs, refined=refined)
    count = part.totals.shape[1]
    good = ~exact & np.isfinite(step).all(axis=1)
    if not good.all():
        work.turns[~exact & ~good] = STUCK
        step = np.where(np.isfinite(step), step, 0.0)
    dl, dx = step[:, :count], step[:, count:]
    dy = (lin.follow @ dl[:, :, None])[:, :, 0] + lin.follow_gap
    alpha = kernel.step_cap(part, lin.ln_m, dl, lin.scale)
    alpha = np.minimum(alpha, LARGEST_STEP_LN / np.maximum(np.abs(dl).max(axis=1), 1e-300))
    alpha = np.where(good, alpha, 0.0)
    part.ln_activity += alpha[:, None] * dl
    _move_surroundings(part, lin, alpha, dy)
    if dx.shape[1]:
        change = np.where(border.used, alpha[:, None] * dx, 0.0)
        part.solids[border.take, border.slots] += change
    return exact, near & (alpha > 0.5)


def _move_surroundings(part: Batch, lin: Linearised, alpha: FloatArray, dy: FloatArray) -> None:
    """Move the surroundings of Newton's matrix with the step, the others to the species, in place.

    Rows with a step of 0 keep theirs.
    """
    before, columns = part.surroundings, lin.columns
    moved = np.where(np.isfinite(dy), alpha[:, None] * dy, 0.0)
    if columns.size == before.shape[1]:
        seen = before + moved
    else:
        seen = before + np.where((alpha > 0.0)[:, None], lin.off, 0.0)
        seen[:, columns] = before[:, columns] + moved
    part.surroundings = np.minimum(np.maximum(seen, 0.2 * before), 5.0 * before + 1e-9)


def _is_exact(work: _Work, lin: Linearised, tolerance: FloatArray) -> tuple[BoolArray, BoolArray]:
    """Which rows meet the tolerances, and which of the others are near."""
    part, off = work.part, np.abs(lin.off)
    miss = np.abs(work.held.misses(work.kernel, part, lin.sums))
    relative = (miss / np.maximum(lin.scale, 1e-300)).max(axis=1)
    near: BoolArray = relative < NEARLY
    if not near.any():
        return near, near
    strength = off[:, 0] / np.maximum(part.surroundings[:, 0], 1e-12)
    if off.shape[1] > 1:
        most = np.maximum(part.surroundings.max(axis=1), 1e-12)
        strength = np.maximum(strength, off.max(axis=1) / most)
    exact = (relative < tolerance) & (strength < SURROUNDINGS_TOLERANCE)
    if lin.miss.shape[1]:
        saturation = np.abs(lin.miss).max(axis=1)
        exact &= saturation < SATURATION_TOLERANCE
        near &= saturation < NEARLY_SATURATED
    held = work.held.held_misses(work.kernel, part)
    if held is not None:
        exact &= held < 1e-12
        near &= held < NEARLY_SATURATED
    return exact, near & ~exact
