"""The text of an explanation, written from the same dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from optimiser.tables import PLAIN, Ink, bullets, given, money, number, paragraph, table

Data = Mapping[str, Any]

_SMALLEST_SHARE_PERCENT = 0.05
_MOST_SLACK = 5


def explain_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write why a plan is what it is.

    Parameters
    ----------
    data
        ``Explanation.to_dict()``.
    ink
        Colours, none by default.
    """
    plan, currency = data["plan"], data["site"]["currency"]
    lines = [ink.heading(f"{data['site']['name']}: why this plan")]
    lines += paragraph(
        f"The plan doses {_doses(plan['doses'])} mg/L and costs {currency} {money(plan['total'])} "
        "a year."
    )
    for section in (_limits, _ledger, _reagents, _offers):
        lines += ["", *section(data, ink)]
    return "\n".join(lines) + "\n"


def _limits(data: Data, ink: Ink) -> list[str]:
    currency = data["site"]["currency"]
    lines = [ink.heading(f"What binds, and what a little more costs ({currency} a year)")]
    rows = [
        [
            _limit_name(row), f"{given(row['value'])} {row['unit']}".strip(), row["change"],
            _signed(row["first_order_per_year"]), _resolved(row["resolved_per_year"]),
            _resolved(row["looser_per_year"]),
        ]
        for row in data["marginal_costs"]
    ]  # fmt: skip
    headers = ["what", "now", "change", "first\norder", "solved\nagain", "the other\nway"]
    if rows:
        lines += table(headers, rows, text_columns=(0, 1, 2))
    if not any(row["kind"] in ("limit", "burden cap") for row in data["marginal_costs"]):
        lines += paragraph("No limit binds: 1 % off any of them changes nothing near the plan.")
    lines += _slack(data["not_binding"])
    if data["also_at_its_end"]:
        lines += paragraph(f"Also at its end: {'; '.join(data['also_at_its_end'])}.")
    least = money(max(data["resolution_per_year"], 0.01))
    return lines + paragraph(
        f"All of it is {data['scope']}. Differences below {currency} {least} a year are finer than "
        "polishing goes."
    )


def _slack(rows: Sequence[Data]) -> list[str]:
    """The tightest limits that do not bind."""
    if not rows:
        return []
    named = ", ".join(
        f"{_limit_name(row)} ({number(row['below_target_percent'], 2)} % below its target)"
        for row in rows[:_MOST_SLACK]
    )
    rest = len(rows) - _MOST_SLACK
    more = f", and {rest} further below" if rest > 0 else ""
    return paragraph(f"At no cost, because they do not bind: {named}{more}.")


def _limit_name(row: Data) -> str:
    averaging = f", {row['averaging']}" if row["averaging"] else ""
    return f"{row['parameter']}{averaging}"


def _signed(value: float) -> str:
    if abs(value) < 5e-3:
        return "0"
    text = number(abs(value)) if abs(value) < 100.0 else money(abs(value))
    return f"{'+' if value > 0 else '-'}{text}"


def _resolved(value: float | None) -> str:
    return "none near" if value is None else _signed(value)


def _ledger(data: Data, ink: Ink) -> list[str]:
    lines = [ink.heading("Where each dose goes (mg/L of pure compound)")]
    rows: list[list[str]] = []
    for one in data["ledger"]:
        name = one["key"].replace("_", " ")
        rows.append([f"{name}, by {one['counted_as']}", "", number(one["dose_mg_per_l"], 4), "100"])
        small = 0.0
        for part in one["parts"]:
            if abs(part["share_percent"]) < _SMALLEST_SHARE_PERCENT:
                small += part["amount_mg_per_l"]
                continue
            rows.append(
                [
                    f"  {part['kind']}", part["use"], number(part["amount_mg_per_l"], 4),
                    f"{part['share_percent']:.1f}",
                ]
            )  # fmt: skip
        if small:
            share = 100.0 * small / one["dose_mg_per_l"]
            rows.append(["  smaller uses", "", number(small, 4), f"{share:.2f}"])
    lines += table(["dose and use", "what", "mg/L", "%"], rows, text_columns=(0, 1))
    return lines + paragraph(
        "Balance of what each reagent is bought for, between the feed and the nominal state with "
        "gas kept and scale formed; uses are shared among reagents that bring the same. Less than "
        "0 is set free there."
    )


