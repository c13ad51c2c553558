"""The text of an order plan, written from the dictionary that ``--json`` prints."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from optimiser.tables import PLAIN, Ink, bullets, given, money, number, paragraph, table

Data = Mapping[str, Any]

_SHOWN_GAP = 1e-3
_CAUSES = ("goods", "freight", "fees", "holding", "written_off")


def orders_text(data: Data, ink: Ink = PLAIN) -> str:
    """Write the orders by date, the year by offer, and what it all rests on.

    Parameters
    ----------
    data
        ``OrderPlan.to_dict()``.
    ink
        Colours, none by default.
    """
    site, cost = data["site"], data["cost"]
    count = sum(row["orders"] for row in data["offers"])
    orders = f"{count} order{'' if count == 1 else 's'}"
    lines = [
        ink.heading(
            f"{site['name']}: {orders}, {site['currency']} {money(cost['total'])} in "
            f"the year from {data['first_day']}"
        )
    ]
    lines += paragraph(_basis(data, site["currency"]))
    lines += ["", ink.heading("Orders by date (stock in t of product)")]
    lines += _orders(data["orders"])
    lines += ["", ink.heading("The year by offer")]
    lines += _offers(data["offers"], cost)
    if data["notes"]:
        lines += ["", ink.heading("Notes"), *bullets([f"{note}." for note in data["notes"]])]
    return "\n".join(lines) + "\n"


def _basis(data: Data, currency: str) -> str:
    cover = "the use of an offer's lead time"
    if data["least_stock_d"] > 0.0:
        cover += f", {given(data['least_stock_d'])} days at least"
    gaps = [store["gap"] for store in data["stores"] if store["gap"] is not None]
    known = len(gaps) == len(data["stores"])
    within = f"{100.0 * max([*gaps, _SHOWN_GAP]):.2g} %"
    proven = f"; no other orders save more than {within} of fees, freight and holding"
    return (
        f"For {data['demand_from']}; the use follows {data['use_from']}. Deliveries come "
        f"at the start of a week; in stock is always {cover}, and never more than the store takes. "
        f"An order costs {currency} {money(data['order_fee'])} beside its freight, stock "
        f"{given(data['holding_percent_per_year'])} % of its price a year{proven if known else ''}."
    )


def _orders(rows: Sequence[Data]) -> list[str]:
    has_lead = any(row["order_by"] != row["delivered"] for row in rows)
    has_packs = any(row["packs"] for row in rows)
    headers = [*(["order by"] if has_lead else []), "delivered", "offer", "reagent", "t", "drops"]
    headers += [*(["packs"] if has_packs else []), "goods", "freight"]
    headers += ["stock\nbefore", "stock\nafter"]
    cells = []
    for row in rows:
        cell = [row["order_by"]] if has_lead else []
        cell += [row["delivered"], row["offer"], row["reagent"].replace("_", " ")]
        cell += [number(row["ordered_t"]), str(row["drops"])]
        cell += [str(row["packs"] or "-")] if has_packs else []
        cell += [money(row["goods"]), money(row["freight"])]
        cell += [number(row["stock_before_t"]), number(row["stock_after_t"])]
        cells.append(cell)
    return table(headers, cells, text_columns=range(4 if has_lead else 3))


def _offers(rows: Sequence[Data], cost: Data) -> list[str]:
    headers = [
        "offer", "orders", "ordered\nt/year", "plan buys\nt/year", "mean\norder t",
        "at steady\nuse t", "goods", "freight", "order\nfees", "holding",
    ]  # fmt: skip
    has_waste = any(row["written_off_per_year"] for row in rows)
    headers += [*(["written\noff"] if has_waste else []), "a year"]
    causes = _CAUSES if has_waste else _CAUSES[:-1]
    cells = []
    for row in rows:
        amounts = [row[f"{cause}_per_year"] for cause in causes]
        cells.append(
            [
                row["offer"], str(row["orders"]), number(row["ordered_t_per_year"]),
                number(row["plan_bought_t_per_year"]), number(row["mean_order_t"]),
                number(row["steady_order_t"]), *(money(amount) for amount in amounts),
                money(math.fsum(amounts)),
            ]
        )  # fmt: skip
    amounts = [math.fsum(row[f"{cause}_per_year"] for row in rows) for cause in causes]
    count = str(sum(row["orders"] for row in rows))
    cells.append(["total", count, "", "", "", "", *map(money, amounts), money(cost["total"])])
    return table(headers, cells, last_is_total=True)
