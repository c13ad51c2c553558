"""The pH held by a titrant, found from waters whose pH is free.

Owns the last resort of the solution: waters with a free pH solve from anywhere, so a dose that
brackets the pH leads to the held state, and no bracket means that no dose reaches the pH.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from chemistry.batch import Batch, FloatArray, new_batch
from chemistry.kernel import Kernel

Solve = Callable[[Kernel, Batch], None]

LARGEST_DOSE_MOL_PER_L = 10.0
SMALLEST_DOSE_MOL_PER_L = 1e-7  # below it the scale of doses is linear, above logarithmic
LADDER_STEPS = 16  # doses of either sign that are tried for a bracket
BISECTIONS = 30


@dataclass(slots=True)
class Bracket:
    """Doses on the search scale (nan where none was found) and the miss of ln a(H+) at ``low``."""

    low: FloatArray
    high: FloatArray
    miss_low: FloatArray


def begin_at_dose(kernel: Kernel, batch: Batch, solve: Solve) -> Batch:
    """Return the waters with the iterate of free waters at the dose that gives the held pH.

    Waters whose pH no dose up to 10 mol/L reaches come back as they were.
    """
    bracket = _bracket(kernel, batch, solve)
    rows = np.flatnonzero(np.isfinite(bracket.low))
    if rows.size == 0:
        return batch
    some = batch.take(rows)
    low, high, sign = bracket.low[rows], bracket.high[rows], bracket.miss_low[rows] < 0.0
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        free = _at_doses(kernel, some, middle, solve)
        same = (_miss(kernel, some, free) < 0.0) == sign
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    free = _at_doses(kernel, some, 0.5 * (low + high), solve)
    for name in ("ln_activity", "surroundings", "solids", "active"):
        setattr(some, name, getattr(free, name))
    batch.put(rows, some)
    return batch


def _bracket(kernel: Kernel, batch: Batch, solve: Solve) -> Bracket:
    """First pair of neighbouring doses, counted from none, between which the pH is passed."""
    n = batch.totals.shape[0]
    low, high, kept = np.full(n, np.nan), np.full(n, np.nan), np.full(n, np.nan)
    largest = np.arcsinh(LARGEST_DOSE_MOL_PER_L / SMALLEST_DOSE_MOL_PER_L)
    ladder = np.linspace(0.0, largest, LADDER_STEPS + 1)
    at_zero = _miss(kernel, batch, _at_doses(kernel, batch, np.zeros(n), solve))
    for sign in (1.0, -1.0):
        before = at_zero
        for step in range(LADDER_STEPS):
            rows = np.flatnonzero(np.isnan(low) & np.isfinite(before))
            if rows.size == 0:
                break
            some = batch.take(rows)
            free = _at_doses(kernel, some, np.full(rows.size, sign * ladder[step + 1]), solve)
            after = np.full(n, np.nan)
            after[rows] = _miss(kernel, some, free)
            passed = np.isfinite(after) & ((before < 0.0) != (after < 0.0))
            found = np.flatnonzero(passed)
            low[found], high[found] = sign * ladder[step], sign * ladder[step + 1]
            kept[found] = before[found]
            before = after
    return Bracket(low, high, kept)


def _at_doses(kernel: Kernel, batch: Batch, scaled: FloatArray, solve: Solve) -> Batch:
    """Free waters at doses on the search scale; ``converged`` False where a total is negative."""
    dose = SMALLEST_DOSE_MOL_PER_L * np.sinh(scaled)
    totals = batch.totals + dose[:, None] * batch.titrant
    signed = np.arange(totals.shape[1]) == kernel.proton
    possible = ((totals >= 0.0) | signed).all(axis=1)
    free = new_batch(
        kernel.system, np.where(possible[:, None], totals, batch.totals),
        np.full(dose.shape, np.nan), batch.co2_ln, batch.titrant,
    )  # fmt: skip
    solve(kernel, free)
    free.converged &= possible
    return free


def _miss(kernel: Kernel, batch: Batch, free: Batch) -> FloatArray:
    """Error of ln a(H+), nan where the free water was not solved."""
    miss = free.ln_activity[:, kernel.proton] - batch.ph_ln
    return np.asarray(np.where(free.converged, miss, np.nan), dtype=float)
