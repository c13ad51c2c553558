"""Runners-up as text: doses and cost, then what each costs more and why."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import bullets, money, number, paragraph, table

Data = Mapping[str, Any]

_DOSE_DIGITS = 4


def runners_up_lines(data: Data) -> list[str]:
    """Lines of the section; none where nothing else complies."""
    currency = data["site"]["currency"]
    rows = [
        [
            str(place),
            ", ".join(
                f"{_plain(key)} {number(dose, _DOSE_DIGITS)}"
                for key, dose in other["doses"].items()
            ),
            f"{other['ph_set_point']:.2f}" if other["ph_set_point"] is not None else "-",
            money(other["total"]),
            f"{other['difference_percent']:+.1f} %",
        ]
        for place, other in enumerate(data["runners_up"], start=2)
    ]
    if not rows:
        return []
    headers = ["", "doses, mg/L pure", "pH set\npoint", f"{currency}\na year",
               "against\nthe plan"]  # fmt: skip
    lines = table(headers, rows, text_columns=(1,))
    lines += bullets(
        [
            _reason(place, other, currency)
            for place, other in enumerate(data["runners_up"], start=2)
            if "why" in other
        ]
    )
    left = data.get("runners_up_left_out", [])
    if left:
        lines += paragraph(
            f"Left out, because each is a cheaper recipe with a dose that it does not need: "
            f"{'; '.join(left)}."
        )
    return lines


def _reason(place: int, other: Data, currency: str) -> str:
    more = float(other["difference_per_year"])
    which = "more" if more >= 0.0 else "less"
    text = f"{place}: {currency} {money(abs(more))} {which}"
    text += f": {other['why']}." if other["why"] else "."
    if other["binding"]:
        return f"{text} It stands at: {'; '.join(other['binding'])}."
    return f"{text} No limit holds it."


def _plain(key: str) -> str:
    reagent, _, stage = key.replace("_", " ").partition("@")
    return f"{reagent} ({stage})" if stage else reagent
