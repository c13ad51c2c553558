"""Why no plan exists, as data and as text: the limits that clash and what stops each of them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from optimiser.errors import NoPlan
from optimiser.tables import PLAIN, Ink, bullets, given, money, number, paragraph, table

Data = Mapping[str, Any]


def no_plan_data(site_name: str, error: NoPlan, currency: str = "") -> dict[str, Any]:
    """Return what ``--json`` prints where there is no plan."""
    message, *_ = str(error).splitlines()
    return {
        "site": {"name": site_name, "currency": currency},
        "compliant": False,
        "message": message,
        "reasons": list(error.reasons),
        "clashes": [
            {name: _finite_or_none(value) for name, value in clash.items()}
            for clash in error.clashes
        ],
        "relaxations": [dict(row) for row in error.relaxations],
        "openers": [dict(row) for row in error.openers],
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
    lines += _relaxations(data, ink) + _openers(data, ink)
    return "\n".join(lines) + "\n"


def _relaxations(data: Data, ink: Ink) -> list[str]:
    """What limits would have to be loosened to, and what the plan would then cost."""
    if not data["relaxations"]:
        return []
    texts = [_relaxation(row, data["site"]["currency"]) for row in data["relaxations"]]
    return ["", ink.heading("The least loosening of limits that opens a plan"), *bullets(texts)]


def _relaxation(row: Data, currency: str) -> str:
    names = " and ".join(row["parameters"])
    if not row["opens"]:
        if row["alone"]:
            return f"{names} alone: no value of it opens a plan while the others stand."
        return f"{names} together: no loosening opens a plan; a rule stands in the way."
    values = "; ".join(
        f"{limit['parameter']}, {limit['averaging']}: {given(limit['limit'])} to "
        f"{given(limit['written'])} {limit['unit']} (least {number(limit['least'], 4)})"
        for limit in row["limits"]
    )
    which = f"{names} alone" if row["alone"] else f"together by the factor {row['factor']:.3g}"
    if row["plan"] is None:
        return f"{which}: {values}."
    return f"{which}: {values}. Then {_plan(row['plan'], currency)}."


def _plan(plan: Data, currency: str) -> str:
    doses = " + ".join(f"{_plain(key)} {number(dose)}" for key, dose in plan["doses"].items())
    at = f" at pH {plan['ph_set_point']:.2f}" if plan["ph_set_point"] is not None else ""
    text = f"{doses} mg/L{at}"
    if plan["total"] is not None:
        return f"{text} for {currency} {money(plan['total'])} a year"
    if plan.get("total_without") is not None:
        return f"{text}; all else costs {currency} {money(plan['total_without'])} a year"
    return text


def _plain(key: str) -> str:
    reagent, _, stage = key.replace("_", " ").partition("@")
    return f"{reagent} ({stage})" if stage else reagent


def _openers(data: Data, ink: Ink) -> list[str]:
    """What else would open a plan, and what was tried in vain."""
    rows = data["openers"]
    if not rows:
        return []
    currency = data["site"]["currency"]
    lines = ["", ink.heading("What else would open a plan")]
    texts = []
    for row in rows:
        if row["opens"]:
            note = f" ({row['note']})" if row["note"] else ""
            texts.append(f"{_opener(row)}: {_plan(row['plan'], currency)}{note}.")
    lines += bullets(texts) if texts else paragraph("Nothing that was tried.")
    tried = [row for row in rows if not row["opens"] and row["how"] == "polished"]
    if tried:
        named = "; ".join(f"{row['what']} (still misses by {_miss(row)})" for row in tried)
        lines += paragraph(f"Tried and not found to open one: {named}.")
    late = [str(row["what"]) for row in rows if "time limit" in row["how"]]
    if late:
        lines += paragraph(
            f"Promising after a coarse look, but the time limit came first: {', '.join(late)}."
        )
    rest = [str(row["what"]) for row in rows if row["how"].endswith("states only")]
    if rest:
        lines += paragraph(
            f"Left after a coarse look that showed others nearer: {', '.join(rest)}."
        )
    return lines


def _opener(row: Data) -> str:
    return f"{row['what']} allowed" if row["kind"] == "reagent" else str(row["what"])


def _miss(row: Data) -> str:
    miss = float(row["miss_percent"])
    if miss >= 1e4:
        return "more than 100 times its limit"
    return f"{miss:.2g} %" if miss < 100.0 else f"{miss:,.0f} %"


def _sentence(text: str) -> str:
    text = text.removeprefix("no plan: ").rstrip(":.")
    return f"{text[:1].upper()}{text[1:]}."
