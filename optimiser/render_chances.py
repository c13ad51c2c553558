"""The text of chances and of a plan with confidence, written from what ``--json`` prints."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from optimiser.tables import PLAIN, Ink, bullets, given, money, number, paragraph, table

Data = Mapping[str, Any]


def chances_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write how likely a plan meets its limits.

    Parameters
    ----------
    data
        ``Chances.to_dict()``.
    ink
        Colours, none by default.
    """
    joint = data["joint"]
    lines = [
        ink.heading(
            f"{data['site']}: all limits hold together in {_percent(joint['chance'])} of "
            f"{data['draws']} draws"
        )
    ]
    lines += _body(data, ink)
    return "\n".join(lines) + "\n"


def _body(data: Data, ink: Ink) -> list[str]:
    joint, assumed = data["joint"], data["assumed"]
    lines = paragraph(
        f"The estimate lies between {_percent(joint['low'])} and {_percent(joint['high'])} (90 % "
        "interval). A limit counts as met when it holds at every corner and end of the plan, "
        "without design margin, with the variability factors of the feed."
    )
    rows = [
        [
            row["limit"], f"{given(row['value'])} {row['unit']}", number(row["predicted"]),
            number(row["median"]), number(row["percentile_95"]),
            _percent(row["chance"]), f"{_percent(row['low'])} to {_percent(row['high'])}",
        ]
        for row in sorted(data["limits"], key=lambda r: float(r["chance"]))
    ]  # fmt: skip
    headers = [
        "what",
        "limit",
        "plan",
        "median\ndraw",
        "95 % of\ndraws below",
        "chance",
        "90 %\ninterval",
    ]
    lines += ["", *table(headers, rows, text_columns=(0, 1))]
    if data["drivers"]:
        lines += ["", ink.heading("What moves the tightest limit most")]
        lines += bullets(
            [f"{d['unknown']}: {d['share_percent']:.0f} % of its spread" for d in data["drivers"]]
        )
    lines += ["", ink.heading("What was drawn")]
    lines += bullets(
        [
            f"constants: {assumed['constants']}",
            f"every analysis value {assumed['analysis_percent']:g} % (standard deviation), feed pH "
            f"{assumed['ph']:g}, solids past the separator {assumed['carried_solids_percent']:g} "
            "%: common practice, no source; `uncertainty` in the site file sets your own",
        ]
    )
    lines += bullets([assumed["jar_tests"]]) if assumed["jar_tests"] else []
    if data["unsolved_draws"]:
        lines += bullets([f"{data['unsolved_draws']} draws had no solution and count as missed"])
    return lines


def confidence_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write a plan with confidence: what it costs more and what was tightened.

    Parameters
    ----------
    data
        ``ConfidentPlan.to_dict()``.
    ink
        Colours, none by default.
    """
    sure, currency = data["confidence"], data["site"]["currency"]
    chances = sure["chances"]
    reached = "reached" if sure["reached"] else "NOT reached"
    lines = [
        ink.heading(
            f"{data['site']['name']}: {_percent(sure['wanted'])} confidence {reached}, "
            f"{_percent(chances['joint']['chance'])} in fresh draws"
        )
    ]
    lines += paragraph(
        f"The plan costs {currency} {money(data['cost']['total'])} a year, "
        f"{currency} {money(sure['extra_cost'])} more than the plan without that demand, which "
        f"held in {_percent(sure['without']['joint']['chance'])} of the draws."
    )
    if sure["stopped_by"]:
        lines += paragraph(f"Stopped: {sure['stopped_by']}.")
    doses = ", ".join(f"{key} {number(dose)} mg/L" for key, dose in data["doses"].items())
    lines += paragraph(f"Doses: {doses}.")
    changes = [
        f"{row['limit']}: planned to {_percent(row['design_margin'])} of its limit"
        for row in sure["targets"]
    ]
    tolerance = _percent(sure["dose_tolerance_fraction"])
    changes.append(f"paced doses may be off by {tolerance} to either side")
    lines += ["", ink.heading("What the plan was made for"), *bullets(changes), ""]
    lines += _body(chances, ink)
    return "\n".join(lines) + "\n"


def _percent(share: float) -> str:
    text = f"{100.0 * share:.1f}".removesuffix(".0")
    return f"{text} %"
