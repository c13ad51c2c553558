"""Exact derivatives of equilibrium states with the temperature.

Constants move by van 't Hoff with the enthalpies of the system (none where none is known), the
activity coefficients with Debye-Hueckel's A, a held CO2 pressure with Henry's constant. The
bordered matrix is that of the derivatives along totals; only its right-hand side is new here.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from chemistry.activity import LN10, debye_hueckel_a
from chemistry.batch import Batch, FloatArray
from chemistry.gas import CO2_SPECIES, ln_henry_slope
from chemistry.kernel import Kernel
from chemistry.linear import solve_equilibrated
from chemistry.linearised import Border, Linearised, assemble, linearise
from chemistry.sensitivity import Sensitivity
from chemistry.system import (
    GAS_CONSTANT_KJ_PER_MOL_K,
    HIGHEST_TEMPERATURE_DEGC,
    LOWEST_TEMPERATURE_DEGC,
    Solid,
    Species,
    System,
)

if TYPE_CHECKING:
    from chemistry.state import EquilibriumState

A_STEP_DEGC = 1e-3  # of the difference in A, which is read from a table


@dataclass(frozen=True, eq=False)
class Drift:
    """Change of what a system is made of with temperature. [1/C]

    ``ln_k`` (species,), ``solid_ln_k`` (solids,), ``a_ln`` Debye-Hueckel's A in natural-log units,
    ``co2_ln`` the held product a(CO3) a(H)^2 at one CO2 pressure.
    """

    ln_k: FloatArray
    solid_ln_k: FloatArray
    a_ln: float
    co2_ln: float


def drift_of(system: System) -> Drift:
    """Change of a system's constants with temperature at its temperature.

    Notes
    -----
    van 't Hoff with a constant enthalpy: ``d ln K / dT = dH / (R T^2)``.
    """
    kelvin = system.temperature_degc + 273.15

    def slope(item: Species | Solid) -> float:
        return (item.enthalpy_kj_per_mol or 0.0) / (GAS_CONSTANT_KJ_PER_MOL_K * kelvin**2)

    ln_k = np.array([0.0] * len(system.components) + [slope(s) for s in system.species])
    co2_ln = 0.0
    if CO2_SPECIES in system.species_names:
        formation = ln_k[system.species_names.index(CO2_SPECIES)]
        co2_ln = ln_henry_slope(CO2_SPECIES, system.temperature_degc) - float(formation)
    return Drift(
        ln_k, np.array([slope(s) for s in system.solids], dtype=float),
        LN10 * debye_hueckel_slope(system.temperature_degc), co2_ln,
    )  # fmt: skip


def debye_hueckel_slope(temperature_degc: float) -> float:
    """Change of Debye-Hueckel's A with temperature. [(kg/mol)^0.5 / C]

    At a node of its table, where the slope jumps, it is the mean of the two sides.
    """
    low = max(temperature_degc - A_STEP_DEGC, LOWEST_TEMPERATURE_DEGC)
    high = min(temperature_degc + A_STEP_DEGC, HIGHEST_TEMPERATURE_DEGC)
    return (debye_hueckel_a(high) - debye_hueckel_a(low)) / (high - low)


def temperature_sensitivity_of(state: EquilibriumState) -> Sensitivity:
    """Derivatives of a batch of states with temperature, one direction per state. [per C]

    Notes
    -----
    With ``q`` the change of ln m at fixed log activities and surroundings, mass action, balances
    and saturation give ``A'M (A dl + O dy + q) + G' dx = 0`` and ``G dl + d ln Ks + w d ln a_w``
    ``= 0`` with ``(1 - L'MO) dy = L'M (A dl + q)``. A held pH rests; a held pressure moves by
    `Drift`.
    """
    kernel, batch = state.kernel, state.batch
    drift = drift_of(state.system)
    border = Border.of(kernel, batch)
    slots, used = border.slots, border.used
    columns = kernel.model.leading(batch.surroundings, least=0.0)
    lin = linearise(kernel, batch, border, columns=columns)
    by_a_ln = _by_screening(kernel, batch, drift)
    q = drift.ln_k + by_a_ln[:, : lin.m.shape[1]]
    followed = _followed(kernel, batch, lin, q)
    slope = kernel.model.offset_slope(batch.surroundings, columns)
    moved = q + np.einsum("nsy,ny->ns", slope, followed)  # d ln m at fixed log activities
    n, count = batch.totals.shape
    rhs = np.zeros((n, count + used.shape[1]))
    water = by_a_ln[:, -1] + np.einsum(
        "ny,ny->n", kernel.model.ln_water_slope(batch.surroundings)[:, columns], followed
    )
    held = drift.co2_ln - kernel.co2_water * water
    rhs[:, :count] = _balances(kernel, batch, -(lin.m * moved) @ kernel.formation, held)
    risen = drift.solid_ln_k + water[:, None] * kernel.solid_water
    rhs[:, count:] = np.where(used, -np.take_along_axis(risen, slots, axis=1), 0.0)
    answer = solve_equilibrated(assemble(kernel, batch, lin, border).matrix, rhs)
    dl, dx = answer[:, :count], np.where(used, answer[:, count:], 0.0)
    dm = dl @ kernel.formation_t + moved
    dm += np.einsum("nsy,nyc,nc->ns", slope, lin.follow, dl)
    solids = np.zeros_like(batch.solids)
    np.put_along_axis(solids, slots, dx, axis=1)
    return _as_sensitivity(kernel, batch, (lin.m * dm) @ kernel.formation, solids, dl)


def _by_screening(kernel: Kernel, batch: Batch, drift: Drift) -> FloatArray:
    """Change of every ln m (and, last, of ln a_w) with A at fixed surroundings, (n, species + 1).

    Every model is linear in A, so a difference of one unit is exact.
    """
    model, y = kernel.model, batch.surroundings
    shifted = replace(model, a_ln=model.a_ln + 1.0)
    species = shifted.offset(y) - model.offset(y)
    water = shifted.ln_water(y) - model.ln_water(y)
    return drift.a_ln * np.concatenate([species, water[:, None]], axis=1)


def _followed(kernel: Kernel, batch: Batch, lin: Linearised, q: FloatArray) -> FloatArray:
    """Change of the surroundings at fixed log activities, (n, columns)."""
    weights = kernel.functionals[:, lin.columns]
    spread = lin.m[:, :, None] * kernel.model.offset_slope(batch.surroundings, lin.columns)
    held_back = np.eye(lin.columns.size) - weights.T @ spread
    pushed = (lin.m * q) @ weights
    return np.asarray(np.linalg.solve(held_back, pushed[:, :, None])[:, :, 0], dtype=float)


def _balances(kernel: Kernel, batch: Batch, rhs: FloatArray, co2_ln: FloatArray) -> FloatArray:
    """Right-hand side of the balances with the rows that something held replaces."""
    kernel.hold(batch, np.zeros((*rhs.shape, rhs.shape[1])), rhs)
    held = np.flatnonzero(~np.isnan(batch.ph_ln))
    rhs[held, batch.pivot[held]] = 0.0
    if kernel.carbonate >= 0:
        opened = ~np.isnan(batch.co2_ln)
        rhs[opened, kernel.carbonate] = co2_ln[opened]
    rhs[~batch.present] = 0.0
    return rhs


def _as_sensitivity(
    kernel: Kernel, batch: Batch, dissolved: FloatArray, solids: FloatArray, dl: FloatArray
) -> Sensitivity:
    total = dissolved + solids @ kernel.solid_formation
    titrant, _ = kernel.doses(batch, total)
    proton = kernel.proton
    ph = -dl[:, proton] / LN10 if proton >= 0 else np.full(dl.shape[0], np.nan)
    return Sensitivity(
        dissolved[:, :, None], ph[:, None], solids[:, :, None], titrant[:, None], dl[:, None, :]
    )
