"""Jar tests of a site held against theory, and the factors that follow.

Owns the comparison: which water was tested, what the equilibrium says at each jar's doses and pH,
and the warnings. The fits are `chemistry.calibration`, the sheet `optimiser.bench_sheet`.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from chemistry.analysis import ANALYTES, Measurement, WaterAnalysis
from chemistry.calibration import (
    CONFIDENCE,
    Bench,
    DoseFit,
    FactorFit,
    fit_dose_factors,
    fit_factor,
)
from chemistry.errors import EquilibriumError, WaterError
from chemistry.feed import ALKALINITY_LEAST_PH, feed_water
from chemistry.samples import Reported
from chemistry.sludge import dry_masses_mg_per_l
from chemistry.state import EquilibriumState
from chemistry.system import System
from optimiser.bench_sheet import BenchSheet, JarTest
from optimiser.jar_file import JarCalibration, Span
from optimiser.jar_warnings import jar_warnings
from optimiser.site import Site
from optimiser.site_feed import STATES_OF_ELEMENT

FloatArray = NDArray[np.float64]

SMALLEST_MG_PER_L = 1e-9
"""Theory below this promises nothing that a laboratory could compare."""
UNTOUCHED_SHARE = 0.98
"""Where theory leaves this much of a metal in solution, no solid says what its residual is."""
JARS_FOR_A_FLOOR = 3


@dataclass(frozen=True, eq=False, kw_only=True)
class JarResult:
    """Jars beside theory, and what was fitted.

    ``predicted`` holds, by metal, the dissolved amount of each dosed jar by theory at the fitted
    doses; ``needed`` the dose of pH-moving reagents that theory asks for over the one fed (nan
    where the pH says nothing); ``sludge_mg_per_l`` the dry solids of theory.
    """

    site_name: str
    jars: tuple[JarTest, ...]
    raw: tuple[JarTest, ...]
    predicted: Mapping[str, FloatArray]
    needed: FloatArray
    sludge_mg_per_l: FloatArray
    sludge_factor: FactorFit | None
    not_fitted: Mapping[str, str]
    calibration: JarCalibration
    warnings: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """Everything as plain data, what ``--json`` prints."""
        made = self.calibration
        return {
            "site": self.site_name,
            "results": made.results,
            "confidence": made.confidence,
            "jars": [self._row(i, jar) for i, jar in enumerate(self.jars)],
            "dose_factors": {name: _fit_data(fit) for name, fit in made.dose_factors.items()},
            "not_fitted": dict(self.not_fitted),
            "residual_factors": {n: _fit_data(fit) for n, fit in made.residual_factors.items()},
            "sludge_factor": None if self.sludge_factor is None else _fit_data(self.sludge_factor),
            "floors_mg_per_l": dict(made.floors_mg_per_l),
            "tested": {
                "ph": [made.ph.low, made.ph.high],
                "doses_mg_per_l": {n: [s.low, s.high] for n, s in made.doses_mg_per_l.items()},
                "feed_mg_per_l": dict(made.feed_mg_per_l),
            },
            "warnings": list(self.warnings),
        }

    def _row(self, i: int, jar: JarTest) -> dict[str, Any]:
        needed = float(self.needed[i])
        return {
            "test": jar.name, "day": jar.day.isoformat(), "ph": jar.ph,
            "temperature_degc": jar.temperature_degc,
            "doses_mg_per_l": dict(jar.doses_mg_per_l),
            "theory_over_fed": None if math.isnan(needed) else needed,
            "metals": [
                {
                    "metal": metal,
                    "filtered_mg_per_l": jar.filtered[metal].value,
                    "below_reporting_limit": jar.filtered[metal].is_below,
                    "unfiltered_mg_per_l": jar.unfiltered[metal].value
                    if metal in jar.unfiltered else None,
                    "theory_mg_per_l": float(theory[i]),
                    "ratio": jar.filtered[metal].value / max(float(theory[i]), SMALLEST_MG_PER_L),
                }
                for metal, theory in self.predicted.items()
                if metal in jar.filtered
            ],
            "sludge_mg_per_l": jar.sludge_mg_per_l,
            "theory_sludge_mg_per_l": float(self.sludge_mg_per_l[i]),
        }  # fmt: skip


def _fit_data(fit: FactorFit) -> dict[str, Any]:
    return {
        "factor": fit.factor, "low": fit.low, "high": fit.high, "scatter_ln": fit.scatter_ln,
        "jars": fit.jars, "scatter_assumed": fit.scatter_assumed,
    }  # fmt: skip


def compare_jars(site: Site, sheet: BenchSheet, *, confidence: float = CONFIDENCE) -> JarResult:
    """Hold jar tests against the equilibrium and fit the factors.

    Parameters
    ----------
    site
        Whose system, reagents and practical floors are used.
    sheet
        The bench results; at least one jar has a dose.
    confidence
        Of the intervals.

    Raises
    ------
    WaterError
        The raw water cannot be closed, or no water has the doses and the pH of a jar.

    Notes
    -----
    Jars without a dose are the raw water: their metals and pH stand in for the site's. Reacting
    doses follow from the fitted dose factors (`chemistry.calibration`), the catalog's where none
    could be fitted. Results below a reporting limit take no part in a fit, nor do jars in which
    theory precipitates nothing of the metal. A floor comes from the third lowest unfiltered result.
    """
    raw = tuple(jar for jar in sheet.jars if jar.is_raw)
    jars = tuple(jar for jar in sheet.jars if not jar.is_raw)
    analysis = _tested_water(site.analysis, raw)
    feed = feed_water(analysis, site.system)
    names = tuple(dict.fromkeys(n for jar in jars for n in jar.doses_mg_per_l))
    bench, given = _bench(site, feed.totals_mol_per_l, jars, names)
    doses, state = _theory(bench, given, confidence)
    metals = tuple(dict.fromkeys(m for jar in jars for m in jar.filtered))
    predicted = {metal: _dissolved(state, site.system, metal) for metal in metals}
    residual = {}
    for metal in metals:
        ratios = _ln_ratios(jars, metal, predicted[metal], _in_feed(analysis, metal))
        if ratios:
            residual[metal] = fit_factor(ratios, confidence=confidence)
    sludge = _sludge(site, state, analysis, jars, names, doses)
    floors = _floors(site, jars)
    calibration = JarCalibration(
        results=sheet.name.replace("\\", "/").rsplit("/", 1)[-1],
        first_day=min(jar.day for jar in jars).isoformat(),
        last_day=max(jar.day for jar in jars).isoformat(),
        jars=len(jars), confidence=confidence, ph=_span([jar.ph for jar in jars]),
        dose_factors={n: f for n, f in zip(names, doses.fits, strict=True) if f is not None},
        residual_factors=residual, floors_mg_per_l=floors,
        doses_mg_per_l={
            n: _span([d for jar in jars if (d := jar.doses_mg_per_l.get(n, 0.0)) > 0.0])
            for n in names if any(jar.doses_mg_per_l.get(n) for jar in jars)
        },
        feed_mg_per_l={m: _in_feed(analysis, m) for m in metals},
        temperature_degc=_temperatures(jars),
    )  # fmt: skip
    return JarResult(
        site_name=site.name, jars=jars, raw=raw, predicted=predicted, needed=doses.needed,
        sludge_mg_per_l=sludge, sludge_factor=_sludge_factor(jars, sludge, confidence),
        not_fitted={n: why for n, why in zip(names, doses.why, strict=True) if why},
        calibration=calibration,
        warnings=tuple(
            jar_warnings(
                site, sheet, calibration,
                {metal: _in_feed(site.analysis, metal) for metal in metals},
                {
                    metal: [
                        jar.name
                        for jar, amount in zip(jars, predicted[metal], strict=True)
                        if amount >= UNTOUCHED_SHARE * _in_feed(analysis, metal)
                    ]
                    for metal in metals
                },
            )
        ),
    )  # fmt: skip


# -- the water and the doses ---------------------------------------------------------------------


def _tested_water(analysis: WaterAnalysis, raw: Sequence[JarTest]) -> WaterAnalysis:
    """The site's analysis with what was measured in the raw water of the tests."""
    if not raw:
        return analysis
    measurements = dict(analysis.measurements)
    for name in measurements:
        dissolved = [jar.filtered[name] for jar in raw if name in jar.filtered]
        total = [jar.unfiltered[name] for jar in raw if name in jar.unfiltered] or dissolved
        dissolved = dissolved or total
        if dissolved:
            measurements[name] = _measured(dissolved, total)
    ph = float(np.mean([jar.ph for jar in raw]))
    alkalinity = analysis.alkalinity_mg_per_l_as_caco3 if ph >= ALKALINITY_LEAST_PH else None
    return replace(
        analysis, measurements=measurements, ph=ph, acidity_meq_per_l=None, titration=(),
        alkalinity_mg_per_l_as_caco3=alkalinity,
    )  # fmt: skip


