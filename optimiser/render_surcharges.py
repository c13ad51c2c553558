"""The section on surcharges: what is discharged of each parameter and what the sewer charges."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import given, money, number, table


def surcharge_lines(data: Mapping[str, Any]) -> list[str]:
    """Lines of the section; none where nothing is charged per kilogram.

    Parameters
    ----------
    data
        ``Plan.to_dict()``.
    """
    currency = data["site"]["currency"]
    rows = [
        [
            str(row["parameter"]), number(row["mean_mg_per_l"]), given(row["free_mg_per_l"]),
            number(row["charged_kg_per_year"]), given(row["rate_per_kg"]),
            money(row["cost_per_year"]), str(row["source"]),
        ]
        for row in data.get("surcharges", ())
    ]  # fmt: skip
    if not rows:
        return []
    headers = ["what", "mean\nmg/L", "free\nmg/L", "charged\nkg/year", f"{currency}\nper kg",
               f"{currency}\na year", "source"]  # fmt: skip
    return table(headers, rows, text_columns=(0, 6))
