"""Closing a water: the proton total and the ion that makes it electroneutral, found together.

Owns the equations between pH (or a titration), alkalinity and charge; what a laboratory writes is
`chemistry.analysis`, what comes out is `chemistry.feed`.

A water of totals ``T`` is electroneutral when ``sum z_i T_i + TOT-H = 0``, because every species
forms from the components by a balanced reaction. The acid of a water is known in one of two ways,
both as a proton total that depends on the other totals:

- its pH: TOT-H of the equilibrium without solids at that pH (the sample was filtered);
- a titration: base ``b`` brought the water to ``pH_e``, so ``TOT-H = TOT-H(pH_e) + b`` with the
  solids that the base makes.

Moving the closing ion by ``x`` shifts TOT-H as well (added sulfate binds protons), so both are
found from the one equation ``sum z_i T_i + z_c x + TOT-H(T + x e_c) = 0``, whose left side moves
in one direction with ``x``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import WaterError
from chemistry.state import equilibrate
from chemistry.system import System

FloatArray = NDArray[np.float64]

# Proton count of each weak acid at the carbon dioxide end point, where alkalinity is zero:
# the definition of Dickson 1981, Deep-Sea Research 28A, 609 (acids weaker than pK 4.5 count as
# acids at that point), from memory.
ALKALINITY_LEVEL = {
    "CO3-2": 2.0, "HS-": 1.0, "PO4-3": 2.0, "CH3COO-": 1.0, "(EDTA)-4": 2.0, "(NTA)-3": 1.0,
    "(Cit)-3": 2.0,
}  # fmt: skip

MOST_MOL_PER_L = 5.0  # no closing amount and no carbonate beyond this is looked for

# Spread of readings, for the weights of titration points (common practice, no source).
PH_READING_SPREAD = 0.05
BASE_READING_SPREAD_FRACTION = 0.01
PH_DIFFERENCE = 0.02
DEMAND_ROUNDS = 40
DEMAND_TOLERANCE = 1e-12


@dataclass(frozen=True, eq=False)
class AcidRule:
    """How the proton total follows from the other totals.

    Points ``base_mol_per_l`` (k,) of strong base added and the ``ph`` (k,) reached; ``system`` is
    without solids where the points are readings of the water as sampled.
    """

    system: System
    base_mol_per_l: FloatArray
    ph: FloatArray
    weights: FloatArray

    def readings(self, totals_mol_per_l: FloatArray) -> FloatArray:
        """Proton total that each point asks for, (k,). [mol/L]"""
        waters = with_base(self.system, totals_mol_per_l, self.base_mol_per_l)
        state = equilibrate(self.system, waters, ph=self.ph)
        proton = self.system.index["H+"]
        return np.asarray(state.totals[:, proton] + self.base_mol_per_l, dtype=float)

    def proton_total_mol_per_l(self, totals_mol_per_l: FloatArray) -> float:
        """Weighted mean of the points: the least-squares TOT-H. [mol/L]"""
        return float(self.weights @ self.readings(totals_mol_per_l))

    def misfit_mol_per_l(self, totals_mol_per_l: FloatArray) -> float:
        """Weighted root-mean-square distance of the points from TOT-H. [mol/L]"""
        off = self.readings(totals_mol_per_l) - totals_mol_per_l[self.system.index["H+"]]
        return float(np.sqrt(self.weights @ off**2))


def with_base(
    system: System, totals_mol_per_l: FloatArray, base_mol_per_l: FloatArray
) -> FloatArray:
    """Totals after these doses of NaOH, (k, components); TOT-H falls by the dose. [mol/L]

    Where the system has no sodium its charge is left out of the ionic strength.
    """
    waters = np.repeat(totals_mol_per_l[None, :], base_mol_per_l.size, axis=0)
    waters[:, system.index["H+"]] -= base_mol_per_l
    if "Na+" in system.index:
        waters[:, system.index["Na+"]] += base_mol_per_l
    return waters


def ph_rule(system: System, ph: float) -> AcidRule:
    """Rule of a measured pH: the filtered sample, no solids."""
    return AcidRule(system.narrowed(solids=()), np.zeros(1), np.array([ph]), np.ones(1))


def titration_rule(
    system: System, totals_mol_per_l: FloatArray, points: tuple[tuple[float, float], ...]
) -> AcidRule:
    """Rule of points (base mol/L, pH), with the solids that the base makes.

    Each point is weighted by the inverse variance of the base it asks for: the pH reading times
    the buffer intensity there, and the burette. A reading at pH 2, where 0.05 pH is more than
    1 meq/L, then counts little beside one on the steep part.
    """
    base = np.array([b for b, _ in points], dtype=float)
    ph = np.array([p for _, p in points], dtype=float)
    if base.size == 1:
        return AcidRule(system, base, ph, np.ones(1))
    waters = with_base(system, totals_mol_per_l, base)
    proton = system.index["H+"]
    below = equilibrate(system, waters, ph=np.maximum(ph - PH_DIFFERENCE, 0.0)).totals[:, proton]
    above = equilibrate(system, waters, ph=ph + PH_DIFFERENCE).totals[:, proton]
    buffer_intensity = np.abs(below - above) / (2.0 * PH_DIFFERENCE)
    burette = BASE_READING_SPREAD_FRACTION * max(float(base.max()), 1e-6)
    weights = 1.0 / ((PH_READING_SPREAD * buffer_intensity) ** 2 + burette**2)
    return AcidRule(system, base, ph, np.asarray(weights / weights.sum(), dtype=float))


def base_demand_mol_per_l(system: System, totals_mol_per_l: FloatArray, ph: float) -> float:
    """NaOH that brings a water to this pH, solids formed; negative where acid is needed. [mol/L]

    Parameters
    ----------
    system
        Components and the solids that may form.
    totals_mol_per_l
        Totals of the water, shape (components,). [mol/L]
    ph
        End point.

    Notes
    -----
    The sodium moves the proton balance only through activities and ion pairs, so repeating
    ``base = TOT-H - TOT-H(ph, base)`` gains about two digits a round.
    """
    proton = system.index["H+"]
    base = 0.0
    for _ in range(DEMAND_ROUNDS):
        waters = with_base(system, totals_mol_per_l, np.array([max(base, 0.0)]))
        needed = equilibrate(system, waters, ph=ph).totals[0, proton]
        before, base = base, float(totals_mol_per_l[proton] - needed)
        if abs(base - before) <= DEMAND_TOLERANCE * max(abs(base), 1e-9):
            break
    return base


def charge_mol_per_l(system: System, totals_mol_per_l: FloatArray) -> float:
    """Net charge of the totals, H+ among them: zero for a water that can exist. [mol/L]"""
    return float(totals_mol_per_l @ system.component_charges)


def gross_charge_mol_per_l(system: System, totals_mol_per_l: FloatArray) -> float:
    """Sum of the charges of either sign, the scale of a charge error. [mol/L]"""
    return float(np.abs(totals_mol_per_l) @ np.abs(system.component_charges))


@dataclass(frozen=True, eq=False)
class Closed:
    """An electroneutral water: its totals, what was added, and the surplus charge before."""

    totals_mol_per_l: FloatArray
    added_mol_per_l: float
    surplus_mol_per_l: float


class CannotCloseError(WaterError):
    """The named ion cannot make the water electroneutral; carries the surplus charge [mol/L]."""

    def __init__(self, surplus_mol_per_l: float) -> None:
        super().__init__(f"no amount of the closing ion balances {surplus_mol_per_l} mol/L")
        self.surplus_mol_per_l = surplus_mol_per_l


def close_with_acid(
    system: System, totals_mol_per_l: FloatArray, ion: str, rule: AcidRule
) -> Closed:
    """Find TOT-H and the amount of the closing ion together.

    Parameters
    ----------
    system
        Components of the water.
    totals_mol_per_l
        Totals as analysed, shape (components,); TOT-H is not read. [mol/L]
    ion
        Component whose amount may move.
    rule
        What is known of the acid.

    Raises
    ------
    CannotCloseError
        No amount of the ion of at least 0 balances the charge.
    """
    proton, column = system.index["H+"], system.index[ion]

    def water(x: float) -> FloatArray:
        moved = totals_mol_per_l.copy()
        moved[column] = max(moved[column] + x, 0.0)
        moved[proton] = rule.proton_total_mol_per_l(moved)
        return moved

    surplus = charge_mol_per_l(system, water(0.0))
    sign = float(np.sign(system.component_charges[column]))
    added = _rising_root(
        lambda x: sign * charge_mol_per_l(system, water(x)),
        lowest=-float(totals_mol_per_l[column]),
        guess=-surplus / float(system.component_charges[column]),
    )
    if added is None:
        raise CannotCloseError(surplus)
    return Closed(water(added), added, surplus)


def close_with_alkalinity(
    system: System,
    totals_mol_per_l: FloatArray,
    ion: str,
    rule: AcidRule,
    alkalinity_eq_per_l: float,
) -> Closed:
    """Find TOT-H, the closing ion and the carbonate of a water whose alkalinity is known.

    Alkalinity is ``Alk = sum r_i T_i - TOT-H`` with ``r_i`` the protons of each acid at the carbon
    dioxide end point. Put into the charge balance it leaves ``sum (z_i + r_i) T_i = Alk``, in which
    carbonate has no part: the closing ion follows at once, and the carbonate then from
    ``TOT-H(T) = sum r_i T_i - Alk``.

    Raises
    ------
    CannotCloseError
        No amount of the ion of at least 0 balances the charge.
    WaterError
        Alkalinity, acid and the other weak acids contradict each other.
    """
    proton, carbonate = system.index["H+"], system.index["CO3-2"]
    level = np.array([ALKALINITY_LEVEL.get(c, 0.0) for c in system.components])
    effective = system.component_charges + level
    effective[proton] = 0.0
    surplus = float(effective @ totals_mol_per_l) - alkalinity_eq_per_l
    column = system.index[ion]
    if effective[column] == 0.0:
        raise WaterError(
            "the charge cannot be closed with carbonate where the alkalinity is given: "
            "alkalinity and pH already fix it"
        )
    added = -surplus / float(effective[column])
    if added < -float(totals_mol_per_l[column]):
        raise CannotCloseError(surplus)
    water = totals_mol_per_l.copy()
    water[column] += added

    def with_carbonate(amount: float) -> FloatArray:
        water[carbonate] = amount
        water[proton] = rule.proton_total_mol_per_l(water)
        return water

    def miss(amount: float) -> float:
        moved = with_carbonate(amount)
        return float(level @ moved) - alkalinity_eq_per_l - float(moved[proton])

    amount = _rising_root(miss, lowest=0.0, guess=alkalinity_eq_per_l)
    if amount is None:
        raise WaterError(
            f"an alkalinity of {1000.0 * alkalinity_eq_per_l:.3g} meq/L does not fit this pH: "
            "hydroxide, phosphate, sulfide or acetate alone give more, or no carbonate gives it"
        )
    return Closed(with_carbonate(amount).copy(), added, surplus)


def _rising_root(
    function: Callable[[float], float], *, lowest: float, guess: float
) -> float | None:
    """Root of a rising function at or above ``lowest``; None where there is none."""
    from scipy.optimize import brentq

    at_lowest = function(lowest)
    if at_lowest >= 0.0:
        return lowest if at_lowest == 0.0 else None
    high = max(guess, lowest + 1e-9)
    step = max(abs(guess), 1e-6)
    while function(high) < 0.0:
        if high >= MOST_MOL_PER_L:
            return None
        high = min(high + step, MOST_MOL_PER_L)
        step *= 2.0
    root, _ = brentq(function, lowest, high, xtol=1e-18, rtol=1e-15, full_output=True)
    return float(root)
