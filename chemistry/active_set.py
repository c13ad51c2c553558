"""Which solids are present: slots for them, independence, and their exchange.

Solids of one metal become linearly dependent (hydroxide, carbonate, basic carbonate), so a solid
that depends on those present enters by displacing one of them.
"""

from __future__ import annotations

import numpy as np

from chemistry.batch import Batch, BoolArray, IntArray
from chemistry.kernel import Kernel
from chemistry.linear import left_inverse
from chemistry.system import LN10


def slots_of(active: BoolArray) -> tuple[IntArray, BoolArray]:
    """Indices of active solids padded to the largest count, and which slots are used."""
    width = int(active.sum(axis=1).max(initial=0))
    order = np.argsort(~active, axis=1, kind="stable")[:, :width]
    return order, np.take_along_axis(active, order, axis=1)


def keep_independent(kernel: Kernel, batch: Batch) -> None:
    """Keep a linearly independent subset of the active solids, largest amounts first."""
    if not batch.active.any():
        return
    size = np.where(batch.active, batch.solids, -1.0)
    order = np.argsort(-size, axis=1, kind="stable")
    width = int(batch.active.sum(axis=1).max())
    rows_of = kernel.independent_columns(batch)
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


def exchange(kernel: Kernel, part: Batch, solved: BoolArray) -> BoolArray:
    """Drop the most negative solid, else add the most supersaturated one; True if settled."""
    n = part.totals.shape[0]
    if not kernel.solid_ln_k.size:
        return np.ones(n, dtype=bool)
    take = np.arange(n)
    negative = np.where(part.active, part.solids, 0.0)
    worst = np.argmin(negative, axis=1)
    drop = solved & (negative[take, worst] < 0.0)
    si = np.where(part.active, -np.inf, kernel.saturation_ln(part.ln_activity, part.surroundings))
    best = np.argmax(si, axis=1)
    add = solved & ~drop & (si[take, best] > 0.5e-8 * LN10)
    part.active[take[drop], worst[drop]] = False
    part.solids[take[drop], worst[drop]] = 0.0
    if add.any():
        _add(kernel, part, take[add], best[add])
    settled: BoolArray = ~(drop | add)
    return settled


def _add(kernel: Kernel, part: Batch, rows: IntArray, chosen: IntArray) -> None:
    """Add one solid per row; where it depends on those present, drop the one it displaces."""
    some = part.take(rows)
    free = kernel.independent_columns(some)
    slots, used = slots_of(some.active)
    basis = np.take_along_axis(free, slots[:, :, None], axis=1) * used[:, :, None]
    vector = free[np.arange(rows.size), chosen]
    weights = np.einsum("nkc,nc->nk", left_inverse(basis), vector)
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
