"""Jar tests: known factors come back, intervals cover at the stated rate, and few jars say so."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from catalogs.constants import load_system
from catalogs.reagents import load_reagents
from chemistry.analysis import Measurement, WaterAnalysis
from chemistry.calibration import Bench, FactorFit, fit_dose_factors, fit_factor
from chemistry.errors import WaterError
from chemistry.feed import feed_water
from chemistry.state import equilibrate
from chemistry.system import System

FloatArray = NDArray[np.float64]
REAGENTS = ("hydrated_lime", "caustic_soda", "sodium_chloride", "hydrochloric_acid")
COMPONENTS = ("H+", "Na+", "Ca+2", "Cl-", "Cu+2", "Zn+2")
REPETITIONS = 300


@pytest.fixture(scope="module")
def system() -> System:
    return load_system(25.0, components=COMPONENTS)


@pytest.fixture(scope="module")
def feed(system: System) -> FloatArray:
    amounts = {"Cu": 58.0, "Zn": 40.0, "Cl": 300.0}
    analysis = WaterAnalysis(
        measurements={
            n: Measurement(dissolved_mg_per_l=v, total_mg_per_l=v) for n, v in amounts.items()
        },
        close_charge_with="Cl", ph=2.6,
    )  # fmt: skip
    return feed_water(analysis, system).totals_mol_per_l


def vectors(system: System) -> FloatArray:
    known = load_reagents()
    found = np.zeros((len(REAGENTS), len(system.components)))
    for i, name in enumerate(REAGENTS):
        for component, moles in known[name].components.items():
            found[i, system.index[component]] = moles / 1000.0 / known[name].molar_mass_g_per_mol
    return found


def bench(system: System, feed: FloatArray, fed: FloatArray, ph: FloatArray) -> Bench:
    return Bench(
        system=system, feed_mol_per_l=feed, fed_mg_per_l=fed, ph=ph,
        vectors_mol_per_mg=vectors(system), moves_ph=np.array([1, 1, 0, -1]),
    )  # fmt: skip


def ladder(system: System, feed: FloatArray, doses: FloatArray, factors: FloatArray) -> Bench:
    """Jars whose pH is that of the free equilibrium at the reacting doses."""
    totals = feed + (doses / factors) @ vectors(system)
    return bench(system, feed, doses, np.asarray(equilibrate(system, totals).ph))


def fit_of(found: FactorFit | None) -> FactorFit:
    assert found is not None
    return found


def test_a_known_factor_of_one_reagent_comes_back(system: System, feed: FloatArray) -> None:
    doses = np.zeros((4, 4))
    doses[:, 0] = [260, 300, 330, 360]
    truth = np.array([1.3, 1.0, 1.0, 1.0])
    found = fit_dose_factors(ladder(system, feed, doses, truth), np.ones(4))
    lime = fit_of(found.fits[0])
    assert lime.factor == pytest.approx(1.3, rel=1e-5)
    assert lime.scatter_ln < 1e-5
    assert found.fits[1:] == (None, None, None)
    assert found.why[1] == "not in the tests"


def test_factors_of_two_alkalis_come_back_from_mixed_jars(system: System, feed: FloatArray) -> None:
    doses = np.array([[250.0, 20, 0, 0], [150, 120, 0, 0], [60, 260, 0, 0], [300, 0, 50, 0]])
    truth = np.array([1.4, 1.1, 1.0, 1.0])
    found = fit_dose_factors(ladder(system, feed, doses, truth), np.ones(4))
    assert [fit_of(f).factor for f in found.fits[:2]] == pytest.approx([1.4, 1.1], rel=1e-4)
    assert "does not move the pH" in found.why[2]


def test_doses_that_move_together_are_not_told_apart(system: System, feed: FloatArray) -> None:
    doses = np.array([[100.0, 100, 0, 0], [110, 110, 0, 0], [120, 120, 0, 0]])
    made = ladder(system, feed, doses, np.array([1.2, 1.2, 1.0, 1.0]))
    one_alkali = vectors(system)
    one_alkali[1] = one_alkali[0]  # the same chemical twice
    same = Bench(
        system=system, feed_mol_per_l=feed, fed_mg_per_l=doses, ph=made.ph,
        vectors_mol_per_mg=one_alkali, moves_ph=made.moves_ph,
    )  # fmt: skip
    found = fit_dose_factors(same, np.ones(4))
    assert found.fits[:2] == (None, None)
    assert "moved together" in found.why[0]
    assert found.factors.tolist() == [1.0, 1.0, 1.0, 1.0]


def test_acid_alone_is_fitted_too(system: System, feed: FloatArray) -> None:
    doses = np.zeros((3, 4))
    doses[:, 3] = [50, 80, 120]
    truth = np.array([1.0, 1.0, 1.0, 1.25])
    found = fit_dose_factors(ladder(system, feed, doses, truth), np.ones(4))
    assert fit_of(found.fits[3]).factor == pytest.approx(1.25, rel=1e-4)


def test_a_jar_that_theory_asks_nothing_of_takes_no_part(system: System, feed: FloatArray) -> None:
    doses = np.zeros((3, 4))
    doses[:, 0] = [300, 330, 300]
    made = ladder(system, feed, doses, np.array([1.2, 1.0, 1.0, 1.0]))
    ph = made.ph.copy()
    ph[2] = 2.0  # below the feed, although lime was dosed
    found = fit_dose_factors(bench(system, feed, doses, ph), np.ones(4))
    assert fit_of(found.fits[0]).factor == pytest.approx(1.2, rel=1e-4)
    assert np.isnan(found.needed[2])
    assert found.needed[:2] == pytest.approx([1 / 1.2] * 2, rel=0.02)


# -- intervals -----------------------------------------------------------------------------------


def coverage_bounds(rate: float) -> tuple[float, float]:
    """Four standard deviations of a binomial share about the stated rate."""
    reach = 4.0 * math.sqrt(rate * (1.0 - rate) / REPETITIONS)
    return rate - reach, rate + reach


@pytest.mark.parametrize("jars", [2, 3, 6, 12])
def test_intervals_of_a_residual_factor_cover_at_the_stated_rate(jars: int) -> None:
    rng = np.random.default_rng(20 + jars)
    truth, held = math.log(2.5), 0
    for _ in range(REPETITIONS):
        found = fit_factor(list(truth + rng.normal(0.0, 0.4, jars)))
        held += found.low <= 2.5 <= found.high
    low, high = coverage_bounds(0.90)
    assert low < held / REPETITIONS < high


@pytest.mark.slow
def test_intervals_of_dose_factors_cover_at_the_stated_rate() -> None:
    small = load_system(25.0, components=("H+", "Na+", "Cl-"))
    acid = np.zeros(3)
    acid[small.index["H+"]] = acid[small.index["Cl-"]] = 0.01
    vector = np.zeros((1, 3))
    vector[0, small.index["Na+"]], vector[0, small.index["H+"]] = 2.5e-5, -2.5e-5
    doses = np.array([[330.0], [360.0], [390.0], [420.0]])
    exact = equilibrate(small, acid + doses / 1.3 @ vector).ph
    rng = np.random.default_rng(11)
    held = 0
    for _ in range(REPETITIONS):
        jars = Bench(
            system=small, feed_mol_per_l=acid, ph=exact, vectors_mol_per_mg=vector,
            fed_mg_per_l=doses * np.exp(rng.normal(0.0, 0.08, (4, 1))), moves_ph=np.array([1]),
        )  # fmt: skip
        fit = fit_of(fit_dose_factors(jars, np.ones(1)).fits[0])
        held += fit.low <= 1.3 <= fit.high
    low, high = coverage_bounds(0.90)
    assert low < held / REPETITIONS < high


def test_the_bound_would_see_normal_quantiles_in_place_of_t() -> None:
    rng = np.random.default_rng(5)
    held = 0
    for _ in range(REPETITIONS):
        ratios = rng.normal(0.0, 0.4, 3)
        held += abs(ratios.mean()) <= 1.6449 * ratios.std(ddof=1) / math.sqrt(3)
    assert held / REPETITIONS < coverage_bounds(0.90)[0]


def test_fewer_jars_make_wider_intervals() -> None:
    width = [
        math.log(f.high / f.low)
        for f in (fit_factor([0.5]), fit_factor([0.3, 0.7]), fit_factor([0.3, 0.7] * 3))
    ]
    assert width[0] > width[1] > width[2]
    assert fit_factor([0.5]).scatter_assumed
    assert not fit_factor([0.3, 0.7]).scatter_assumed


def test_an_interval_that_says_nothing_stays_a_number() -> None:
    found = fit_factor([-200.0 / 7, 200.0 / 7])
    assert (found.low, found.high) == (math.exp(-50.0), math.exp(50.0))


def test_no_ratio_gives_no_factor() -> None:
    with pytest.raises(WaterError, match="at least one ratio"):
        fit_factor([])
    with pytest.raises(WaterError, match="at least one ratio"):
        fit_factor([math.nan])
