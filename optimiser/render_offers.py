"""The text of a comparison of offers, written from the dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from optimiser.tables import PLAIN, Ink, money, number, paragraph, table

Data = Mapping[str, Any]


def offers_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write the ranking of offers and the cheapest purchase.

    Parameters
    ----------
    data
        ``OfferComparison.to_dict()``.
    ink
        Colours, none by default.
    """
    currency, best = data["currency"], data["best"]
    total = money(best["cost"]["total"])
    lines = [ink.heading(f"{data['site']}: {currency} {total} a year buys {data['demand_from']}")]
    lines += paragraph(
        "Every offer as if it covered the year's demand of its reagent alone, cheapest first; no "
        "chemistry is computed. Costs are all-in: goods, freight, and under `other` what a "
        "take-or-pay charges for goods not taken, fees and rebates."
    )
    for reagent, rows in data["ranking"].items():
        need = number(data["demand_kg_pure_per_year"][reagent] / 1000.0)
        lines += ["", ink.heading(f"{reagent.replace('_', ' ')}: {need} t pure a year")]
        lines += _ranking(rows)
    lines += ["", ink.heading("Cheapest purchase of all, bundles, frameworks and shares counted")]
    lines += table(_BOUGHT, [_bought(buy) for buy in best["buys"]], text_columns=(0, 1, 2))
    lines += ["", ink.heading("Where the money goes")]
    lines += _where(best)
    lines += [line for note in data["notes"] for line in ["", *paragraph(f"{note}.")]]
    return "\n".join(lines) + "\n"


_BOUGHT = [
    "offer", "supplier", "product", "bought\nt/year", "surplus\nt/year", "tier", "orders\n/year",
    "a year",
]  # fmt: skip
_MOST_COLUMNS = 11


def _ranking(rows: Sequence[Data]) -> list[str]:
    """A table of offers; columns that say nothing, and the last ones of many, are left out."""
    columns: list[tuple[str, Callable[[Data], str], bool]] = [
        ("offer", lambda row: str(row["offer"]), True),
        ("supplier", _supplier, True),
        ("bought\nt/year", lambda row: number(row["bought_t_per_year"]), True),
        ("surplus\nt/year", lambda row: number(row["surplus_t_per_year"]),
         any(row["surplus_t_per_year"] for row in rows)),
        ("tier", lambda row: str(row["tier"] or "-"), any((row["tier"] or 1) > 1 for row in rows)),
        ("orders\n/year", lambda row: number(row["orders_per_year"]),
         any(row["orders_per_year"] for row in rows)),
        ("goods", lambda row: _money(row["goods_per_year"]), True),
        ("freight", lambda row: _money(row["freight_per_year"]), True),
        ("other", lambda row: _money(row["other_per_year"]),
         any(row["other_per_year"] for row in rows)),
        ("a year", lambda row: _money(row["cost_per_year"]), True),
        ("dearer\nby", lambda row: _money(row["dearer_than_best_per_year"]), True),
        ("per\nmol", lambda row: number(row["cost_per_mol"]), True),
        ("per kg\npure", lambda row: number(row["cost_per_kg_pure"]), True),
    ]  # fmt: skip
    shown = [(header, cell) for header, cell, useful in columns if useful][:_MOST_COLUMNS]
    cells = [[cell(row) for _, cell in shown] for row in rows]
    return table([header for header, _ in shown], cells, text_columns=(0, 1))


def _supplier(row: Data) -> str:
    if row["cost_per_year"] is not None:
        return str(row["supplier"])
    return f"{row['supplier']}: covers {100.0 * row['covers_fraction']:.0f} % of the demand"


def _money(value: float | None) -> str:
    return "-" if value is None else money(value)


def _bought(buy: Data) -> list[str]:
    return [
        str(buy["offer"]),
        str(buy["supplier"]),
        str(buy["product"]),
        number(buy["bought_t_per_year"]),
        number(buy["surplus_t_per_year"]),
        str(buy["tier"]),
        number(buy["orders_per_year"]),
        money(buy["cost_per_year"]),
    ]


def _where(best: Data) -> list[str]:
    cost = dict(best["cost"])
    total = cost.pop("total")
    rows = [
        [cause, money(value), f"{100.0 * value / total:.1f} %" if total else "-"]
        for cause, value in cost.items()
        if value
    ]
    rows.append(["total", money(total), ""])
    lines = table(["cause", "a year", "share"], rows, last_is_total=True)
    if best["per_kg_metal_removed"] is not None:
        per_kg = number(best["per_kg_metal_removed"])
        lines += ["", *paragraph(f"{per_kg} for every kg of metal taken out of the water.")]
    return lines