def _measured(dissolved: Sequence[Reported], total: Sequence[Reported]) -> Measurement:
    low = float(np.mean([value.value for value in dissolved]))
    high = max(float(np.mean([value.value for value in total])), low)
    return Measurement(
        dissolved_mg_per_l=low, total_mg_per_l=high,
        below_reporting_limit=all(value.is_below for value in dissolved),
        as_written=f"{low:.4g} mg/L in the raw water of the jar tests",
    )  # fmt: skip


def _bench(
    site: Site, feed: FloatArray, jars: Sequence[JarTest], names: Sequence[str]
) -> tuple[Bench, FloatArray]:
    """The jars as arrays, and the dose factors of the catalog."""
    index = site.system.index
    vectors = np.zeros((len(names), len(site.system.components)))
    for i, name in enumerate(names):
        for component, moles in site.reagents[name].components.items():
            vectors[i, index[component]] = moles / 1000.0 / site.reagents[name].molar_mass_g_per_mol
    control = {"up": 1, "down": -1}
    bench = Bench(
        system=site.system, feed_mol_per_l=feed, vectors_mol_per_mg=vectors,
        fed_mg_per_l=np.array([[jar.doses_mg_per_l.get(n, 0.0) for n in names] for jar in jars]),
        moves_ph=np.array([control.get(site.reagents[n].ph_control, 0) for n in names]),
        ph=np.array([jar.ph for jar in jars]),
    )  # fmt: skip
    return bench, np.array([site.reagents[n].dose_factor for n in names])


