"""Why no plan exists, as data and as text: the limits that clash and what stops each of them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from optimiser.errors import NoPlan
from optimiser.tables import PLAIN, Ink, bullets, number, paragraph, table

Data = Mapping[str, Any]


def no_plan_data(site_name: str, error: NoPlan) -> dict[str, Any]:
    """Return what ``--json`` prints where there is no plan."""
    message, *_ = str(error).splitlines()
    return {
        "site": {"name": site_name},
        "compliant": False,
        "message": message,
        "reasons": list(error.reasons),
        "clashes": [
            {name: _finite_or_none(value) for name, value in clash.items()}
            for clash in error.clashes
        ],
    }


def _finite_or_none(value: object) -> object:
    return None if isinstance(value, float) and not math.isfinite(value) else value


def no_plan_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write why no plan exists."""
    lines = [ink.bad(f"{data['site']['name']}: no plan"), *paragraph(_sentence(data["message"]))]
    rows = [
        [
            str(clash["limit"]),
            number(clash["target"]),
            number(clash["lowest_reachable"]),
            number(clash["best_compromise"]),
            str(clash["stopped_by"]),
        ]
        for clash in data["clashes"]
    ]
    if rows:
        headers = ["limit", "target", "lowest\nreachable", "nearest\nmiss", "what stops it"]
        lines += ["", *table(headers, rows, text_columns=(0, 4))]
    if data["reasons"]:
        lines += ["", *bullets(data["reasons"])]
    lines += ["", *paragraph(
        "To open a way: allow another reagent, widen the pH set-point window, raise `most_reagents`"
        " or a dose ceiling, name a better separator, or have the limit reviewed."
    )]  # fmt: skip
    return "\n".join(lines) + "\n"


def _sentence(text: str) -> str:
    text = text.removeprefix("no plan: ").rstrip(":.")
    return f"{text[:1].upper()}{text[1:]}."