def _reagents(data: Data, ink: Ink) -> list[str]:
    lines = [ink.heading("Why the other reagents lost")]
    if not data["reagents"]:
        return lines + paragraph("Every allowed reagent is in the plan.")
    return lines + bullets([_reagent(row, data["site"]["currency"]) for row in data["reagents"]])


def _reagent(row: Data, currency: str) -> str:
    text = f"{_names([row['reagent']])}: {row['alone']}; {row['why']}"
    if row["recipe"]:
        which = "nearest" if row["difference_per_year"] is None else "best"
        text += f" ({which} recipe with it: {_names(row['recipe'])})"
    if row["difference_per_year"] is not None:
        parts = ", ".join(
            f"{cause} {_signed(value)}"
            for cause, value in row["difference_by_cause"].items()
            if abs(value) >= 0.5
        )
        more = float(row["difference_per_year"])
        word = "more" if more >= 0.0 else "less"
        text += f". {currency} {money(abs(more))} a year {word}: {parts}"
    return f"{text}." if row["verified"] else f"{text}. Not verified further."


def _offers(data: Data, ink: Ink) -> list[str]:
    currency = data["site"]["currency"]
    lines = [ink.heading(f"Why the other offers lost, and their entry price ({currency}/t)")]
    rivals = [row for row in data["offers"] if row["allowed"]]
    others = [row for row in data["offers"] if not row["allowed"]]
    if others:
        names = ", ".join(f"{row['offer']} ({_names([row['reagent']])})" for row in others)
        lines += paragraph(f"Of reagents that the site does not allow: {names}.")
    if not rivals:
        return lines + paragraph("No other offer of an allowed reagent.")
    rows = [
        [
            row["offer"], row["reagent"].replace("_", " "), number(row["price_per_t"], 4),
            _entry(row), _bracket(row), _why(row),
        ]
        for row in rivals
    ]  # fmt: skip
    headers = ["offer", "reagent", "price\nnow", "entry\nprice", "bracket", "why it lost"]
    lines += table(headers, rows, text_columns=(0, 1, 5))
    return lines + paragraph(
        "Entry price: the price per tonne, without freight, at which the offer would be bought in "
        "the cheapest plan. At the low end of its bracket a verified plan that buys it is cheaper "
        "than this plan; at the high end none of the recipes polished again is. A bracket marked "
        "with * was not closed on both sides."
    )


def _entry(row: Data) -> str:
    return "none" if row["entry_price_per_t"] is None else number(row["entry_price_per_t"], 5)


def _bracket(row: Data) -> str:
    if row["entry_price_per_t"] is None:
        return "-"
    star = "" if row["verified"] else "*"
    return f"{number(row['bracket_low'], 5)} to {number(row['bracket_high'], 5)}{star}"


def _why(row: Data) -> str:
    free = row["at_price_0_dearer_by"]
    if row["entry_price_per_t"] is None and free is not None:
        return f"{row['why']}; not even for free: still {money(free)} a year too dear"
    if row["recipe"] and not row["in_plan"]:
        return f"{row['why']}; enters with {_names(row['recipe'])}"
    return str(row["why"])


def _names(reagents: list[str]) -> str:
    return " + ".join(name.replace("_", " ") for name in reagents)


def _doses(doses: Mapping[str, float]) -> str:
    texts = []
    for key, dose in doses.items():
        reagent, _, stage = key.replace("_", " ").partition("@")
        texts.append(f"{reagent}{f' ({stage})' if stage else ''} {number(dose, 4)}")
    return " + ".join(texts)
