"""Jar tests against theory: dose factors of reagents and residual factors of metals.

Owns the least squares in the logarithm and their intervals. What a bench sheet looks like and how
the factors are kept is elsewhere.

With ``f`` the dose factor (fed over reacting) and ``v_H`` the protons that a unit of reagent takes
up, a jar that ends at a measured pH asks for

    sum_r v_H,r d_r / f_r = TOT-H(feed and acids) - TOT-H(pH, all other totals)

whose logarithm is fitted over all jars. At the reacting doses so found, the residual factor of a
metal is the ratio of its filtered amount to the dissolved amount of the equilibrium at the measured
pH; the logarithms of the ratios scatter about that of the factor.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from chemistry.errors import WaterError
from chemistry.state import EquilibriumState, equilibrate
from chemistry.system import System

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

CONFIDENCE = 0.90
ASSUMED_SCATTER_LN = 0.5
"""Scatter of one jar's ratio where a single jar shows none (common practice, no source). [ln]"""
FEW_JARS = 4
"""Below this number of jars a factor is called uncertain (common practice, no source)."""
WIDEST_LN = 50.0
"""Ends of intervals stay within this of a factor of 1: beyond it they say nothing. [ln]"""
_WORST_CONDITION = 1e6  # of the fit: beyond it doses moved together and share one factor


@dataclass(frozen=True, slots=True, kw_only=True)
class FactorFit:
    """A factor with its interval; ``scatter_ln`` is the spread of single jars about it.

    ``scatter_assumed`` tells that one jar alone was there, whose scatter nobody knows.
    """

    factor: float
    low: float
    high: float
    scatter_ln: float
    jars: int
    scatter_assumed: bool = False


@dataclass(frozen=True, eq=False, kw_only=True)
class Bench:
    """Jars as arrays, jars on axis 0.

    Parameters
    ----------
    system
        Components and the solids that form within the test.
    feed_mol_per_l
        Totals of the raw water, electroneutral, (components,). [mol/L]
    fed_mg_per_l
        Doses as fed, (jars, reagents). [mg/L]
    vectors_mol_per_mg
        What a mg of each reagent brings, (reagents, components). [mol/mg]
    moves_ph
        Which reagents take up protons (1), give them (-1) or do neither (0), (reagents,).
    ph
        Measured, (jars,).
    """

    system: System
    feed_mol_per_l: FloatArray
    fed_mg_per_l: FloatArray
    vectors_mol_per_mg: FloatArray
    moves_ph: NDArray[np.int64]
    ph: FloatArray

    def settled(
        self, factors: FloatArray, start: EquilibriumState | None = None
    ) -> EquilibriumState:
        """States of all jars at their measured pH with these dose factors, (reagents,).

        ``start`` holds states of the same jars with other factors.
        """
        totals = self.dosed(factors)
        totals[:, self.system.index["H+"]] = 0.0
        return equilibrate(self.system, totals, ph=self.ph, start=start)

    def dosed(self, factors: FloatArray) -> FloatArray:
        """Totals of all jars, (jars, components). [mol/L]"""
        brought = (self.fed_mg_per_l / factors) @ self.vectors_mol_per_mg
        return np.asarray(self.feed_mol_per_l + brought)


@dataclass(frozen=True, eq=False, kw_only=True)
class DoseFit:
    """Dose factors of a bench.

    ``fits`` has None for reagents that could not be fitted, for the reason in ``why``; ``factors``
    (reagents,) are those that the predictions use, the given ones where nothing was fitted.
    ``needed`` (jars,) is the dose of pH-moving reagents that theory asks for over the one fed with
    a factor of 1; nan where a jar took no part.
    """

    fits: tuple[FactorFit | None, ...]
    why: tuple[str, ...]
    factors: FloatArray
    needed: FloatArray


