"""Equilibrium of a batch of waters: the convex problem, solved for every state at once.

For given activity coefficients the state minimises ``sum m_s(l) - T.l`` over the log activities
``l`` subject to ``G l + g <= 0`` for every candidate solid; the multipliers are the amounts
precipitated (the dual of minimising Gibbs energy). Three steps, each over the whole batch:

1. damped continued fractions without solids give a start;
2. a primal-dual interior-point method with a slack for every solid finds which solids form;
3. an active-set Newton method on log activities, amounts and ionic strength makes it exact.

This module ties them together (chunks, retries, warm starts); `chemistry.interior` owns steps 1
and 2, `chemistry.newton` step 3, `chemistry.state` what callers see.
"""

from __future__ import annotations

import numpy as np

from chemistry.batch import Batch, IntArray, new_batch
from chemistry.dose_search import begin_at_dose
from chemistry.interior import START_ROUNDS, interior, start
from chemistry.kernel import Kernel
from chemistry.newton import finish
from chemistry.system import LN10

WARM_NEWTON_ROUNDS = 14  # a water that takes more of them is sooner solved from afar


def solve(kernel: Kernel, batch: Batch) -> None:
    """Solve a batch in place: cold start, then slower settings for the rows that failed."""
    # a row that overflows is caught by its certificate, so numpy need not warn of it
    with np.errstate(all="ignore"):
        count, at_once = batch.totals.shape[0], kernel.rows_at_once
        for begin in range(0, count, at_once):
            rows = np.arange(begin, min(begin + at_once, count))
            part = batch.take(rows)
            start(kernel, part)
            interior(kernel, part)
            finish(kernel, part)
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
        part = _afresh(kernel, batch, rows)
        start(kernel, part, rounds=START_ROUNDS * (2 + 4 * number))
        interior(kernel, part, **settings)
        finish(kernel, part)
        batch.put(rows, part)
        rows = rows[~part.converged]
        if number == 0:
            rows = _search_doses(kernel, batch, rows)


def _search_doses(kernel: Kernel, batch: Batch, rows: IntArray) -> IntArray:
    """Try rows with a held pH from the dose side; return the rows left, those without."""
    held = ~np.isnan(batch.ph_ln[rows])
    if held.any():
        part = begin_at_dose(kernel, _afresh(kernel, batch, rows[held]), solve)
        finish(kernel, part)
        _finish_by_scarcest(kernel, part)
        batch.put(rows[held], part)
    return rows[~held]


def _finish_by_scarcest(kernel: Kernel, batch: Batch) -> None:
    """Tell the dose by the component that the water holds least of beside the titrant, in place.

    A small dose read off a large balance of protons is no better than that balance's rounding.
    """
    rows = np.flatnonzero(~batch.converged & (np.count_nonzero(batch.titrant, axis=1) > 1))
    if rows.size == 0:
        return
    part = batch.take(rows)
    m = kernel.molalities(part.ln_activity, part.surroundings)
    _, scale = kernel.amounts(m, part.solids)
    moles = np.abs(kernel.reduced_titrant(part, np.arange(rows.size)))
    size = np.where(moles > 0.0, scale / np.maximum(moles, 1e-300), np.inf)
    part.pivot = np.argmin(size, axis=1)
    finish(kernel, part)
    done = np.flatnonzero(part.converged)
    batch.put(rows[done], part.take(done))


def solve_warm(kernel: Kernel, batch: Batch) -> None:
    """Solve from the iterate already in the batch; rows that fail start cold."""
    with np.errstate(all="ignore"):
        finish(kernel, batch, newton_rounds=WARM_NEWTON_ROUNDS)
    rows = np.flatnonzero(~batch.converged)
    if rows.size:
        cold = _afresh(kernel, batch, rows)
        solve(kernel, cold)
        batch.put(rows, cold)


def _afresh(kernel: Kernel, batch: Batch, rows: IntArray) -> Batch:
    part = batch.take(rows)
    return new_batch(kernel.system, part.totals, -part.ph_ln / LN10, part.co2_ln, part.titrant)
