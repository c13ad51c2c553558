"""The text of a trade-off, written from the same dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import PLAIN, Ink, money, number, paragraph, table

Data = Mapping[str, Any]

_COLUMNS = (
    ("tds_mg_per_l", "TDS\nmg/L", 5),
    ("sludge_wet_t_per_year", "sludge\nt wet", 4),
    ("ph_set_point", "pH set\npoint", 3),
)


def trade_off_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write a trade-off as a table with what was found to have no plan.

    Parameters
    ----------
    data
        ``TradeOff.to_dict()``.
    ink
        Colours, none by default.
    """
    against = data["against"]
    lines = [ink.heading(f"{data['site']['name']}: cost against {against['what']}")]
    if data["points"]:
        lines += _table(data)
    else:
        lines += paragraph("No plan was found at any of the values asked for.")
    for text in data["statements"]:
        lines += paragraph(f"{text[0].upper()}{text[1:]}.")
    lines += paragraph(
        "Doses in mg/L of the pure compound as fed; TDS of the mean discharge; * the plan of the "
        "site as it is."
    )
    lines += paragraph(f"How far this was searched: {data['scope']}.")
    lines += paragraph(
        f"{data['searches']} searches over {data['recipes_examined']} recipes, "
        f"{data['caps_tried']} values tried, {data['seconds']:.1f} s."
    )
    return "\n".join(lines) + "\n"


def _table(data: Data) -> list[str]:
    against = data["against"]
    shown = [entry for entry in _COLUMNS if entry[0] != against["column"]]
    first = f"{against['what'].split(' of ')[0]}\n{against['unit']}".rstrip("\n")
    headers = [
        first, f"{data['site']['currency']}\na year", "dearer\nby",
        *(header for _, header, _ in shown), "doses",
    ]  # fmt: skip
    rows = [
        [
            number(point[against["column"]], against["digits"]),
            f"{money(point['total'])}{'*' if point['is_plan'] else ' '}",
            f"{point['dearer_percent']:.1f} %",
            *(number(point.get(column), digits) for column, _, digits in shown),
            ", ".join(f"{key.replace('_', ' ')} {number(dose, 4)}"
                      for key, dose in point["doses"].items()),
        ]
        for point in data["points"]
    ]  # fmt: skip
    return table(headers, rows, text_columns=(len(headers) - 1,))
