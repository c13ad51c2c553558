"""Random waters for the equilibrium: five strata, each closed electrically by its proton total.

Every stratum takes a random subset of 4 to 20 components with totals log-uniform between 1e-9 and
0.3 mol/L; the later ones push a part of the waters to where equilibria are hard.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry import EquilibriumState, System

FloatArray = NDArray[np.float64]

LEAST, MOST = 1e-9, 0.3  # mol/L
STRATA = {"plain": 0.33, "heavy": 0.25, "acid": 0.14, "base": 0.13, "zeros": 0.15}


@dataclass(frozen=True)
class Waters:
    """Totals (n, components) and which of them were taken up with a total of 0."""

    totals: FloatArray
    stratum: NDArray[np.str_]
    has_zero: NDArray[np.bool_]


def random_waters(system: System, count: int, seed: int) -> Waters:
    """Draw electroneutral waters over the components of a system that has H+."""
    rng = np.random.default_rng(seed)
    proton = system.index["H+"]
    others = np.array([i for i in range(len(system.components)) if i != proton])
    names = rng.choice(list(STRATA), count, p=list(STRATA.values()))
    strong = _strong_ions(system, names, rng)
    sizes = rng.integers(4, min(20, others.size + 1) + 1, count) - 1
    draw = np.where(strong > 0.0, -1.0, rng.random(strong.shape))[:, others]
    chosen = np.argsort(np.argsort(draw, axis=1), axis=1) < sizes[:, None]
    low = np.where(names == "heavy", 1e-2, LEAST)[:, None]
    spread = rng.random((count, others.size))
    totals = np.zeros((count, len(system.components)))
    totals[:, others] = np.where(chosen, low * (MOST / low) ** spread, 0.0)
    totals = np.where(strong > 0.0, strong, _thinned(system, totals, names, rng))
    drawn = totals[:, others] > 0.0
    zero = drawn & (rng.random(drawn.shape) < 0.25) & (names == "zeros")[:, None]
    totals[:, others] = np.where(zero, 0.0, totals[:, others])
    totals[:, proton] = -(totals[:, others] @ system.component_charges[others])
    return Waters(totals, names, zero.any(axis=1))


def _strong_ions(system: System, names: NDArray[np.str_], rng: np.random.Generator) -> FloatArray:
    """Chloride of the acid stratum, sodium of the base one, salts of half the heavy one; else 0."""
    strong = np.zeros((names.size, len(system.components)))
    salt = (names == "heavy") & (rng.random(names.size) < 0.6)
    kinds = (
        ("Cl-", names == "acid", 0.03), ("Na+", names == "base", 0.03),
        ("Na+", salt, 0.2), ("K+", salt, 0.2), ("Cl-", salt, 0.2),
    )  # fmt: skip
    for ion, rows, least in kinds:
        if ion in system.index:
            strong[rows, system.index[ion]] = rng.uniform(least, MOST, int(rows.sum()))
    return strong


def _thinned(
    system: System, totals: FloatArray, names: NDArray[np.str_], rng: np.random.Generator
) -> FloatArray:
    """Totals with the cations of the acid stratum and the anions of the base one thinned."""
    sign = np.where(names == "acid", 1.0, np.where(names == "base", -1.0, 0.0))
    part = 10.0 ** -rng.uniform(0.0, 4.0, (names.size, 1))
    return np.where(system.component_charges * sign[:, None] > 0.0, part * totals, totals)


def shares(waters: Waters, state: EquilibriumState) -> dict[str, float]:
    """Shares of the waters that the random tests promise."""
    return {
        "three or more solids": float((state.active.sum(axis=1) >= 3).mean()),
        "ionic strength above 0.5": float((state.ionic_strength > 0.5).mean()),
        "pH below 2": float((state.ph < 2.0).mean()),
        "pH above 12.5": float((state.ph > 12.5).mean()),
        "some total 0": float(waters.has_zero.mean()),
    }


PROMISED_SHARES = {
    "three or more solids": 0.30,
    "ionic strength above 0.5": 0.10,
    "pH below 2": 0.10,
    "pH above 12.5": 0.10,
    "some total 0": 0.10,
}


def replay(system: System, totals: FloatArray) -> str:
    """A water as the call that solves it again."""
    water = {c: float(t) for c, t in zip(system.components, totals, strict=True) if t != 0.0}
    return (
        f"equilibrate(load_system(temperature_degc={system.temperature_degc!r}, "
        f"activity={system.activity!r}), {water!r})"
    )
