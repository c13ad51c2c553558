"""How the balances feel the activity model: products of its slopes with the stoichiometry.

Owns the sums over species that eliminate the surroundings from a Newton step. Species of one group
act alike, so what the groups need is summed over their members once, and the rest is small.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from chemistry.activity import ActivityModel
from chemistry.batch import FloatArray, IntArray


@dataclass(slots=True)
class Coupled:
    """The surroundings' part of a linearised batch.

    ``held_back`` (n, columns, columns) is ``1 - L'MO``, ``by_activity`` (n, columns, components)
    ``L'MA`` and ``side`` (n, columns, components) ``O'MA``, with the concentrations M, the
    functionals L, the offset slopes O and the stoichiometry A; ``water`` (n, columns) is the slope
    of ln a_w, None where the model leaves water alone.
    """

    held_back: FloatArray
    by_activity: FloatArray
    side: FloatArray
    water: FloatArray | None = None


class Coupling:
    """Sums over the species of a system that every batch needs.

    The offset slope of species i with the column d is ``z_i^2 D'(I)`` in the first column, less
    ``eps_id`` and plus ``w_i`` times the slope of ln a_w. All members of a group have the same
    eps, so a sum with it is one over groups.
    """

    def __init__(self, model: ActivityModel, formation: FloatArray) -> None:
        self.model, self.formation, self.count = model, formation, formation.shape[1]
        both = np.concatenate([formation, model.functionals], axis=1)
        self.screened = np.ascontiguousarray(model.squared_charges[:, None] * both)
        self.hydrated = np.ascontiguousarray(model.water[:, None] * both)
        self.members = _Members(model.groups, formation)

    def at(self, m: FloatArray, y: FloatArray, seen: FloatArray, columns: IntArray) -> Coupled:
        """Evaluate for a batch.

        Parameters
        ----------
        m : ndarray, shape (n, species)
            Concentrations. [mol/L]
        y, seen : ndarray, shape (n, width)
            The surroundings as the coefficients take them, and as the species make them.
        columns
            Surroundings that move with Newton, the ionic strength first.
        """
        n, k, c = m.shape[0], columns.size, self.count
        _, slope = self.model.screening(y[:, 0])
        screened = m @ self.screened  # sums of z^2 A and of z^2 L
        if self.model.name != "sit":
            held_back = 1.0 - slope * screened[:, c]
            side = slope[:, None] * screened[:, :c]
            by_activity = 0.5 * screened[:, None, :c]
            return Coupled(held_back[:, None, None], by_activity, side[:, None])
        spread, side = np.zeros((n, k, k)), np.zeros((n, k, c))
        spread[:, :, 0] = slope[:, None] * screened[:, c + columns]
        side[:, 0] = slope[:, None] * screened[:, :c]
        grouped = self.members.sums(m)
        by_activity = np.concatenate(
            [0.5 * screened[:, None, :c], (m @ self.formation)[:, None], grouped], axis=1
        )[:, columns]
        self._add_groups(spread, side, columns, Sums(seen, screened[:, c:], grouped))
        hydrated, water = m @ self.hydrated, self.model.ln_water_slope(y)[:, columns]
        spread += hydrated[:, c + columns, None] * water[:, None, :]
        side += water[:, :, None] * hydrated[:, None, :c]
        return Coupled(np.eye(k) - spread, by_activity, side, water)

    def _add_groups(
        self, spread: FloatArray, side: FloatArray, columns: IntArray, sums: Sums
    ) -> None:
        """Add the parts with -eps to ``L'MO`` and ``O'MA``, in place."""
        groups = columns[columns >= 2] - 2
        before = columns.size - groups.size
        eps = self.model.among_groups[:, groups]
        acting = np.stack([0.5 * sums.screened[:, 2:], sums.seen[:, 2:]], axis=1)
        spread[:, :before, before:] -= acting[:, columns[:before]] @ eps
        spread[:, before:, before:] -= sums.seen[:, 2 + groups, None] * eps[groups]
        side[:, before:] -= eps.T @ sums.grouped


@dataclass(slots=True)
class Sums:
    """Sums over species of L (n, width), z^2 L (n, width), and A by group (n, groups, comps)."""

    seen: FloatArray
    screened: FloatArray
    grouped: FloatArray


class _Members:
    """Sums of the stoichiometry over the members of each group, of its nonzero entries alone."""

    def __init__(self, groups: FloatArray, formation: FloatArray) -> None:
        self.shape = (groups.shape[1], formation.shape[1])
        grouped = groups.max(axis=1, initial=0.0)  # 1 for a member of any group
        species, component = np.nonzero(formation * grouped[:, None])
        group = groups[species] @ np.arange(groups.shape[1])
        cell = group.astype(np.int64) * formation.shape[1] + component
        order = np.argsort(cell, kind="stable")
        self.species, self.counts = species[order], formation[species, component][order]
        self.cells, self.starts = np.unique(cell[order], return_index=True)

    def sums(self, m: FloatArray) -> FloatArray:
        """Moles of each component in each group, (n, groups, components)."""
        found = np.zeros((m.shape[0], self.shape[0] * self.shape[1]))
        if self.cells.size:
            parts = m[:, self.species] * self.counts
            found[:, self.cells] = np.add.reduceat(parts, self.starts, axis=1)
        return found.reshape(m.shape[0], *self.shape)
