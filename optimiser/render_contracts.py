"""The text of a comparison of contracts, written from the dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from optimiser.tables import PLAIN, Ink, money, number, paragraph, table

Data = Mapping[str, Any]
Column = tuple[str, Callable[[Data], str], bool]


def contracts_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write the table for the meeting, the recipes behind it and what it rests on.

    Parameters
    ----------
    data
        ``ContractComparison.to_dict()``.
    ink
        Colours, none by default.
    """
    currency, best, rows = data["currency"], data["best"], data["candidates"]
    lines = [ink.heading(f"{data['site']}: what each contract would cost, {currency} a year")]
    lines += paragraph(_opening(data))
    found = [row for row in rows if row["total"] is not None]
    lines += ["", *_table(data, [best, *found])]
    lines += ["", ink.heading("Recipes")]
    lines += table(
        ["contract", "terms", "set point", "doses, mg/L pure", "bought\nt/year"],
        [_recipe(row) for row in [best, *found]], text_columns=(0, 1, 3),
    )  # fmt: skip
    for row in rows:
        if row["total"] is None:
            lines += ["", *paragraph(f"{_name(row)}: not compared, {row['why']}.")]
    lines += ["", *paragraph(f"Searched: {data['scope']}.")]
    lines += [line for note in data["notes"] for line in paragraph(f"{note}.")]
    return "\n".join(lines) + "\n"


def _opening(data: Data) -> str:
    today, last = data["today"], data["last_year_bill"]
    parts = [
        "For each contract the cheapest plan that the equilibrium confirms, if it were signed: what"
        " it obliges to is due, and an offer that obliges to nothing supplies all of its reagent."
    ]
    if today is not None:
        verdict = "meet" if today["compliant"] else "do NOT meet"
        parts.append(
            f"Today's doses cost {money(today['total'])} a year by the same rules and {verdict} "
            "every limit; savings are against them."
        )
    if last is not None:
        parts.append(f"Last year's bill for reagents was {money(last)}.")
    return " ".join(parts)


def _table(data: Data, rows: Sequence[Data]) -> list[str]:
    years = f"over\n{data['term_years']:g} year{'' if data['term_years'] == 1.0 else 's'}"
    columns: list[Column] = [
        ("contract", _name, True),
        ("supplier", lambda row: ", ".join(row["suppliers"]) or "as offered now", True),
        ("a year", lambda row: money(row["total"]), True),
        ("above\nbest", lambda row: _money(row["dearer_than_best_per_year"]), True),
        ("saves on\ntoday", lambda row: _money(row["saving_per_year"]), True),
        ("changing\nover", lambda row: _money(row["switching_cost"]), True),
        ("payback\nmonths", _payback, True),
        (years, lambda row: money(row["cost_over_term"]), True),
        ("reagent\nbill", lambda row: money(row["bill_per_year"]), True),
        ("on last\nyear", lambda row: _money(row["change_of_bill_per_year"]), True),
    ]
    gone = {
        "saves on\ntoday": data["today"] is None,
        "payback\nmonths": data["today"] is None,
        "changing\nover": not any(row["switching_cost"] for row in rows),
        "on last\nyear": data["last_year_bill"] is None,
    }
    shown = [(title, cell) for title, cell, _ in columns if not gone.get(title)]
    cells = [[cell(row) for _, cell in shown] for row in rows]
    return table([title for title, _ in shown], cells, text_columns=(0, 1))


def _name(row: Data) -> str:
    return " + ".join(row["offers"]) or "no new contract"


def _money(value: float | None) -> str:
    if value is None:
        return "-"
    return money(value) if abs(value) >= 0.5 else "0"


def _payback(row: Data) -> str:
    if row["saving_per_year"] is None or row["saving_per_year"] <= 0.0:
        return "never"
    return number(row["payback_months"]) if row["payback_months"] else "0"


def _recipe(row: Data) -> list[str]:
    doses = ", ".join(
        f"{key.replace('_', ' ').replace('@', ' ')} {number(dose)}"
        for key, dose in row["doses"].items()
    )
    ph = "-" if row["ph_set_point"] is None else f"{row['ph_set_point']:.2f}"
    bought = number(row["bought_t_per_year"]) if row["offers"] else "-"
    return [_name(row), "; ".join(row["terms"]) or "-", ph, doses, bought]
