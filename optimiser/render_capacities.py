"""The lines of a plan on pumps, feeders and stores, written from the plan's data."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import Ink, number, paragraph, table

Data = Mapping[str, Any]


def capacity_lines(data: Data, ink: Ink) -> list[str]:
    """Average and peak rates of each product, days of stock, and what does not fit.

    Nothing where the site says neither a peak flow nor what is installed.
    """
    rows = data["capacities"]
    known = [row for row in rows if row["problems"] or row["days_of_stock"] is not None]
    peaks = any(row["peak_l_per_h"] > 1.3 * row["average_l_per_h"] for row in rows)
    if not known and not peaks:
        return []
    cells = [
        [
            str(row["key"]).replace("_", " "), str(row["offer"]), number(row["least_l_per_h"]),
            number(row["average_l_per_h"]), number(row["peak_l_per_h"]),
            number(row["peak_kg_per_h"]),
            "" if row["days_of_stock"] is None else number(row["days_of_stock"], 2),
        ]
        for row in rows
    ]  # fmt: skip
    headers = ["reagent", "offer", "least\nL/h", "average\nL/h", "peak\nL/h", "peak\nkg/h",
               "days of\nstock"]  # fmt: skip
    lines = table(headers, cells, text_columns=(0, 1))
    for row in rows:
        for problem in row["problems"]:
            name = str(row["key"]).replace("_", " ")
            lines += [ink.bad(line) for line in paragraph(f"{name}: {problem}.")]
    return lines
