"""The text of curves, written from the same dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from optimiser.tables import PLAIN, Ink, given, number, paragraph, table

Data = Mapping[str, Any]
_METALS_PER_TABLE = 6
_DOSE_DIGITS = 4


def curves_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write the tables of a site's curves.

    Parameters
    ----------
    data
        ``Curves.to_dict()``.
    ink
        Colours, none by default.
    """
    lines = [ink.heading(f"{data['site']}: curves of the feed, pH {data['feed_ph']:.2f}")]
    lines += paragraph(
        "Equilibrium of the whole water, doses in mg/L of the pure compound as fed, residuals in "
        "mg/L dissolved. Carry-over, practical floors, tolerances and margins come on top: "
        "`plan` and `assess` count them."
    )
    for curve in data["curves"]:
        lines += ["", ink.heading(_title(curve)), *_curve(curve, data["metals"])]
    lines += ["", ink.heading("Alkali and acid demand: mg/L of each one alone"), *_demand(data)]
    return "\n".join(lines) + "\n"


def _title(curve: Data) -> str:
    reagent = _words(curve["reagent"])
    if curve["kind"] == "residual-versus-ph":
        return f"Residual against pH, moved with {reagent}"
    if curve["held_ph"] is None:
        return f"Residual against the dose of {reagent}"
    return f"Residual against the dose of {reagent}, pH held at {curve['held_ph']:.2f}"


def _words(reagent: str) -> str:
    return reagent.replace("_", " ")


def _curve(curve: Data, metals: Sequence[str]) -> list[str]:
    lines: list[str] = []
    blocks = range(0, max(len(metals), 1), _METALS_PER_TABLE)
    for start in blocks if curve["points"] else ():
        shown = metals[start : start + _METALS_PER_TABLE]
        rows = [
            _leading(curve, point) + [number(point["residual_mg_per_l"][name]) for name in shown]
            for point in curve["points"]
        ]
        headers = [*_leading_headers(curve), *shown]
        lines += ([""] if lines else []) + table(
            headers, rows, text_columns=(2,) if "held by" in headers else ()
        )
    if curve["unreached"]:
        what = "pH" if curve["kind"] == "residual-versus-ph" else "doses"
        lines += paragraph(f"Not reached: {what} {', '.join(map(given, curve['unreached']))}.")
    return lines


def _leading_headers(curve: Data) -> list[str]:
    if curve["kind"] == "residual-versus-ph":
        return ["pH", "dose"]
    return ["dose", "pH"] if curve["held_ph"] is None else ["dose", "to hold pH", "held by"]


def _leading(curve: Data, point: Data) -> list[str]:
    if curve["kind"] == "residual-versus-ph":
        return [f"{point['ph']:.2f}", number(point["dose_mg_per_l"], _DOSE_DIGITS)]
    dose = given(point["dose_mg_per_l"])
    if curve["held_ph"] is None:
        return [dose, f"{point['ph']:.2f}"]
    held = number(point["controller_dose_mg_per_l"], _DOSE_DIGITS)
    return [dose, held, _words(point["controller"])]


def _demand(data: Data) -> list[str]:
    rows = data["demand"]
    names = list(rows[0]["dose_mg_per_l"]) if rows else []
    if not names:
        return paragraph("This site allows no alkali or acid that a pH controller may drive.")
    cells = [
        [f"{row['ph']:.2f}", *(number(row["dose_mg_per_l"][name], _DOSE_DIGITS) for name in names)]
        for row in rows
    ]
    headers = ["pH", *("\n".join(_words(name).rsplit(" ", 1)) for name in names)]
    return [
        *table(headers, cells, text_columns=()),
        *paragraph(
            "-: on the other side of the feed, out of reach, or above the practical ceiling."
        ),
    ]
