"""The stock block of a site file: what orders and stock cost, and the flows of the months.

Owns reading that block; what is made of it is `optimiser.order_plan`.
"""

from __future__ import annotations

import math

from catalogs.entries import NON_NEGATIVE, Entry, Range, to_number
from optimiser.site import StockKeeping

MONTHS = 12
_PERCENT = Range(above=0.0, high=100.0)
_DAYS = Range(low=0.0, high=180.0)


def read_stock(entry: Entry | None) -> StockKeeping:
    """Read the block; it may be left out, and each of its keys too."""
    usual = StockKeeping()
    if entry is None:
        return usual
    found = StockKeeping(
        order_fee=entry.number_or("order_fee", usual.order_fee, NON_NEGATIVE),
        holding_percent_per_year=entry.number_or(
            "holding_percent_per_year", usual.holding_percent_per_year, _PERCENT
        ),
        least_stock_d=entry.number_or("least_stock_d", usual.least_stock_d, _DAYS),
        monthly_flow_m3_per_d=_months(entry),
    )
    entry.finish()
    return found


def _months(entry: Entry) -> tuple[float, ...]:
    key = "monthly_flow_m3_per_d"
    if not entry.has(key):
        return ()
    flows = tuple(to_number(node, spot, NON_NEGATIVE) for node, spot in entry.items(key))
    expected = "twelve flows in m3/d, from January to December"
    if len(flows) != MONTHS:
        entry.at(key).problem(
            f"{len(flows)} flows", expected, "Write one for every month, 0 where the plant rests."
        )
    elif not any(flow > 0.0 or math.isnan(flow) for flow in flows):
        entry.at(key).problem("no flow above 0", expected, "Write the flows of the months.")
    return flows
