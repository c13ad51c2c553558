"""The lines of a plan on the separators that were to choose from, written from the plan's data."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import given, money, number, table

Data = Mapping[str, Any]


def separator_lines(data: Data) -> list[str]:
    """What the cheapest plan with each separator costs; nothing where there was no choice."""
    rows = data.get("separators", [])
    if not rows:
        return []
    best = data["cost"]["total"]
    cells = [
        [
            str(row["separator"]), given(row["tss_mg_per_l"]), money(row["cost_per_year"]),
            ", ".join(str(name).replace("_", " ") for name in row["reagents"]) or "no plan",
            "" if row["ph_set_point"] is None else number(row["ph_set_point"]),
            "" if row["total"] is None else money(row["total"]),
            "" if row["total"] is None else _against(row["total"], best),
        ]
        for row in rows
    ]  # fmt: skip
    headers = ["separator", "TSS\nmg/L", "its cost\na year", "cheapest recipe with it",
               "pH set\npoint", "total\na year", "against\nthe plan"]  # fmt: skip
    return table(headers, cells, text_columns=(0, 3))


def _against(total: float, best: float) -> str:
    change = 100.0 * (total / best - 1.0)
    return "the plan" if abs(change) < 5e-3 else f"{change:+.1f} %"
