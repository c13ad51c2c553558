"""Which solids are present: slots for them, independence, and their exchange.

Solids of one metal become linearly dependent (hydroxide, carbonate, basic carbonate), so a solid
that depends on those present enters by displacing one of them.
"""

from __future__ import annotations

import numpy as np

from chemistry.batch import Batch, BoolArray, FloatArray, IntArray
from chemistry.kernel import Kernel
from chemistry.linear import left_inverse
from chemistry.system import LN10

SETTLED_ABOVE = 0.5e-8 * LN10  # saturation index (natural log) above which a solid forms
CLEARLY_ABOVE = 0.05  # the same of a water that is nearly exact
CLEARLY_NEGATIVE = 1e-2  # share of a solid's largest amount, likewise
DEPENDENT = 1e-12  # smallest eigenvalue of the Gram matrix of independent stoichiometries


def slots_of(active: BoolArray) -> tuple[IntArray, BoolArray]:
    """Indices of active solids padded to the largest count, and which slots are used."""
    count = active.sum(axis=1)
    width = int(count.max(initial=0))
    order = np.argsort(~active, axis=1, kind="stable")[:, :width]
    return order, np.arange(width) < count[:, None]


def keep_independent(kernel: Kernel, batch: Batch) -> None:
    """Keep a linearly independent subset of the active solids whose amounts stay positive.

    Where solids depend on each other, amounts move along the reaction between them, towards the
    supersaturated ones, until one is used up. Ties of the constants (a reaction among four solids
    that runs neither way) need this too: dropping any one of them may leave another negative.
    """
    if not batch.active.any():
        return
    vectors = kernel.independent_columns(batch)
    saturation = kernel.saturation_ln(batch.ln_activity, batch.surroundings)
    for row in np.flatnonzero(_are_dependent(batch, vectors)):
        chosen = np.flatnonzero(batch.active[row])
        amounts = np.maximum(batch.solids[row, chosen], 0.0)
        kept, left = _used_up(vectors[row, chosen], amounts, saturation[row, chosen])
        batch.active[row] = False
        batch.active[row, chosen[kept]] = True
        batch.solids[row] = 0.0
        batch.solids[row, chosen[kept]] = left


def _are_dependent(batch: Batch, vectors: FloatArray) -> BoolArray:
    """Whether the active solids of each water depend on each other, (n,)."""
    slots, used = slots_of(batch.active)
    rows = np.take_along_axis(vectors, slots[:, :, None], axis=1) * used[:, :, None]
    length = np.linalg.norm(rows, axis=2)
    rows = rows / np.maximum(length, 1e-300)[:, :, None]
    gram = rows @ np.swapaxes(rows, 1, 2)
    diagonal = np.einsum("nkk->nk", gram)
    diagonal[~used] = 1.0
    smallest = np.linalg.eigvalsh(gram)[:, 0]
    empty = (used & (length == 0.0)).any(axis=1)
    return np.asarray(empty | (smallest < DEPENDENT), dtype=bool)


def _used_up(
    vectors: FloatArray, amounts: FloatArray, saturation: FloatArray
) -> tuple[IntArray, FloatArray]:
    """Positions of independent solids and their amounts, after reactions among all of them."""
    kept, left = np.arange(amounts.size), amounts.copy()
    while kept.size:
        u, size, _ = np.linalg.svd(vectors[kept])
        if size.size == kept.size and size[-1] ** 2 >= DEPENDENT * size[0] ** 2:
            break
        way = u[:, -1]
        way = np.where(np.abs(way) < 1e-9, 0.0, way)
        if way @ saturation[kept] < 0.0 or not (way < 0.0).any():
            way = -way
        room = np.where(way < 0.0, -left / np.minimum(way, -1e-300), np.inf)
        first = int(np.argmin(room))
        left = np.maximum(left + room[first] * way, 0.0)
        kept, left = np.delete(kept, first), np.delete(left, first)
    return kept, left


def exchange(kernel: Kernel, part: Batch, exact: BoolArray, near: BoolArray) -> BoolArray:
    """Drop the most negative solid, else add the most supersaturated one; True where exchanged.

    Rows that are ``near`` their exact state exchange only what is beyond doubt: an amount below
    zero by a share of what the water holds, or a clear supersaturation.
    """
    n = part.totals.shape[0]
    moved = np.zeros(n, dtype=bool)
    if not kernel.solid_ln_k.size:
        return moved
    some = np.flatnonzero(exact | near)
    take, doubtful = np.arange(some.size), near[some]
    active, solids = part.active[some], part.solids[some]
    worst = np.argmin(np.where(active, solids, 0.0), axis=1)
    drop = active[take, worst] & (solids[take, worst] < 0.0)
    unsure = np.flatnonzero(drop & doubtful)
    if unsure.size:
        most = _most(kernel, part, some[unsure], worst[unsure])
        drop[unsure] = solids[unsure, worst[unsure]] < -CLEARLY_NEGATIVE * most
    index = kernel.saturation_ln(part.ln_activity[some], part.surroundings[some])
    si = np.where(active, -np.inf, index)
    best = np.argmax(si, axis=1)
    add = ~drop & (si[take, best] > np.where(doubtful, CLEARLY_ABOVE, SETTLED_ABOVE))
    part.active[some[drop], worst[drop]] = False
    part.solids[some[drop], worst[drop]] = 0.0
    if add.any():
        _add(kernel, part, some[add], best[add])
    moved[some] = drop | add
    return moved


def _most(kernel: Kernel, part: Batch, rows: IntArray, solid: IntArray) -> FloatArray:
    """Most of a solid that the totals of each row allow, protons left out, (rows,). [mol/L]"""
    need = kernel.solid_formation[solid].copy()
    if kernel.proton >= 0:
        need[:, kernel.proton] = 0.0
    room = np.where(need > 0.0, part.totals[rows] / np.where(need > 0.0, need, 1.0), np.inf)
    return np.asarray(np.maximum(room.min(axis=1), 0.0), dtype=float)


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
