"""The text that ``jar`` prints: tests beside theory, the factors, and where they were written."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from math import exp
from typing import Any

from optimiser.tables import INDENT, Ink, bullets, number, paragraph, table


def jar_text(data: Mapping[str, Any], ink: Ink) -> str:
    """Write jar tests beside theory and the factors that follow.

    Parameters
    ----------
    data
        ``JarResult.to_dict()`` with the place of the file under ``written``.
    ink
        Colour, or none.
    """
    count = len(data["jars"])
    lines = [f"{data['site']}: {count} jar{'' if count == 1 else 's'} of {data['results']}"]
    lines += ["", ink.heading("Tests beside theory"), *jar_table(data)]
    lines += paragraph(
        "Theory: the dissolved metal of the equilibrium at the doses and pH of the jar, at the dose"
        " factors below. Ratio: filtered over theory."
    )
    lines += ["", ink.heading("Doses"), *_dose_table(data)]
    lines += paragraph(
        "Fed: the sum of the doses that move the pH; asked for: what theory needs of them to reach"
        " the pH of the jar, as a share of what was fed."
    )
    lines += ["", ink.heading(f"Factors, {100 * data['confidence']:.0f} % intervals")]
    lines += _factor_table(data)
    for name, why in data["not_fitted"].items():
        lines += paragraph(f"{name.replace('_', ' ')}: no dose factor ({why}).")
    if data["floors_mg_per_l"]:
        shown = ", ".join(f"{m} {number(v)}" for m, v in data["floors_mg_per_l"].items())
        lines += paragraph(f"Floors that three jars or more reached, mg/L total: {shown}.")
    if data["warnings"]:
        lines += ["", ink.heading("Mind"), *bullets(data["warnings"])]
    name = data["written"].replace("\\", "/").rsplit("/", 1)[-1]
    lines += ["", f"Written: {data['written']}"]
    lines += paragraph(f"To use it, add `jar_tests: {name}` under `treatment` in the site file.")
    return "\n".join(lines) + "\n"


def jar_table(data: Mapping[str, Any]) -> list[str]:
    """One line for each metal of each jar: measured beside theory."""
    rows = []
    for jar in data["jars"]:
        for i, metal in enumerate(jar["metals"]):
            sign = "<" if metal["below_reporting_limit"] else ""
            rows.append(
                [
                    jar["test"] if i == 0 else "", f"{jar['ph']:.2f}" if i == 0 else "",
                    metal["metal"], sign + number(metal["filtered_mg_per_l"]),
                    number(metal["unfiltered_mg_per_l"]), number(metal["theory_mg_per_l"]),
                    sign + number(metal["ratio"]),
                ]
            )  # fmt: skip
    headers = ["test", "pH", "metal", "filtered\nmg/L", "unfiltered\nmg/L", "theory\nmg/L", "ratio"]
    return table(headers, rows, text_columns=(0, 2)) if rows else []


def _dose_table(data: Mapping[str, Any]) -> list[str]:
    rows = [
        [
            jar["test"], jar["day"], _doses(jar["doses_mg_per_l"]), f"{jar['ph']:.2f}",
            number(jar["theory_over_fed"]), number(jar["sludge_mg_per_l"]),
            number(jar["theory_sludge_mg_per_l"]),
        ]
        for jar in data["jars"]
    ]  # fmt: skip
    return table(
        ["test", "day", "fed, mg/L pure", "pH", "asked for\nover fed", "sludge\nmg/L",
         "theory\nmg/L"],
        rows, text_columns=(0, 1, 2),
    )  # fmt: skip


def _doses(doses: Mapping[str, float]) -> str:
    shown = [f"{name.replace('_', ' ')} {number(dose)}" for name, dose in doses.items() if dose]
    return ", ".join(shown)


def _factor_table(data: Mapping[str, Any]) -> list[str]:
    rows = [
        [kind, name.replace("_", " "), *_fit(fit)]
        for kind, fits in (("fed / reacting", data["dose_factors"]),
                           ("dissolved / theory", data["residual_factors"]))
        for name, fit in fits.items()
    ]  # fmt: skip
    if data["sludge_factor"] is not None:
        rows.append(["sludge / theory", "dry solids", *_fit(data["sludge_factor"])])
    if not rows:
        return paragraph("None could be fitted.")
    return table(
        ["factor", "of", "jars", "value", "low", "high", "scatter of\none jar"], rows,
        text_columns=(0, 1),
    )  # fmt: skip


def _fit(fit: Mapping[str, Any]) -> list[str]:
    scatter = f"x{number(exp(fit['scatter_ln']))}"
    assumed = " assumed" if fit["scatter_assumed"] else ""
    return [
        str(fit["jars"]), number(fit["factor"]), number(fit["low"]), number(fit["high"]),
        scatter + assumed,
    ]  # fmt: skip


def theory_lines(limits: Sequence[Mapping[str, Any]]) -> list[str]:
    """Residuals of a plan by theory alone, where factors of jar tests changed them."""
    theory = {
        str(limit["parameter"]): f"{number(limit['residual_by_theory'])} {limit['unit']}"
        for limit in reversed(limits)
        if limit.get("residual_by_theory", limit["residual"]) != limit["residual"]
    }
    if not theory:
        return []
    text = ", ".join(f"{name} {value}" for name, value in reversed(theory.items()))
    return paragraph(
        f"Residuals hold the factors of the jar tests; by theory alone they would be: {text}.",
        indent=INDENT * 2, first=INDENT,
    )  # fmt: skip