def fit_factor(ln_ratios: Sequence[float], *, confidence: float = CONFIDENCE) -> FactorFit:
    """Factor behind ratios that scatter in the logarithm, with its interval.

    Parameters
    ----------
    ln_ratios
        Natural logarithms of measured over predicted, one per jar.
    confidence
        Chance that the interval holds the factor, where the scatter is normal.

    Notes
    -----
    The mean of the logarithms and ``s / sqrt(n)`` times Student's t of n - 1 degrees. One jar alone
    takes the assumed scatter and one degree, which makes its interval very wide.

    Raises
    ------
    WaterError
        No ratio, or one that is no number.

    Examples
    --------
    >>> found = fit_factor([0.6, 0.7, 0.8])
    >>> round(found.factor, 3), round(found.low, 3), round(found.high, 3)
    (2.014, 1.701, 2.384)
    """
    values = np.asarray(ln_ratios, dtype=float)
    if values.size == 0 or not np.isfinite(values).all():
        raise WaterError("a factor needs at least one ratio of a measured and a predicted value")
    alone = values.size == 1
    scatter = ASSUMED_SCATTER_LN if alone else float(values.std(ddof=1))
    error = scatter / math.sqrt(values.size)
    return _fit(float(values.mean()), error, scatter, max(values.size - 1, 1), values.size,
                confidence)  # fmt: skip


def _fit(
    ln_factor: float, error: float, scatter: float, degrees: int, jars: int, confidence: float
) -> FactorFit:
    from scipy.stats import t

    reach = float(t.ppf(0.5 + confidence / 2.0, degrees)) * error
    return FactorFit(
        factor=math.exp(ln_factor), low=math.exp(max(ln_factor - reach, -WIDEST_LN)),
        high=math.exp(min(ln_factor + reach, WIDEST_LN)), scatter_ln=scatter, jars=jars,
        scatter_assumed=jars == 1,
    )  # fmt: skip


def fit_dose_factors(bench: Bench, given: FloatArray, *, confidence: float = CONFIDENCE) -> DoseFit:
    """Fit fed over reacting for every reagent that the measured pH tells something about.

    Parameters
    ----------
    bench
        The jars.
    given
        Factors of reagents that are not fitted, (reagents,); acids beside an alkali and everything
        that does not move the pH keep them.
    confidence
        Of the intervals.

    Notes
    -----
    Levenberg and Marquardt's method on the equation of this module, the covariance from the
    Jacobian at the optimum and the residual scatter. Each step asks the equilibrium for the proton
    total of every jar again, so what the reagents bring beside their alkali is counted.
    """
    sides = _sides(bench)
    state = bench.settled(given)
    jars = np.flatnonzero((sides != 0) & (_needed(bench, given, sides, state) > 0.0))
    why = [_why_not(bench, r, jars, sides) for r in range(len(given))]
    free = [r for r, reason in enumerate(why) if not reason]
    factors = given.copy()
    fits: list[FactorFit | None] = [None] * len(given)
    if free:
        ln_factors, jacobian, state = _solve(bench, given, sides, jars, free)
        if _moved_together(jacobian):
            for r in free:
                why[r] = "its doses moved together with those of another reagent"
        else:
            factors[free] = np.exp(ln_factors)
            residual = _residual(bench, factors, sides, jars, state)
            found = _intervals(residual, jacobian, ln_factors, bench, jars, free, confidence)
            for r, fit in zip(free, found, strict=True):
                fits[r] = fit
    needed = np.full(len(bench.ph), np.nan)
    plain = np.where(bench.moves_ph == 0, factors, 1.0)
    needed[jars] = np.exp(-_residual(bench, plain, sides, jars, bench.settled(plain)))
    return DoseFit(fits=tuple(fits), why=tuple(why), factors=factors, needed=needed)


def _sides(bench: Bench) -> NDArray[np.int64]:
    """Which side each jar's pH was moved to: alkali 1, acid alone -1, neither 0."""
    has = (bench.fed_mg_per_l[:, None, :] > 0.0) & (
        bench.moves_ph[None, None, :] == np.array([1, -1])[None, :, None]
    )
    any_of = has.any(axis=2)
    return np.where(any_of[:, 0], 1, np.where(any_of[:, 1], -1, 0))


