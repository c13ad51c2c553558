"""The linear system of a Newton step: balances and saturation with their Jacobian.

Owns what the steps of `chemistry.newton` and the derivatives share; solves nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from chemistry.active_set import slots_of
from chemistry.batch import Batch, BoolArray, FloatArray, IntArray
from chemistry.coupling import Coupled
from chemistry.held import Held
from chemistry.kernel import Kernel
from chemistry.linear import solve_batch


@dataclass(slots=True)
class Border:
    """The present solids of a batch: rows and columns that border its balances.

    ``slots`` (n, width) are the positions of the solids, ``used`` which slots hold one, ``take``
    (n, 1) the rows; ``stoichiometry`` (n, width, components) is 0 in unused slots and along
    components that a water lacks.
    """

    slots: IntArray
    used: BoolArray
    take: IntArray
    stoichiometry: FloatArray

    @classmethod
    def of(cls, kernel: Kernel, batch: Batch) -> Border:
        """Border of a batch's active solids."""
        slots, used = slots_of(batch.active)
        stoichiometry = kernel.solid_formation[slots]
        if not used.all() or not batch.present.all():
            stoichiometry *= used[:, :, None] & batch.present[:, None, :]
        return cls(slots, used, np.arange(slots.shape[0])[:, None], stoichiometry)

    def keep(self, kept: BoolArray) -> Border:
        """Border of some rows."""
        slots, count = self.slots[kept], np.count_nonzero(kept)
        take = np.arange(count)[:, None]
        return Border(slots, self.used[kept], take, self.stoichiometry[kept])


@dataclass(slots=True)
class Linearised:
    """Balances and their first derivatives at an iterate.

    ``columns`` are the surroundings that move with Newton; ``follow`` (n, columns, components) is
    their change with the log activities and ``follow_gap`` what they are off by themselves;
    ``off`` (n, width) is by how much the species contradict every surrounding.
    """

    ln_m: FloatArray
    m: FloatArray
    sums: FloatArray
    scale: FloatArray
    matrix: FloatArray
    rhs: FloatArray
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


def linearise(kernel: Kernel, part: Batch, border: Border, *, columns: IntArray) -> Linearised:
    """Balances and saturation of the present solids with their Jacobian.

    Notes
    -----
    With ``y = m L`` and ``d ln m = A dl + O dy`` the surroundings follow the log activities by
    ``(1 - L'MO) dy = (m L - y) + L'MA dl``, which is eliminated.
    """
    y = part.surroundings
    ln_m = kernel.ln_molalities(part.ln_activity, y)
    m = np.exp(ln_m)
    sums, scale = kernel.amounts(m, part.solids)
    seen = kernel.surroundings(m)
    off = seen - y
    coupled = kernel.coupling.at(m, y, seen, columns)
    if columns.size == 1:
        follow = coupled.by_activity / coupled.held_back
        follow_gap = off[:, columns] / coupled.held_back[:, :, 0]
    else:
        known = np.concatenate([coupled.by_activity, off[:, columns, None]], axis=2)
        followed = solve_batch(coupled.held_back, known)
        follow, follow_gap = followed[:, :, :-1], followed[:, :, -1]
    matrix = kernel.gram(m)
    matrix += np.swapaxes(coupled.side, 1, 2) @ follow
    rhs = part.totals - sums - (follow_gap[:, None, :] @ coupled.side)[:, 0]
    no_solids = part.solids[:, :0]
    g, saturation, miss = border.stoichiometry, no_solids, no_solids
    if border.slots.shape[1]:
        g, saturation, miss = _saturation(kernel, part, border, coupled, follow, follow_gap)
    return Linearised(
        ln_m=ln_m, m=m, sums=sums, scale=scale, matrix=matrix, rhs=rhs, g=g,
        saturation=saturation, miss=miss, columns=columns, follow=follow, follow_gap=follow_gap,
        off=off,
    )  # fmt: skip


def _saturation(
    kernel: Kernel, part: Batch, border: Border, coupled: Coupled, follow: FloatArray,
    follow_gap: FloatArray,
) -> tuple[FloatArray, FloatArray, FloatArray]:  # fmt: skip
    """Rows of the present solids: their Jacobian, right-hand side, and how far they are off."""
    index = kernel.saturation_ln(part.ln_activity, part.surroundings)
    si = np.where(border.used, index[border.take, border.slots], 0.0)
    if coupled.water is None:
        return border.stoichiometry, si, si
    water, moles = coupled.water[:, None, :], kernel.solid_water[border.slots]
    g = kernel.solid_formation[border.slots] + moles[:, :, None] * (water @ follow)
    g = g * (border.used[:, :, None] & part.present[:, None, :])
    moved = si + moles * (water @ follow_gap[:, :, None])[:, 0]
    return g, np.where(border.used, moved, 0.0), si


def assemble(
    kernel: Kernel, part: Batch, lin: Linearised, border: Border, *, held: Held | None = None
) -> Assembled:
    """The bordered system of balances and saturation conditions."""
    n, count = part.totals.shape
    width = border.used.shape[1]
    if held is None:
        held = Held.of(kernel, part)
    if width:
        matrix = np.zeros((n, count + width, count + width))
        matrix[:, :count, :count] = lin.matrix
        matrix[:, :count, count:] = np.swapaxes(border.stoichiometry, 1, 2)
        matrix[:, count:, :count] = lin.g
        rhs = np.concatenate([lin.rhs, -lin.saturation], axis=1)
    else:
        matrix, rhs = lin.matrix, lin.rhs
    held.hold(kernel, part, matrix, rhs)
    if held.co2.size:
        _hold_through_water(kernel, part, lin, matrix, rhs)
    diagonal = np.einsum("nii->ni", matrix)
    if held.gone is not None:
        matrix[:, :count][held.gone] = 0.0
        rhs[:, :count][held.gone] = 0.0
        diagonal[:, :count][held.gone] = 1.0
    if width:
        diagonal[:, count:][~border.used] = 1.0
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
