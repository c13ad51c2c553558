"""Figures on sludge: densities of solids, classes for disposal, leaching thresholds, cake.

Owns what is known of sludge in general; the rules and tariffs that a site is charged by belong to
the site.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType
from typing import Any

from catalogs.packaged import read_rows, read_tree

# The leaching test takes twenty parts of liquid to one of solid by mass (US EPA method 1311, from
# memory).
LEACHING_LIQUID_PER_SOLID = 20.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SolidDensity:
    """Density and molar mass of a solid of the catalog, dry."""

    solid: str
    density_kg_per_l: float
    molar_mass_g_per_mol: float
    source: str
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class DisposalClass:
    """A class of sludge, with the range of tariffs seen in trade, per wet tonne."""

    sludge_class: str
    name: str
    description: str
    tariff_low_per_wet_t: float
    tariff_high_per_wet_t: float
    source: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LeachingThreshold:
    """Concentration in the leachate that makes a waste hazardous for a metal."""

    metal: str
    threshold_mg_per_l: float
    source: str

    @property
    def screening_mg_per_kg(self) -> float:
        """Total content below which the threshold cannot be reached. [mg/kg of waste]"""
        return self.threshold_mg_per_l * LEACHING_LIQUID_PER_SOLID


@dataclass(frozen=True, slots=True, kw_only=True)
class CakeFigure:
    """A property of thickened sludge or press cake: its range and the usual value."""

    figure: str
    low: float
    usual: float
    high: float
    source: str


@lru_cache(maxsize=1)
def solid_densities() -> Mapping[str, SolidDensity]:
    """Density of every solid of the catalog, by name.

    Examples
    --------
    >>> solid_densities()["CaSO4.2H2O(s)"].density_kg_per_l
    2.32
    """
    return MappingProxyType(
        {
            row["solid"]: SolidDensity(
                solid=row["solid"],
                density_kg_per_l=float(row["density_kg_per_l"]),
                molar_mass_g_per_mol=float(row["molar_mass_g_per_mol"]),
                source=row["source"],
                note=row["note"],
            )
            for row in read_rows("solid_densities.csv")
        }
    )


@lru_cache(maxsize=1)
def _disposal() -> Mapping[str, Any]:
    return MappingProxyType(read_tree("disposal_classes.yaml"))


@lru_cache(maxsize=1)
def disposal_classes() -> Mapping[str, DisposalClass]:
    """Classes of sludge by id, in the order of the file."""
    return MappingProxyType(
        {
            name: DisposalClass(
                sludge_class=name,
                name=row["name"],
                description=row["description"],
                tariff_low_per_wet_t=float(row["tariff_low_per_wet_t"]),
                tariff_high_per_wet_t=float(row["tariff_high_per_wet_t"]),
                source=row["source"],
            )
            for name, row in _disposal()["classes"].items()
        }
    )


@lru_cache(maxsize=1)
def leaching_thresholds() -> Mapping[str, LeachingThreshold]:
    """Leaching thresholds by metal.

    Examples
    --------
    >>> leaching_thresholds()["Pb"].screening_mg_per_kg
    100.0
    """
    return MappingProxyType(
        {
            row["metal"]: LeachingThreshold(
                metal=row["metal"],
                threshold_mg_per_l=float(row["threshold_mg_per_l"]),
                source=row["source"],
            )
            for row in _disposal()["leaching_thresholds"]
        }
    )


@lru_cache(maxsize=1)
def cake_figures() -> Mapping[str, CakeFigure]:
    """Properties of thickened sludge and press cake, by name."""
    return MappingProxyType(
        {
            row["figure"]: CakeFigure(
                figure=row["figure"],
                low=float(row["low"]),
                usual=float(row["usual"]),
                high=float(row["high"]),
                source=row["source"],
            )
            for row in _disposal()["cake"]
        }
    )
