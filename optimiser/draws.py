"""Draws of what is not known for sure about a site: constants, analysis, carried solids, jar tests.

Owns the sampling; what a draw does to a plan is `optimiser.chances`.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np

from catalogs.constant_ranges import ConstantSpread, constant_spreads
from chemistry.analysis import Measurement, WaterAnalysis
from optimiser.site import Separator, Site

CONSTANTS, ANALYSIS, CARRY_OVER = "constants", "analysis", "carried solids"


@dataclass(frozen=True, slots=True)
class Draw:
    """One draw as standard normal numbers: by group of constants, by analyte, and for the floc.

    ``site`` is the problem as it would be if the draw were the truth.
    """

    constants: Mapping[str, float]
    analysis: Mapping[str, float]
    carried: float
    site: Site


def draw_sites(site: Site, count: int, seed: int) -> Iterator[Draw]:
    """Sample a site's unknowns; the same seed gives the same draws.

    Every constant group, analyte, pH and the separator's solids get an independent standard normal
    number. Constants move within their published range (`catalogs.constant_ranges`), analyses and
    separator solids by the lognormal spreads of `Site.uncertainty`, the pH by its normal one.
    """
    generator = np.random.default_rng(seed)
    spreads = constant_spreads(site.system)
    groups = tuple(dict.fromkeys(s.group for s in spreads))
    analytes = tuple(site.analysis.measurements)
    for _ in range(count):
        by_group = dict(zip(groups, generator.standard_normal(len(groups)), strict=True))
        by_analyte = dict(zip(analytes, generator.standard_normal(len(analytes)), strict=True))
        by_analyte["pH"], by_analyte["acid"] = generator.standard_normal(2)
        carried = float(generator.standard_normal())
        yield Draw(
            by_group, by_analyte, carried, _drawn(site, spreads, by_group, by_analyte, carried)
        )


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
