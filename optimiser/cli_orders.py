"""The command `orders`: the order plan of a site, its table and its chart.

How a site is loaded and a result printed is handed in by `optimiser.cli`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from optimiser.cli_doses import given_doses, unknown_reagent
from optimiser.cli_process import BAD_INPUT, DONE, NO_PLAN, clear_progress, progress, say, write_csv

if TYPE_CHECKING:
    import argparse

Show = Callable[[Mapping[str, Any], bool, Callable[..., str]], None]


def run_orders(options: argparse.Namespace, load: Callable[..., Any], show: Show) -> int:
    """Plan the orders of a year, write what was asked for and print the rest."""
    import optimiser
    from optimiser.errors import refuse_existing_chart
    from optimiser.render_no_plan import no_plan_data, no_plan_text
    from optimiser.render_orders import orders_text

    refuse_existing_chart(options.chart, force=options.force)
    site = load(options)
    demand = given_doses(options.demand)
    for key in demand:
        if key.partition("@")[0] not in site.reagents:
            say(f"--demand {key}: {unknown_reagent(key.partition('@')[0], site)}")
            return BAD_INPUT
    try:
        found = optimiser.plan_orders(
            site, demand, first_day=options.first_day, progress=progress()
        )
    except optimiser.NoPlan as none:
        clear_progress()
        show(no_plan_data(site.name, none, site.currency), options.json, no_plan_text)
        return NO_PLAN
    clear_progress()
    data = found.to_dict()
    if options.csv is not None:
        write_csv(found.to_frame(), options.csv)
    if options.chart is not None:
        from optimiser.chart_orders import draw_orders

        draw_orders(data, options.chart)
    show(data, options.json, orders_text)
    return DONE
