"""The feed: from a water analysis to component totals that are electroneutral."""

from __future__ import annotations

from chemistry.analysis import (
    ANALYTES,
    METALS,
    Analyte,
    Measurement,
    WaterAnalysis,
    analyte_of,
    component_of,
)

__all__ = [
    "ANALYTES",
    "METALS",
    "Analyte",
    "Measurement",
    "WaterAnalysis",
    "analyte_of",
    "component_of",
]
