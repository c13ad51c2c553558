"""The text of floors, written from the same dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import PLAIN, Ink, number, paragraph, table

Data = Mapping[str, Any]
_DOSE_DIGITS = 3


def floors_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write the lowest residuals of a site and what stops them.

    Parameters
    ----------
    data
        ``Floors.to_dict()``.
    ink
        Colours, none by default.
    """
    lines = [ink.heading(f"{data['site']}: how low each metal comes, and what stops it there")]
    lines += paragraph(
        "Lowest residual over set point and dose in the joint equilibrium of the whole feed, mg/L. "
        "Total: residual and carry-over, at least the practical floor. Target: the mean that the "
        "tightest limit leaves. Plans stand above these floors: they also hold every limit over "
        "tolerances, with gas kept and vented, and with scale formed and held back."
    )
    if not data["floors"]:
        return "\n".join([*lines, *paragraph("No metal with a limit is in this water.")]) + "\n"
    lines += ["", *table(_HEADERS, [_row(floor) for floor in data["floors"]],
                         text_columns=(0, 1, 7))]  # fmt: skip
    lines += ["", ink.heading("What stops it")]
    for floor in data["floors"]:
        whom = f"{floor['metal']}, {floor['family']}"
        solid = f" over {floor['solid']}" if floor["solid"] else ""
        text = f"{whom}{solid}: {'; '.join(floor['stops'])}."
        lines += paragraph(text, indent="    ", first="  - ")
    if data["not_in_the_water"]:
        names = ", ".join(data["not_in_the_water"])
        lines += ["", *paragraph(f"Limited but not in this water: {names}.")]
    return "\n".join(lines) + "\n"


_HEADERS = [
    "metal", "ligand", "residual", "carry-\nover", "practical\nfloor", "total", "target",
    "at doses, mg/L", "pH",
]  # fmt: skip


def _row(floor: Data) -> list[str]:
    doses = ", ".join(
        f"{name.replace('_', ' ')} {number(dose, _DOSE_DIGITS)}"
        for name, dose in floor["doses_mg_per_l"].items()
    )
    return [
        str(floor["metal"]),
        str(floor["family"]),
        number(floor["residual_mg_per_l"]),
        number(floor["carry_over_mg_per_l"]),
        number(floor["practical_floor_mg_per_l"]),
        number(floor["predicted_mg_per_l"]),
        number(floor["target_mg_per_l"]),
        doses or "nothing",
        f"{floor['ph']:.2f}",
    ]
