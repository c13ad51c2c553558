"""The columns of a price book for people: title, unit, kind of value, meaning and costing.

Owns what a sheet says of every column; how a row is read is `optimiser.offer_rows`, what a term
costs is `optimiser.offer_cost`.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files

from optimiser.offer import (
    LEAST_ORDER_PERIODS,
    PRICE_BASES,
    PRICE_UNITS,
    REBATE_KINDS,
    TIER_KINDS,
    TIER_PERIODS,
)
from optimiser.trade_strength import STRENGTH_WORDS

TEXT, NUMBER, DAY, CHOICE = "text", "number", "date", "choice"

USUAL_FORMS = (
    "solution", "liquid", "slurry", "powder", "granules", "pellets", "flake", "lumps", "pebbles",
    "crystals", "liquefied gas",
)  # fmt: skip
"""Offered in the drop-down of `form`; any other word may be written."""

CHOICES: Mapping[str, tuple[str, ...]] = {
    "form": USUAL_FORMS,
    "strength_as": STRENGTH_WORDS,
    "price_per": PRICE_UNITS,
    "price_for": PRICE_BASES,
    "least_order_per": LEAST_ORDER_PERIODS,
    "tier_kind": TIER_KINDS,
    "tier_per": TIER_PERIODS,
    "rebate_on": REBATE_KINDS,
    "signed": ("yes", "no"),
}
"""Words of the drop-downs; those of `reagent` are the catalog's."""

FREE_CHOICES = frozenset({"form"})


@dataclass(frozen=True, slots=True)
class BookColumn:
    """One column: ``unit`` is empty for texts; ``decimals`` are those shown, not those kept."""

    group: str
    key: str
    title: str
    unit: str
    kind: str
    decimals: int
    width: int
    meaning: str
    costing: str

    @property
    def head(self) -> str:
        """Title with its unit."""
        return f"{self.title} [{self.unit}]" if self.unit else self.title


@lru_cache
def book_columns() -> Mapping[str, BookColumn]:
    """Every column of a price book by key, in the order of a sheet."""
    text = (files("optimiser") / "book_sheet_data" / "columns.csv").read_text(encoding="utf-8")
    rows = csv.DictReader(io.StringIO(text), strict=True)
    return {
        row["key"]: BookColumn(
            **{**row, "decimals": int(row["decimals"]), "width": int(row["width"])}  # type: ignore[arg-type]
        )
        for row in rows
    }
