"""Draws of what is not known for sure about a site: constants, analysis, carried solids, jar tests.

Owns the sampling; what a draw does to a plan is `optimiser.chances`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from statistics import NormalDist

import numpy as np

from catalogs.constant_ranges import ConstantSpread, constant_spreads
from chemistry.analysis import Measurement, WaterAnalysis
from chemistry.calibration import FactorFit
from optimiser.site import Separator, Site
from optimiser.site_jar import fitted_dose_factors

CONSTANTS, ANALYSIS, CARRY_OVER, JAR = "constants", "analysis", "carried solids", "jar tests"
RESIDUAL, DOSE = "residual factor of ", "dose factor of "
MOST_CONFIDENCE = 0.9999  # of an interval: beyond it the spread would follow from rounding


@dataclass(frozen=True, slots=True)
class Draw:
    """One draw as standard normal numbers: by group of constants, by analyte, and for the floc.

    ``site`` is the problem as it would be if the draw were the truth; ``jar`` has a number for
    every factor of jar tests.
    """

    constants: Mapping[str, float]
    analysis: Mapping[str, float]
    carried: float
    site: Site
    jar: Mapping[str, float] = field(default_factory=dict)


def draw_sites(site: Site, count: int, seed: int) -> Iterator[Draw]:
    """Sample a site's unknowns; the same seed gives the same draws.

    Every constant group, analyte, pH and the separator's solids get an independent standard normal
    number. Constants move within their published range (`catalogs.constant_ranges`), analyses and
    separator solids by the lognormal spreads of `Site.uncertainty`, the pH by its normal one.
    Factors of jar tests are lognormal with their interval at its confidence, apart from the
    constants although they were fitted beside them: rather too wide than too narrow.
    """
    generator = np.random.default_rng(seed)
    spreads = constant_spreads(site.system)
    groups = tuple(dict.fromkeys(s.group for s in spreads))
    analytes = tuple(site.analysis.measurements)
    factors = _fits(site)
    for _ in range(count):
        by_group = dict(zip(groups, generator.standard_normal(len(groups)), strict=True))
        by_analyte = dict(zip(analytes, generator.standard_normal(len(analytes)), strict=True))
        by_analyte["pH"], by_analyte["acid"] = generator.standard_normal(2)
        carried = float(generator.standard_normal())
        by_factor = dict(zip(factors, generator.standard_normal(len(factors)), strict=True))
        drawn = _drawn(site, spreads, by_group, by_analyte, carried)
        yield Draw(by_group, by_analyte, carried, _with_factors(drawn, by_factor), by_factor)


def _drawn(
    site: Site, spreads: tuple[ConstantSpread, ...], by_group: Mapping[str, float],
    by_analyte: Mapping[str, float], carried: float,
) -> Site:  # fmt: skip
    moves = {s.name: _move(s, by_group[s.group]) for s in spreads}
    unsure = site.uncertainty
    separator = _separator(site.treatment.separator, unsure.carried_solids_percent, carried)
    return replace(
        site,
        system=site.system.moved_constants(moves),
        analysis=_analysis(site.analysis, unsure.analysis_percent, unsure.ph, by_analyte),
        treatment=replace(site.treatment, separator=separator),
    )


def _move(spread: ConstantSpread, number: float) -> float:
    return number * (spread.up_log10 if number > 0.0 else spread.down_log10)


def _fits(site: Site) -> dict[str, FactorFit]:
    """Fitted factors that the site plans with; a dose factor of the site file is no fit."""
    if site.jar is None:
        return {}
    fits = {f"{RESIDUAL}{metal}": fit for metal, fit in site.jar.residual_factors.items()}
    planned = fitted_dose_factors(site.jar, site.treatment)
    return fits | {
        f"{DOSE}{name}": site.jar.dose_factors[name]
        for name, factor in planned.items()
        if site.treatment.dose_factors.get(name) == factor
    }


def _with_factors(site: Site, numbers: Mapping[str, float]) -> Site:
    """The site with every factor of its jar tests moved within its interval."""
    if site.jar is None or not numbers:
        return site
    z = NormalDist().inv_cdf(0.5 + 0.5 * min(site.jar.confidence, MOST_CONFIDENCE))

    def moved(kind: str, fits: Mapping[str, FactorFit]) -> dict[str, FactorFit]:
        return {
            name: replace(fit, factor=_moved(fit, numbers[kind + name] / z))
            if kind + name in numbers else fit
            for name, fit in fits.items()
        }  # fmt: skip

    jar = replace(
        site.jar, residual_factors=moved(RESIDUAL, site.jar.residual_factors),
        dose_factors=moved(DOSE, site.jar.dose_factors),
    )  # fmt: skip
    drawn = fitted_dose_factors(jar, site.treatment)
    doses = {
        name: drawn[name] if DOSE + name in numbers else factor
        for name, factor in site.treatment.dose_factors.items()
    }
    return replace(site, jar=jar, treatment=replace(site.treatment, dose_factors=doses))


def _moved(fit: FactorFit, share: float) -> float:
    """Factor at a share of the way, in the logarithm, to an end of its interval."""
    end = fit.high if share > 0.0 else fit.low
    return float(fit.factor * np.exp(abs(share) * np.log(end / fit.factor)))


def _factor(percent: float, number: float) -> float:
    """Lognormal factor of a relative standard deviation, median 1."""
    return float(np.exp(number * np.sqrt(np.log1p((percent / 100.0) ** 2))))


def _analysis(
    analysis: WaterAnalysis, percent: float, ph_deviation: float, numbers: Mapping[str, float]
) -> WaterAnalysis:
    measured = {
        name: _measured(value, _factor(percent, numbers[name]))
        for name, value in analysis.measurements.items()
    }
    acid = _factor(percent, numbers["acid"])
    ph, acidity = analysis.ph, analysis.acidity_meq_per_l
    return replace(
        analysis,
        measurements=measured,
        ph=None if ph is None else float(np.clip(ph + ph_deviation * numbers["pH"], 0.0, 14.0)),
        acidity_meq_per_l=None if acidity is None else acidity * acid,
        titration=tuple((base * acid, at) for base, at in analysis.titration),
    )


def _measured(value: Measurement, factor: float) -> Measurement:
    return replace(
        value,
        dissolved_mg_per_l=value.dissolved_mg_per_l * factor,
        total_mg_per_l=value.total_mg_per_l * factor,
    )


def _separator(separator: Separator, percent: float, number: float) -> Separator:
    """More or fewer solids slip past: TSS by the factor, and what is not captured."""
    factor = _factor(percent, number)
    lost = min(1.0, (1.0 - separator.capture_fraction) * factor)
    return replace(
        separator, tss_mg_per_l=separator.tss_mg_per_l * factor, capture_fraction=1.0 - lost
    )
