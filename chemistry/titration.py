"""Titration: the dose of one reagent that brings a water to a pH, and derivatives at that pH.

Newton's method on the balances with the dose as one more unknown is tried first. Where it fails,
each step holds the pH (a convex problem that always has a solution) and asks how many protons that
takes; the dose follows from the proton balance, so the search is on a nearly linear scale. The
result is a plain state of the dosed water, certified on its true totals.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.batch import new_batch
from chemistry.newton import finish
from chemistry.state import (
    EquilibriumState,
    certified_or_solved,
    equilibrate,
    kernel_of,
)
from chemistry.system import System

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

DOSE_ROUNDS = 25
DIRECT_TRIES = (1, 5)  # rounds after which the direct Newton method is tried
DIRECT_NEWTON_ROUNDS = 12
DIRECT_EXCHANGES = 10
LARGEST_DOSE_MOL_PER_L = 2.0
TRACE_DOSE_MOL_PER_L = 1e-9  # where the search begins: the reagent's components are present
PROBE_MOL_PER_L = 1e-3
BALANCE_TOLERANCE = 1e-12


@dataclass(frozen=True, eq=False)
class Titration:
    """Doses (n,) in units of the reagent per litre, and the states of the dosed waters.

    ``reached`` tells which waters hold the pH; a dose is 0 where no positive dose brings it there.
    ``failed`` tells where that is not known, because a state on the way could not be solved.
    """

    dose: FloatArray
    state: EquilibriumState
    reached: BoolArray
    failed: BoolArray


@dataclass(slots=True)
class StartValues:
    """What a warm start reads of a state; rows may be picked and improved."""

    totals: FloatArray
    log_activity: FloatArray
    surroundings: FloatArray
    solids_mol_per_l: FloatArray
    active: BoolArray
    resting: BoolArray

    @classmethod
    def of(cls, state: EquilibriumState, resting: BoolArray | None = None) -> StartValues:
        """Take the values of a state; ``resting`` tells where no dose was needed."""
        if resting is None:
            resting = np.zeros(state.totals.shape[0], dtype=bool)
        return cls(
            state.totals, state.log_activity, state.surroundings, state.solids_mol_per_l,
            state.active, resting,
        )  # fmt: skip

    @classmethod
    def join(cls, parts: Sequence[StartValues]) -> StartValues:
        """Put rows of several one after the other."""
        return cls(*(np.concatenate([getattr(p, f) for p in parts]) for f in cls.__slots__))

    def rows(self, picked: IntArray | BoolArray) -> StartValues:
        """Return some rows (copies)."""
        return StartValues(*(getattr(self, f)[picked] for f in self.__slots__))

    def without_solids(self) -> StartValues:
        """The same liquid for a system that has no solids."""
        n = self.totals.shape[0]
        return StartValues(
            self.totals, self.log_activity, self.surroundings, np.zeros((n, 0)),
            np.zeros((n, 0), dtype=bool), self.resting,
        )  # fmt: skip

    def put(self, rows: IntArray, state: EquilibriumState | StartValues) -> None:
        """Write solved rows."""
        self.log_activity[rows] = state.log_activity
        self.surroundings[rows] = state.surroundings
        self.solids_mol_per_l[rows] = state.solids_mol_per_l
        self.active[rows] = state.active


def titrate(
    system: System,
    totals: FloatArray,
    ph: FloatArray,
    reagent: FloatArray,
    *,
    start: EquilibriumState | StartValues | None = None,
    upward: BoolArray | None = None,
) -> Titration:
    """Find the dose of a reagent that brings each water to its pH.

    Parameters
    ----------
    totals : ndarray, shape (n, components)
        Totals before the dose. [mol/L]
    ph : ndarray, shape (n,)
    reagent : ndarray, shape (components,) or (n, components)
        Moles of each component per unit of reagent; doses come in that unit per litre.
    start
        States of neighbouring dosed waters (n of them).
    upward : ndarray, shape (n,)
        Which reagents raise the pH: with it, waters whose neighbours in ``start`` rested are tried
        without a dose first.

    Notes
    -----
    With ``P(d)`` the proton total that the pH needs when the other components carry the dose, the
    dose solves ``P(d) = T_H + d v_H``. Newton steps use the exact derivative of ``P``.
    """
    work = _Work(system, totals, ph, reagent)
    if start is not None:
        work.begin_at(start)
        if upward is not None and isinstance(start, StartValues):
            work.rest(np.flatnonzero(start.resting), upward)
        work.try_directly()
    work.search()
    return work.result()


class _Work:
    """A batch of titrations under way."""

    def __init__(
        self, system: System, totals: FloatArray, ph: FloatArray, reagent: FloatArray
    ) -> None:
        n, count, solids = totals.shape[0], len(system.components), len(system.solids)
        self.system, self.totals, self.ph = system, totals, ph
        self.proton = system.index["H+"]
        given = np.broadcast_to(reagent, (n, count))
        self.size = np.maximum(np.abs(given).max(axis=1), 1e-300)
        self.vectors = given / self.size[:, None]  # moles of the largest component
        self.dose = np.zeros(n)
        self.reached = np.zeros(n, dtype=bool)
        self.hopeless = np.zeros(n, dtype=bool)
        self.failed = np.zeros(n, dtype=bool)
        self.orient = np.zeros(n)
        self.iterate = StartValues(
            totals, np.zeros((n, count)), np.zeros((n, system.activity_model.width)),
            np.zeros((n, solids)),
            np.zeros((n, solids), dtype=bool), np.zeros(n, dtype=bool),
        )  # fmt: skip

    @property
    def open_rows(self) -> IntArray:
        """Rows neither solved nor given up."""
        return np.flatnonzero(~self.reached & ~self.hopeless)

    def begin_at(self, start: EquilibriumState | StartValues) -> None:
        """Take the iterate of neighbouring waters."""
        self.iterate.put(np.arange(self.ph.size), start)

    def rest(self, rows: IntArray, upward: BoolArray) -> None:
        """Give up rows that are beyond their pH without any dose, and keep those states."""
        if not rows.size:
            return
        state = equilibrate(
            self.system, self.totals[rows], on_failure="flag", start=self.iterate.rows(rows)
        )
        beyond = np.where(upward[rows], state.ph > self.ph[rows], state.ph < self.ph[rows])
        done = np.flatnonzero(beyond & state.converged)
        self.iterate.put(rows[done], state.rows(done))
        self.hopeless[rows[done]] = True
        self.iterate.resting[rows[done]] = True

    def try_directly(self) -> None:
        """Newton with the dose as an unknown, from the iterate; keeps what succeeds."""
        rows = self.open_rows
        if not rows.size:
            return
        kernel = kernel_of(self.system)
        nothing = np.full(rows.size, np.nan)
        batch = new_batch(
            self.system, self.totals[rows].copy(), self.ph[rows], nothing, self.vectors[rows]
        )
        seen = self.iterate.log_activity[rows] > -500.0
        batch.ln_activity = np.where(
            batch.present & seen, self.iterate.log_activity[rows], batch.ln_activity
        )
        batch.surroundings = self.iterate.surroundings[rows]
        batch.surroundings[:, 0] = np.maximum(batch.surroundings[:, 0], 1e-9)
        gone = (~batch.present).astype(float) @ kernel.solid_absolute.T > 0.0
        batch.active = self.iterate.active[rows] & ~gone
        batch.solids = np.where(batch.active, self.iterate.solids_mol_per_l[rows], 0.0)
        # a row that overflows is caught by its certificate, so numpy need not warn of it
        with np.errstate(all="ignore"):
            finish(
                kernel, batch, newton_rounds=DIRECT_NEWTON_ROUNDS, exchange_rounds=DIRECT_EXCHANGES
            )
            sums, _ = kernel.amounts(
                kernel.molalities(batch.ln_activity, batch.surroundings), batch.solids
            )
            dose, _ = kernel.doses(batch, sums - batch.totals)
        good = batch.converged & (dose >= 0.0) & (dose <= LARGEST_DOSE_MOL_PER_L)
        kept = rows[good]
        self.reached[kept], self.dose[kept] = True, dose[good]
        self.iterate.log_activity[kept] = batch.ln_activity[good]
        self.iterate.surroundings[kept] = batch.surroundings[good]
        self.iterate.solids_mol_per_l[kept] = batch.solids[good]
        self.iterate.active[kept] = batch.active[good]

    def search(self) -> None:
        """Bracketed Newton on the proton balance at held pH, row by row of what is open."""
        others = self.vectors.copy()
        others[:, self.proton] = 0.0
        low, high = np.zeros(self.ph.size), np.full(self.ph.size, np.inf)
        self._orient()
        self.dose[self.open_rows] = TRACE_DOSE_MOL_PER_L
        warm: EquilibriumState | None = None
        previous = self.open_rows
        for turn in range(DOSE_ROUNDS):
            if turn in DIRECT_TRIES:
                self.try_directly()
            rows = self.open_rows
            if not rows.size:
                return
            if warm is not None:
                warm = warm.rows(np.isin(previous, rows))
            state = equilibrate(
                self.system, self.totals[rows] + self.dose[rows, None] * others[rows],
                self.ph[rows], on_failure="flag", start=warm,
            )  # fmt: skip
            self._step(rows, state, others, low, high)
            warm, previous = state, rows

    def _orient(self) -> None:
        """Which way a large dose moves the proton balance: up for alkali, down for acid.

        Read off the reagent alone at each held pH, where no solid hides its nature.
        """
        rows = self.open_rows
        if not rows.size:
            return
        kinds, same = np.unique(
            np.concatenate([self.ph[rows, None], self.vectors[rows]], axis=1),
            axis=0, return_inverse=True,
        )  # fmt: skip
        others = kinds[:, 1:].copy()
        others[:, self.proton] = 0.0
        ph = np.concatenate([kinds[:, 0], kinds[:, 0]])
        amounts = np.concatenate([PROBE_MOL_PER_L * others, 2.0 * PROBE_MOL_PER_L * others])
        held = equilibrate(self.system.liquid, amounts, ph, on_failure="flag")
        needed = held.totals[:, self.proton]
        taken = (needed[len(kinds) :] - needed[: len(kinds)]) / PROBE_MOL_PER_L
        effect = (taken - kinds[:, 1 + self.proton])[same.ravel()]
        self.orient[rows] = np.where(effect < 0.0, -1.0, 1.0)
        self.hopeless[rows] |= np.abs(effect) < 1e-6

    def _step(
        self, rows: IntArray, state: EquilibriumState, others: FloatArray, low: FloatArray,
        high: FloatArray,
    ) -> None:  # fmt: skip
        self.iterate.put(rows, state)
        dose, per_mole = self.dose[rows], self.vectors[rows, self.proton]
        miss = state.totals[:, self.proton] - self.totals[rows, self.proton] - dose * per_mole
        _, scale = state.kernel.amounts(state.species_mol_per_l, state.solids_mol_per_l)
        slope = state.sensitivity(others[rows][:, None, :]).titrant[:, 0] - per_mole
        miss, slope = miss * self.orient[rows], slope * self.orient[rows]
        beyond = (dose <= TRACE_DOSE_MOL_PER_L) & (miss >= 0.0)  # the pH lies the other way
        low[rows] = np.where(miss < 0, np.maximum(low[rows], dose), low[rows])
        high[rows] = np.where(miss > 0, np.minimum(high[rows], dose), high[rows])
        step = np.where(np.abs(slope) > 1e-9, -miss / np.where(slope == 0, 1.0, slope), np.inf)
        new = _inside(dose + step, dose, low[rows], high[rows], miss)
        lost = beyond | (new > LARGEST_DOSE_MOL_PER_L) | ~state.converged
        same = np.abs(new - dose) <= 1e-15 * np.maximum(np.abs(new), 1e-9)
        size = np.abs(miss) / np.maximum(scale[:, self.proton], 1e-300)
        near = (size <= BALANCE_TOLERANCE) | (same & (size < 1e-9))
        self.reached[rows] = near & ~(lost & ~near)
        self.hopeless[rows] = lost & ~near
        self.failed[rows] = ~state.converged & ~near & ~beyond
        self.dose[rows] = np.where(near | lost, dose, new)

    def result(self) -> Titration:
        """Plain states of the dosed waters."""
        dose = np.where(self.reached, self.dose, 0.0)
        dosed = self.totals + dose[:, None] * self.vectors
        known = self.reached | self.iterate.resting
        state = certified_or_solved(self.system, dosed, self.iterate, known)
        open_rows = ~self.reached & ~self.hopeless
        return Titration(
            dose / self.size, state, self.reached & state.converged,
            failed=self.failed | open_rows | ~state.converged,
        )  # fmt: skip


def _inside(
    new: FloatArray, old: FloatArray, low: FloatArray, high: FloatArray, miss: FloatArray
) -> FloatArray:
    """Keep a Newton step inside the bracket, else halve it; grow at most tenfold a step."""
    ceiling = np.where(np.isfinite(high), high, 10.0 * old + 1e-2)
    outside = (new <= low) | (new >= ceiling)
    middle = np.where(np.isfinite(high), 0.5 * (low + high), ceiling)
    bisected = np.where(miss < 0, middle, 0.5 * (low + np.minimum(high, old)))
    return np.where(outside & (np.abs(new - old) > 0), bisected, new)
