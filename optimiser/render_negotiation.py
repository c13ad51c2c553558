"""The negotiation sheet: one page of text, written from the dictionary that ``--json`` prints."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from typing import Any

from optimiser.tables import PLAIN, Ink, bullets, money, number, paragraph, table

Data = Mapping[str, Any]

MOST_ROWS = 12  # offers outside the plan, and terms, that a page has room for
NOT_EXACT = (
    "Not verified where packs, bundles, frameworks or shares tie what is bought at that price: it "
    "leaves them aside, and such an offer may have to be cheaper still."
)
FAR_PERCENT = -60.0  # an offer that would have to fall further is not worth a call


def negotiation_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write what to ask each supplier.

    Parameters
    ----------
    data
        ``Negotiation.to_dict()``.
    ink
        Colours, none by default.
    """
    plan, currency = data["plan"], data["currency"]
    lines = [ink.heading(f"{data['site']}: what to ask each supplier")]
    lines += paragraph(
        f"The plan costs {currency} {money(plan['total'])} a year with "
        f"{_words(plan['reagents'])}. Prices are {currency} per tonne of product without freight; "
        "where an offer has tiers they move in proportion."
    )
    lines += ["", ink.heading("Bought: the price at which the plan would drop them")]
    lines += _bought(data["bought"], plan["reagents"])
    lines += ["", ink.heading("Not bought: the price at which they would come in")]
    lines += _not_bought(data["not_bought"])
    if not all(row["exact"] for row in (*data["bought"], *data["not_bought"])):
        lines += ["", *paragraph(NOT_EXACT)]
    if data["terms"]:
        lines += ["", ink.heading("What other terms are worth")]
        lines += _terms(data["terms"])
    lines += ["", ink.heading("What to ask")]
    lines += bullets([f"{supplier}: {'; '.join(asks)}." for supplier, asks in _asks(data).items()])
    lines += ["", *paragraph(f"Searched: {data['scope']}.")]
    return "\n".join(lines) + "\n"


def _bought(rows: Sequence[Data], recipe: Sequence[str]) -> list[str]:
    bought = {row["offer"] for row in rows}
    cells = [
        [
            row["offer"], row["supplier"], number(row["bought_t_per_year"]),
            number(row["price_per_t"], 4), _price(row["drop_out_price_per_t"]),
            _change(row["room_percent"]), _checked(row),
            _instead(row, bought, recipe),
            _money(row["without_dearer_by"]),
        ]
        for row in rows
    ]  # fmt: skip
    head = ["offer", "supplier", "bought\nt/year", "price\nnow", "drops\nout at", "room",
            "verified", "then instead", "dearer\nby"]  # fmt: skip
    return table(head, cells, text_columns=(0, 1, 7))


def _instead(row: Data, bought: Collection[str], recipe: Sequence[str]) -> str:
    """The offers that would be bought in its place, and the recipe where it is another one."""
    if row["signed"]:
        return "signed already"
    if row["without_total"] is None:
        return "no plan is known without it"
    offers = ", ".join(name for name in row["without_offers"] if name not in bought)
    if sorted(row["without_recipe"]) == sorted(recipe):
        return offers or "as now without it"
    return f"{offers or 'none'} with {_words(row['without_recipe'])}"


def _not_bought(rows: Sequence[Data]) -> list[str]:
    cells = [
        [
            row["offer"], row["supplier"], number(row["price_per_t"], 4),
            _price(row["entry_price_per_t"]), _change(row["change_percent"]), _checked(row),
            _lost(row),
        ]
        for row in rows[:MOST_ROWS]
    ]  # fmt: skip
    head = ["offer", "supplier", "price\nnow", "comes\nin at", "change", "verified", "why it lost"]
    lines = table(head, cells, text_columns=(0, 1, 6))
    if len(rows) > MOST_ROWS:
        lines += paragraph(f"{len(rows) - MOST_ROWS} more, further off, are in the --json output.")
    return lines


def _lost(row: Data) -> str:
    if row["entry_price_per_t"] is not None:
        return str(row["why"])
    dearer = row["at_price_0_dearer_by"]
    return str(row["why"]) if dearer is None else f"{row['why']}; dearer even for nothing"


def _terms(rows: Sequence[Data]) -> list[str]:
    cells = [
        [row["offer"], row["supplier"], row["term"], row["detail"], _worth(row)]
        for row in rows[:MOST_ROWS]
    ]
    head = ["offer", "supplier", "term", "if granted", "worth\na year"]
    return table(head, cells, text_columns=(0, 1, 2, 3))


def _asks(data: Data) -> dict[str, list[str]]:
    """One line for every supplier that has something to give."""
    asks: dict[str, list[str]] = {}
    for row in data["bought"]:
        if row["signed"]:
            text = f"{row['offer']}: signed already, nothing to ask until it ends"
        elif row["drop_out_price_per_t"] is None:
            text = f"{row['offer']}: no plan is known without it, look for a second source"
        else:
            text = (
                f"{row['offer']}: hold {number(row['price_per_t'], 4)}; above "
                f"{number(row['drop_out_price_per_t'], 4)} we leave"
            )
        asks.setdefault(row["supplier"], []).append(text)
    for row in data["terms"]:
        if row["worth_per_year"]:
            asks.setdefault(row["supplier"], []).append(
                f"{row['offer']}: {row['term']} ({row['detail']}) is worth up to {_worth(row)} a"
                " year to us"
            )
    for row in data["not_bought"]:
        change = row["change_percent"]
        if change is not None and FAR_PERCENT <= change < 0.0:
            asks.setdefault(row["supplier"], []).append(
                f"{row['offer']}: {_change(change)} to {number(row['entry_price_per_t'], 4)} and we"
                " buy"
            )
    return asks


def _words(names: Sequence[str]) -> str:
    return ", ".join(name.replace("_", " ") for name in names)


def _price(value: float | None) -> str:
    return "-" if value is None else number(value, 4)


def _change(value: float | None) -> str:
    return "-" if value is None else f"{value:+.1f} %"


def _checked(row: Data) -> str:
    return "yes" if row["verified"] else "no"


def _money(value: float | None) -> str:
    return "-" if value is None else money(value)


def _worth(row: Data) -> str:
    return money(row["worth_per_year"]) if row["worth_per_year"] else "nothing"