def _needed(
    bench: Bench, factors: FloatArray, sides: NDArray[np.int64], state: EquilibriumState
) -> FloatArray:
    """Protons that theory asks the reagents of each jar's side to take up (or give), (jars,)."""
    proton = bench.system.index["H+"]
    at_ph = state.totals[:, proton]
    fed = bench.fed_mg_per_l / factors
    ours = bench.moves_ph[None, :] == sides[:, None]
    others = np.where(ours, 0.0, fed) @ bench.vectors_mol_per_mg[:, proton]
    start = bench.feed_mol_per_l[proton] + others
    return np.asarray(sides * (start - at_ph))


def _residual(
    bench: Bench, factors: FloatArray, sides: NDArray[np.int64], jars: NDArray[np.int64],
    state: EquilibriumState,
) -> FloatArray:  # fmt: skip
    """Logarithm of what was dosed over what theory asks for, (jars taking part,)."""
    proton = bench.system.index["H+"]
    ours = bench.moves_ph[None, :] == sides[:, None]
    taken = np.where(ours, bench.fed_mg_per_l / factors, 0.0) @ -bench.vectors_mol_per_mg[:, proton]
    needed = _needed(bench, factors, sides, state)
    return np.asarray(np.log((sides * taken)[jars] / np.maximum(needed[jars], 1e-12)))


def _why_not(bench: Bench, reagent: int, jars: NDArray[np.int64], sides: NDArray[np.int64]) -> str:
    """Why a reagent cannot be fitted; empty where it can."""
    if not (bench.fed_mg_per_l[:, reagent] > 0.0).any():
        return "not in the tests"
    if bench.moves_ph[reagent] == 0:
        return "it does not move the pH, so the pH tells nothing about it"
    used = (bench.fed_mg_per_l[jars, reagent] > 0.0) & (sides[jars] == bench.moves_ph[reagent])
    if not used.any():
        return "no jar in which theory asks for it"
    return ""


def _solve(
    bench: Bench, given: FloatArray, sides: NDArray[np.int64], jars: NDArray[np.int64],
    free: Sequence[int],
) -> tuple[FloatArray, FloatArray, EquilibriumState]:  # fmt: skip
    """Logarithms of the fitted factors, the Jacobian and the states there."""
    from scipy.optimize import least_squares

    state: EquilibriumState | None = None

    def miss(ln_factors: FloatArray) -> FloatArray:
        nonlocal state
        factors = given.copy()
        factors[list(free)] = np.exp(ln_factors)
        state = bench.settled(factors, state)
        return _residual(bench, factors, sides, jars, state)

    ends = math.log(0.05), math.log(20.0)
    first = float(np.clip(miss(np.log(given[list(free)])).mean(), *ends))
    found = least_squares(miss, np.full(len(free), first), bounds=ends, diff_step=[1e-5], xtol=1e-7)
    factors = given.copy()
    factors[list(free)] = np.exp(found.x)
    return np.asarray(found.x), np.asarray(found.jac), bench.settled(factors, state)


def _moved_together(jacobian: FloatArray) -> bool:
    jars, count = jacobian.shape
    return jars < count or bool(np.linalg.cond(jacobian) > _WORST_CONDITION)


def _intervals(
    residual: FloatArray, jacobian: FloatArray, ln_factors: FloatArray, bench: Bench,
    jars: NDArray[np.int64], free: Sequence[int], confidence: float,
) -> list[FactorFit]:  # fmt: skip
    degrees = residual.size - len(free)
    scatter = math.sqrt(float(residual @ residual) / degrees) if degrees > 0 else ASSUMED_SCATTER_LN
    covariance = np.linalg.inv(jacobian.T @ jacobian)
    found = []
    for place, r in enumerate(free):
        used = int((bench.fed_mg_per_l[jars, r] > 0.0).sum())
        error = scatter * math.sqrt(float(covariance[place, place]))
        fit = _fit(float(ln_factors[place]), error, scatter, max(degrees, 1), used, confidence)
        found.append(fit if degrees > 0 else _with_assumed(fit))
    return found


def _with_assumed(fit: FactorFit) -> FactorFit:
    return FactorFit(
        factor=fit.factor, low=fit.low, high=fit.high, scatter_ln=fit.scatter_ln, jars=fit.jars,
        scatter_assumed=True,
    )  # fmt: skip
