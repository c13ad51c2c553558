"""Published limit sets that a site may name, with their daily and monthly columns.

Owns the figures and their sources; what a plan makes of them (margin, variability) belongs to the
optimiser.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from types import MappingProxyType
from typing import Any

from catalogs.packaged import CatalogDataError, read_tree


@dataclass(frozen=True, slots=True, kw_only=True)
class SetLimit:
    """One row of a set: the ceilings on the total of one parameter, None where none is given.

    ``parameter`` is an analyte, or ``Cr`` for total chromium, ``CN`` for total cyanide, ``TSS``.
    """

    parameter: str
    daily_mg_per_l: float | None
    monthly_mg_per_l: float | None
    source: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitSet:
    """A named set of limits; ``not_covered`` says what its source demands beyond the rows."""

    limit_set: str
    title: str
    limits: tuple[SetLimit, ...]
    ph_low: float | None
    ph_source: str
    not_covered: tuple[str, ...]
    source: str
    note: str


@lru_cache(maxsize=1)
def _limit_sets() -> Mapping[str, LimitSet]:
    tree = read_tree("limit_sets.yaml")
    return MappingProxyType({name: _limit_set(name, row) for name, row in tree.items()})


def load_limit_sets() -> dict[str, LimitSet]:
    """Every limit set of the catalog by id.

    Examples
    --------
    >>> cadmium = load_limit_sets()["metal_finishing_new"].limits[0]
    >>> cadmium.parameter, cadmium.daily_mg_per_l, cadmium.monthly_mg_per_l
    ('Cd', 0.11, 0.07)
    """
    return dict(_limit_sets())


def _limit_set(name: str, row: dict[str, Any]) -> LimitSet:
    ph_low = row.get("ph_low")
    return LimitSet(
        limit_set=name,
        title=row["title"],
        limits=tuple(_limit(name, limit, row["source"]) for limit in row["limits"]),
        ph_low=None if ph_low is None else float(ph_low),
        ph_source=row.get("ph_source", ""),
        not_covered=tuple(row["not_covered"]),
        source=row["source"],
        note=row["note"],
    )


def _limit(name: str, row: dict[str, Any], source: str) -> SetLimit:
    unknown = set(row) - {"parameter", "daily_mg_per_l", "monthly_mg_per_l"}
    daily, monthly = row.get("daily_mg_per_l"), row.get("monthly_mg_per_l")
    if unknown or (daily is None and monthly is None):
        raise CatalogDataError(f"limit_sets.yaml: {name}: {row} is no limit")
    return SetLimit(
        parameter=row["parameter"],
        daily_mg_per_l=None if daily is None else float(daily),
        monthly_mg_per_l=None if monthly is None else float(monthly),
        source=source,
    )