def _theory(bench: Bench, given: FloatArray, confidence: float) -> tuple[DoseFit, EquilibriumState]:
    try:
        doses = fit_dose_factors(bench, given, confidence=confidence)
        return doses, bench.settled(doses.factors)
    except EquilibriumError as error:
        raise WaterError(
            "theory finds no water with the doses and the pH of every jar; look for a wrong unit or"
            f" pH in the bench sheet ({error})"
        ) from error


# -- theory --------------------------------------------------------------------------------------


def _dissolved(state: EquilibriumState, system: System, metal: str) -> FloatArray:
    """Dissolved amount of a metal in every jar. [mg/L]"""
    found = np.zeros(len(state.ph))
    for part in STATES_OF_ELEMENT.get(metal, (metal,)):
        column = system.index.get(ANALYTES[part].component)
        if column is not None:
            mass = 1000.0 * ANALYTES[part].molar_mass_g_per_mol
            found = found + state.dissolved_mol_per_l[:, column] * mass
    return np.asarray(found)


def _ln_ratios(
    jars: Sequence[JarTest], metal: str, predicted: FloatArray, feed_mg_per_l: float
) -> list[float]:
    """Logarithms of measured over theory, of jars in which theory precipitates the metal."""
    return [
        math.log(jar.filtered[metal].value / max(float(theory), SMALLEST_MG_PER_L))
        for jar, theory in zip(jars, predicted, strict=True)
        if metal in jar.filtered
        and not jar.filtered[metal].is_below
        and jar.filtered[metal].value > 0.0
        and theory < UNTOUCHED_SHARE * feed_mg_per_l
    ]


def _in_feed(analysis: WaterAnalysis, metal: str) -> float:
    parts = STATES_OF_ELEMENT.get(metal, (metal,))
    found = [analysis.measurements[p] for p in parts if p in analysis.measurements]
    return sum(value.dissolved_mg_per_l for value in found)


def _sludge(
    site: Site, state: EquilibriumState, analysis: WaterAnalysis, jars: Sequence[JarTest],
    names: Sequence[str], doses: DoseFit,
) -> FloatArray:  # fmt: skip
    """Dry solids of every jar: formed, of the feed, and slurry that did not react. [mg/L]"""
    formed = dry_masses_mg_per_l(
        state.solids_mol_per_l, site.system, bound_water_factor=site.disposal.bound_water_factor
    ).sum(axis=1)
    unreacted = np.zeros(len(jars))
    for name, factor in zip(names, doses.factors, strict=True):
        if site.reagents[name].is_slurry and factor > 1.0:
            fed = np.array([jar.doses_mg_per_l.get(name, 0.0) for jar in jars])
            unreacted = unreacted + fed * (1.0 - 1.0 / factor)
    return np.asarray(formed + unreacted + analysis.tss_mg_per_l)


def _sludge_factor(
    jars: Sequence[JarTest], theory: FloatArray, confidence: float
) -> FactorFit | None:
    ratios = [
        math.log(jar.sludge_mg_per_l / value)
        for jar, value in zip(jars, theory, strict=True)
        if jar.sludge_mg_per_l and value > 0.0
    ]
    return fit_factor(ratios, confidence=confidence) if ratios else None


def _floors(site: Site, jars: Sequence[JarTest]) -> dict[str, float]:
    """Totals that at least three jars reached, where they are below every practical floor."""
    found = {}
    for metal, families in site.floors_mg_per_l.items():
        reached = sorted(jar.unfiltered[metal].value for jar in jars if metal in jar.unfiltered)
        if len(reached) < JARS_FOR_A_FLOOR or not families:
            continue
        shown = reached[JARS_FOR_A_FLOOR - 1]
        if 0.0 < shown < max(families.values()):
            found[metal] = shown
    return found


def _span(values: Sequence[float]) -> Span:
    return Span(low=min(values), high=max(values))


def _temperatures(jars: Sequence[JarTest]) -> Span | None:
    known = [jar.temperature_degc for jar in jars if jar.temperature_degc is not None]
    return _span(known) if known else None
